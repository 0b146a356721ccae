"""A page a deal: why that day, what the price did, where it stands and what hangs on it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from pipeline.core.house import ISO
from pipeline.core.results import Results
from pipeline.core.rules import rule_title
from pipeline.report.deal_names import INDEX, page_names
from pipeline.report.deal_tables import (
    characteristics_table,
    days_table,
    findings_table,
    fits_table,
    influence_table,
    ledger_table,
)
from pipeline.report.document import (
    Block,
    Column,
    Document,
    Figure,
    Key,
    Paragraph,
    Piece,
    Quote,
    Section,
    Table,
    Text,
)
from pipeline.report.house import styled
from pipeline.report.material import Material, capital, embedded, prose, taken
from pipeline.report.numerals import BP, count, in_unit, plain, show, true_minus, unit_digits
from pipeline.report.wording import window_label

Record = Mapping[str, Any]
REPORT = "../report.html"
MOST_DROPPED = 1_000


@dataclass(frozen=True, slots=True, eq=False)
class Book:
    """The frames of a run by deal, looked up once for all pages.

    ``parts`` holds, for each frame, deal -> its rows; ``names`` the page of every deal;
    ``quartiles`` the rows of that frame; ``errors`` ``std_error: target`` -> its value;
    ``drawn`` deal -> what its picture draws; ``level`` is the confidence level in words.
    """

    material: Material
    parts: Mapping[str, Mapping[str, list[Record]]]
    names: Mapping[str, str]
    quartiles: list[Record]
    errors: Mapping[str, float]
    drawn: Mapping[str, pd.DataFrame]
    level: tuple[Piece, ...]

    @classmethod
    def of(cls, results: Results, deals: Sequence[str]) -> Book:
        """The book of these deals of a run."""
        material = Material.of(results)
        frames = dict(material.frames)
        left_out = frames.get("left_out")
        if left_out is not None:
            alone = left_out[left_out["dimension"] == "deal"]
            places = alone.groupby("target").cumcount() + 1
            frames["left_out"] = alone.assign(place=places, deal=alone["group"])
        wanted = ("deals", "deal_stories", "deal_standings", "deal_days", "deal_fits", "left_out",
                  "deal_findings", "ledger")  # fmt: skip
        parts = {
            name: _by_deal(frames[name][frames[name]["deal"].isin(deals)])
            for name in wanted
            if name in frames
        }
        quartiles = _records(frames["quartiles"]) if "quartiles" in frames else []
        facts = _records(frames["picture_facts"]) if "picture_facts" in frames else []
        errors = {str(row["name"]): float(row["value"]) for row in facts}
        names = page_names(deals)
        drawn = _drawn(frames["deal_days"]) if "deal_days" in frames else {}
        level = material.percent("confidence_level")
        return cls(material, parts, names, quartiles, errors, drawn, level)

    def rows(self, frame: str, deal: str) -> list[Record]:
        """The deal's rows of a frame, none if it has no such rows."""
        return self.parts.get(frame, {}).get(deal, [])

    def row(self, frame: str, deal: str) -> Record | None:
        """The deal's one row of a frame."""
        found = self.rows(frame, deal)
        return found[0] if found else None


def _drawn(days: pd.DataFrame) -> dict[str, pd.DataFrame]:
    """Deal -> session, date, abnormal return and band in basis points; parts of one frame."""
    data = pd.DataFrame(
        {
            "session": days["day"],
            "date": days["date"],
            "abnormal_bp": days["abnormal_return"] * BP,
            "band_bp": days["reach"] * BP,
        }
    )
    deals = days["deal"].to_numpy(dtype=object)
    changes = [at for at in range(1, len(deals)) if deals[at] != deals[at - 1]]
    starts = [0, *changes] if len(deals) else []
    ends = [*starts[1:], len(deals)]
    return {str(deals[a]): data.iloc[a:b] for a, b in zip(starts, ends, strict=True)}


def _by_deal(frame: pd.DataFrame) -> dict[str, list[Record]]:
    found: dict[str, list[Record]] = {}
    for row in _records(frame):
        found.setdefault(str(row["deal"]), []).append(row)
    return found


def _records(frame: pd.DataFrame) -> list[Record]:
    names = [str(name) for name in frame.columns]
    columns = (frame[name].tolist() for name in frame.columns)
    return [dict(zip(names, row, strict=True)) for row in zip(*columns, strict=True)]


def documents(results: Results, most: int) -> Iterator[tuple[str, Document]]:
    """(name, page) of the list of deals and of the first ``most`` of them."""
    deals = results.deals["deal"].astype(str).tolist()
    written = deals[:most]
    if not written:
        return
    book = Book.of(results, written)
    yield INDEX, _index(book, len(deals))
    for at, deal in enumerate(written):
        before = written[at - 1] if at else ""
        after = written[at + 1] if at + 1 < len(written) else ""
        yield book.names[deal], document(book, deal, before, after)


