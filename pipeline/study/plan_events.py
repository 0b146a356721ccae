"""What a study asks about events, in the stages' own terms."""

from __future__ import annotations

from collections.abc import Iterator

from pipeline.core.findings import Finding, Severity
from pipeline.inputs.wanted import DealRules
from pipeline.study.schema import Study

COMPANY = "security"
MOST_CLUSTERS = 2
CONFOUNDED = {
    "flag": "kept and flagged",
    "exclude": "left out",
    "dummy": "kept without the sessions of that news, each taken up by a dummy of its own in the "
    "windows and in estimation; news on day zero itself cannot be parted from the deal, and such "
    "a deal leaves",
}
REPEATED = {
    "keep_first": "of two deals whose headline windows meet, the first is kept",
    "merge": "deals whose headline windows meet become one event at day zero of the first, with "
    "the values summed and the features of the largest",
    "keep_all": "deals whose headline windows meet are all kept, those of one session apart, and "
    "errors are clustered by company in the regression",
}


def deal_rules(study: Study) -> DealRules:
    """What the study declares about its deal list."""
    asked = study.deal_list
    return DealRules(
        side=study.event_time.side.strip(),
        payment_shares=tuple(asked.payment_shares),
        fractions=tuple(asked.fractions),
        percents=tuple(asked.percents),
        levels={name: tuple(words) for name, words in asked.levels.items()},
        common=study.currency.common,
    )


def company_clusters(study: Study) -> tuple[str, ...]:
    """The cluster that overlapping deals of one company need, if they are all kept."""
    return (COMPANY,) if study.event_time.repeats == "keep_all" else ()


def date_sentences(study: Study) -> tuple[str, ...]:
    """Which date counts, where it is not that of the announcement."""
    if study.event_time.day_zero != "earliest":
        return ()
    return (
        "Where a deal was rumoured before it was announced, the rumour is taken for the "
        "announcement.",
    )


def _sessions(count: int) -> str:
    return f"{count} session" if count == 1 else f"{count} sessions"


def event_sentences(study: Study) -> tuple[str, ...]:
    """How repeated deals and other news are treated."""
    time = study.event_time
    news = "an earnings release" if study.inputs.news is None else "other news of its company"
    return (
        f"Sessions within {time.mask_sessions} of another deal of the company are left out of "
        f"estimation; {REPEATED[time.repeats]}.",
        f"A deal within {_sessions(time.confounding_days)} of {news} is "
        f"{CONFOUNDED[time.confounding]}.",
    )


def event_checks(study: Study, file: str) -> Iterator[Finding]:
    """How the treatment of events fits with the rest of a study."""
    time, regression = study.event_time, study.regression
    if regression is not None and time.repeats == "keep_all":
        clusters = dict.fromkeys([*regression.clusters, COMPANY])
        if len(clusters) > MOST_CLUSTERS:
            yield Finding(
                "bad_value",
                Severity.ERROR,
                file,
                got=f"clusters by {' and '.join(regression.clusters)}, and overlapping deals of "
                "one company all kept",
                expected=f"at most {MOST_CLUSTERS} dimensions, '{COMPANY}' among them",
                remedy="Take one cluster out, or keep the first of such deals.",
                column="regression.clusters",
            )
    if time.second_lines and study.inputs.listings is None:
        yield Finding(
            "bad_value",
            Severity.ERROR,
            file,
            got="nothing",
            expected="the table of listings, needed by event_time.second_lines",
            remedy="Name the file in inputs.listings, or delete event_time.second_lines.",
            column="inputs.listings",
        )
