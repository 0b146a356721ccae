"""How the committee's papers look: the house's style, which moves no number."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

from pydantic import Field, field_validator

from pipeline.core.findings import Finding, InputProblem
from pipeline.core.house import AMOUNT, House, Reviewer
from pipeline.inputs.logo import read_logo
from pipeline.study.part import Part


class Signatory(Part):
    """Who signs the papers, and as what."""

    name: str = Field(min_length=1, max_length=120)
    role: str = Field(min_length=1, max_length=120)


class Papers(Part):
    """The house's style."""

    stars: bool = Field(
        False,
        description="Mark p-values under 10%, 5% and 1% with *, ** and ***. A column whose "
        "confidence set is not made from its standard error is never marked.",
    )
    brackets: Literal["interval", "t value", "standard error"] = Field(
        "interval",
        description="What stands in brackets under a coefficient: 'interval', 't value' or "
        "'standard error'.",
    )
    decimals: int | None = Field(
        None,
        ge=0,
        le=6,
        description="Most decimals of amounts of the outcome; that of its unit if absent. Never "
        "more are shown than two digits of the standard error.",
    )
    money: str = Field(
        "",
        max_length=40,
        description="How amounts of money are shown, the amount where {} stands: 'US$ {} m'; as in "
        "report.currency if absent.",
    )
    dates: Literal["iso", "english", "american", "german", "french"] = Field(
        "iso",
        description="How dates are shown: 'iso' (2024-03-08), 'english' (8 March 2024), 'american' "
        "(March 8, 2024), 'german' (8. März 2024) or 'french' (8 mars 2024).",
    )
    footer: str = Field(
        "",
        max_length=200,
        description="Words at the foot of every page and sheet, such as 'Confidential'.",
    )
    page: Literal["A4", "Letter"] = Field("A4", description="Size of the paper: 'A4', 'Letter'.")
    logo: Path | None = Field(
        None, description="Your sign: a file ending in .png, .jpg, .jpeg or .svg, at most 2 MB."
    )
    reviewers: list[Signatory] = Field(
        default_factory=list,
        max_length=12,
        description="Who signs: [{ name = 'A. Reader', role = 'Head of risk' }].",
    )

    @field_validator("money")
    @classmethod
    def _one_amount(cls, value: str) -> str:
        words = value.replace(AMOUNT, "", 1)
        if value and (AMOUNT not in value or "{" in words or "}" in words or not words.strip()):
            raise ValueError("must hold {} once, where the amount stands, and a currency beside it")
        return value


def papers_checks(papers: Papers) -> tuple[Finding, ...]:
    """Whether the logo can be shown."""
    try:
        house_of(papers)
    except InputProblem as fault:
        return tuple(fault.findings)
    return ()


def house_of(papers: Papers) -> House:
    """The style as the documents know it.

    Raises:
        InputProblem: if the logo is not there or no picture that can be shown.
    """
    return House(
        stars=papers.stars,
        brackets=papers.brackets,
        decimals=papers.decimals,
        money=papers.money,
        dates=papers.dates,
        footer=papers.footer.strip(),
        page=papers.page,
        logo=read_logo(papers.logo) if papers.logo else None,
        reviewers=tuple(Reviewer(person.name, person.role) for person in papers.reviewers),
    )