def document(book: Book, deal: str, before: str = "", after: str = "") -> Document:
    """The page of one deal; ``before`` and ``after`` are the deals its links lead to."""
    row = book.row("deals", deal) or {}
    where = " on ".join(str(row[key]) for key in ("security", "exchange") if _told(row.get(key)))
    sections = (
        _day_section(book, deal, row),
        _reaction_section(book, deal, row),
        _section("Beside the other deals",
                 characteristics_table(book.material, row, book.quartiles)),
        _section("What each column makes of it",
                 fits_table(book.material, book.rows("deal_fits", deal))),
        _section("What the answer would be without it",
                 influence_table(book.material, book.rows("left_out", deal), book.errors)),
        _section("What was done and found",
                 ledger_table(book.rows("ledger", deal)),
                 findings_table(book.rows("deal_findings", deal))),
    )  # fmt: skip
    ways = [("All deals", f"{INDEX}.html"), ("Report", REPORT)]
    ways += [(f"Before: {before}", f"{book.names[before]}.html")] if before else []
    ways += [(f"Next: {after}", f"{book.names[after]}.html")] if after else []
    title = f"{deal}: {where}" if where else deal
    kept = tuple(section for section in sections if section is not None)
    return _shown(book, title, kept, tuple(ways))


def _shown(
    book: Book, title: str, sections: tuple[Section, ...], ways: tuple[tuple[str, str], ...]
) -> Document:
    """A page in the house's style; its logo stays with the report, or it would be copied often."""
    study = book.material.study
    made = Document(title, study.title, sections, replace(study.house, logo=None), ways=ways)
    return made if study.house.dates == ISO else styled(made)


def _section(heading: str, *blocks: Block | None) -> Section | None:
    kept = tuple(block for block in blocks if block is not None)
    return Section(heading, kept) if kept else None


def _told(value: object) -> bool:
    return value is not None and value == value and str(value) not in ("", "NaT", "None", "nan")


def _day_section(book: Book, deal: str, row: Record) -> Section | None:
    if not _told(row.get("day_zero_reason")):
        return None
    stamp = taken(str(row.get("announced_local", "")), "deal list")
    blocks: list[Block] = [
        prose("Announced ", stamp, " (", taken(str(row["timing"]), "deal list"), "). ",
              embedded(str(row["day_zero_reason"]), "deal list"), ". Session zero is ",
              taken(str(row["day_zero"])[:10], "deal list"), "."),
    ]  # fmt: skip
    story = book.row("deal_stories", deal)
    if story is not None:
        blocks.append(_estimation(story))
    return Section("Why that day", tuple(blocks))


def _quoted(row: Record, table: str, column: str, *, scale: float = 1.0, digits: int = 0,
            signed: bool = False, **where: Key) -> Quote:  # fmt: skip
    value = float(row[column])
    text = show(value * scale, digits, signed=signed)
    picked = (("deal", str(row["deal"])), *where.items())
    return Quote(text, value, table, column, picked, scale, digits)


def _estimation(story: Record) -> Paragraph:
    used, every = (_quoted(story, "deal_stories", name) for name in ("observations", "sessions"))
    missing = int(every.value - used.value)
    gap = " None is missing." if not missing else (
        " The others have no return, or are set aside because other news or another deal of the "
        "company falls on them."
    )  # fmt: skip
    return prose(
        "What to expect of the share was estimated on ", used, " of the ", every,
        " sessions from ", taken(str(story["estimation_first"]), "prices"), " to ",
        taken(str(story["estimation_last"]), "prices"), ".", gap, " On such a session its abnormal "
        "return has a standard deviation of ",
        _quoted(story, "deal_stories", "residual_sd", scale=BP), " bp.",
    )  # fmt: skip


def _reaction_section(book: Book, deal: str, row: Record) -> Section | None:
    if book.material.ready:
        return _standing_section(book, deal)
    story = book.row("deal_stories", deal)
    if story is None:
        return None
    study = book.material.study
    words = prose(
        "Over sessions ", taken(window_label(study.headline.label), "study"),
        " its abnormal return was ", _quoted(story, "deal_stories", "car", scale=BP), " bp, rank ",
        _quoted(story, "deal_stories", "rank"), " of ", _quoted(story, "deal_stories", "deals"),
        " (the first is the largest). Its own ", book.level, " interval, from how much this "
        "share moves on other days, runs from ",
        _quoted(story, "deal_stories", "ci_low", scale=BP), " to ",
        _quoted(story, "deal_stories", "ci_high", scale=BP), " bp. In units of its own standard "
        "deviation it is ", _quoted(story, "deal_stories", "scar", digits=2), ", rank ",
        _quoted(story, "deal_stories", "rank_standardised"), ". One deal’s interval speaks of that "
        "deal alone.",
    )  # fmt: skip
    days = book.rows("deal_days", deal)
    figure = days_figure(book, story, days)
    return Section("What the price did", (words, figure, days_table(days, study.house.dates)))


def days_figure(book: Book, story: Record, days: list[Record]) -> Figure:
    """The abnormal return of each session against its band."""
    outside = _quoted(story, "deal_stories", "outside")
    traded = _quoted(story, "deal_stories", "traded")
    known = [day for day in days if math.isfinite(day["abnormal_return"])]
    most = max(known, key=lambda day: abs(day["abnormal_return"]), default=None)
    largest: tuple[Any, ...] = ()
    if most is not None:
        at: dict[str, Any] = {"day": int(most["day"])}
        largest = (
            "; the largest is ",
            _quoted(most, "deal_days", "abnormal_return", scale=BP, **at),
            " bp on session ", _quoted(most, "deal_days", "day", signed=True, **at),
        )  # fmt: skip
    title = prose(outside, " of ", traded, " sessions lie outside their band", *largest)
    caption = prose(
        "The abnormal return of each session in basis points. The band holds what this share does "
        "on ", book.level, " of sessions without news; a filled square "
        "is outside it. The grey strip is the headline window.",
    )  # fmt: skip
    alt = f"Dots of {len(days)} abnormal returns with a band around zero; the table holds each."
    window = book.material.study.headline
    marks = {"from": float(window.start), "to": float(window.end)}
    data = book.drawn[str(story["deal"])]
    return Figure("days", "days", title, caption, alt, data, marks, unit="")


def _standing_section(book: Book, deal: str) -> Section | None:
    story = book.row("deal_standings", deal)
    if story is None:
        return None
    unit = book.material.unit
    digits = unit_digits(abs(float(story["value"])) / 10 or 1.0, unit)
    value = _quoted(story, "deal_standings", "value", scale=unit.scale, digits=digits)
    interval: tuple[Any, ...] = ()
    if np.isfinite(float(story["ci_low"])):
        ends = [_quoted(story, "deal_standings", end, scale=unit.scale, digits=digits)
                for end in ("ci_low", "ci_high")]  # fmt: skip
        interval = (", its own interval from its known error ", unit.before, ends[0], " to ",
                    unit.before, ends[1], unit.level)  # fmt: skip
    words = prose(
        capital(book.material.outcome), " ", unit.before, value, unit.level, *interval, "; rank ",
        _quoted(story, "deal_standings", "rank"), " of ",
        _quoted(story, "deal_standings", "deals"), "; the first is the largest.",
    )  # fmt: skip
    return Section("The outcome", (words,))


def _index(book: Book, every: int) -> Document:
    """Deals with a link to each page, of ``every`` one measured; and those dropped, with why."""
    material = book.material
    blocks: list[Block | None] = [_list_table(book), _dropped_table(material)]
    if len(book.names) < every:
        blocks.insert(0, prose(
            "Pages were made for the first ", taken(f"{len(book.names):,}", "study"),
            " deals. That of any other deal: dealwake deal STUDY ID --page FILE.",
        ))  # fmt: skip
    kept = tuple(block for block in blocks if block is not None)
    ways = (("Report", REPORT),)
    return _shown(book, "All deals", (Section("Deals", kept),), ways)


def _list_table(book: Book) -> Table:
    unit, ready = book.material.unit, book.material.ready
    frame, column = ("deal_standings", "value") if ready else ("deal_stories", "car")
    columns = (
        Column("Deal"), Column("Company"), Column("Exchange"), Column("Day zero"),
        Column(capital(book.material.outcome), unit.short), Column("Rank", "1 the largest"),
        Column("Standardised"),
    )  # fmt: skip
    rows = []
    for deal, name in book.names.items():
        row, story = book.row("deals", deal) or {}, book.row(frame, deal) or {}
        told = [str(row[key])[:40] if _told(row.get(key)) else "" for key in
                ("security", "exchange", "day_zero")]  # fmt: skip
        rows.append(
            (
                Text(deal, f"{name}.html"), Text(told[0]), Text(told[1]), Text(told[2][:10]),
                in_unit(float(story.get(column, np.nan)), unit),
                count(int(story["rank"])) if "rank" in story else None,
                plain(float(story["scar"]), 2) if "scar" in story else None,
            )
        )  # fmt: skip
    return Table("list", prose("Deals that were measured"), columns, tuple(rows))


def _dropped_table(material: Material) -> Table | None:
    frame = material.frames["ledger"]
    frame = frame[frame["action"] == "dropped"].head(MOST_DROPPED)
    if frame.empty:
        return None
    columns = (Column("Deal"), Column("Stage"), Column("Because", prose=True), Column("Value"))
    rows = tuple(
        (Text(str(row["deal"])), Text(str(row["stage"])), Text(rule_title(str(row["rule"]))),
         Text(true_minus(str(row["value"]))))
        for row in frame.to_dict("records")
    )  # fmt: skip
    return Table("dropped", prose("Deals that were dropped, and why"), columns, rows)
