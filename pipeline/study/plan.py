"""What a study asks of each stage, in the stages' own terms. No data is read here."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from datetime import date

from pipeline.characteristics.design import Roles
from pipeline.characteristics.outcomes import car_column
from pipeline.characteristics.recipes import Recipe, needed
from pipeline.core.design import FitOptions
from pipeline.core.results import StudyFacts
from pipeline.core.window import Window
from pipeline.inputs.files import Source
from pipeline.inputs.wanted import Wanted
from pipeline.registry import TESTS, entry
from pipeline.returns.events import EventOptions
from pipeline.returns.sessions import CalendarChange
from pipeline.study import plan_events, plan_prices, plan_returns, ready
from pipeline.study.papers import house_of
from pipeline.study.schema import Characteristic, Study
from pipeline.study.sources import source_of

PATH_DAYS = Window(-10, 10)


def sources(study: Study) -> dict[str, Source]:
    """The files of a study, by table."""
    paths = {
        "deals": study.inputs.deals,
        "prices": study.inputs.prices,
        "benchmarks": study.inputs.benchmarks,
        "candidates": study.inputs.candidates,
        "factors": study.inputs.factors,
        "peers": study.inputs.peers,
        "listings": study.inputs.listings,
        "news": study.inputs.news,
        "restricted": study.inputs.restricted,
        "rates": study.inputs.rates,
        "delistings": study.inputs.delistings,
    }
    by_year = (
        study.selection is not None
        or any(c.lag for c in study.characteristics.values())
        or plan_returns.uses_candidates(study)
    )
    return {
        table: source_of(study, table, path)
        for table, path in paths.items()
        if path is not None and (table != "candidates" or by_year)
    }


def recipes(study: Study) -> dict[str, Recipe]:
    """The study's characteristics as recipes."""
    return {name: _recipe(name, item, study) for name, item in study.characteristics.items()}


def _recipe(name: str, item: Characteristic, study: Study) -> Recipe:
    treated = Recipe(
        name,
        "column",
        lag=item.lag,
        log=item.log,
        winsorise=item.winsorise,
        standardise=item.standardise,
    )
    if item.price is not None:
        window = Window(*item.window) if item.window else study.event_time.estimation_window
        return replace(treated, source="price", measure=item.price, window=window)
    if item.indicator is not None:
        condition = item.indicator
        return replace(
            treated,
            source="indicator",
            columns=(condition.column,),
            equals=condition.equals,
            above=condition.above,
        )
    for source in ("ratio", "interaction"):
        pair = getattr(item, source)
        if pair is not None:
            return replace(treated, source=source, columns=tuple(pair))
    return replace(treated, columns=(str(item.column),))


def roles(study: Study) -> Roles | None:
    """Which variable plays which part, or None without a regression."""
    regression = study.regression
    if regression is None:
        return None
    chosen, instruments, asked = study.selection, study.instruments, study.outcome
    dates = [asked.date] if asked and asked.date else []
    return Roles(
        outcome=asked.column if asked else car_column(study.event_time.headline_window),
        outcome_label=_outcome_label(study),
        treatment=regression.treatment,
        continuous=regression.continuous,
        controls=tuple(regression.controls),
        effects=tuple(regression.fixed_effects),
        clusters=tuple(
            dict.fromkeys([*regression.clusters, *dates, *plan_events.company_clusters(study)])
        ),
        instruments=tuple(instruments.use) if instruments else (),
        also_endogenous=tuple(instruments.also_for) if instruments else (),
        selection=tuple(chosen.explained_by) if chosen else (),
        excluded=tuple(chosen.excluded) if chosen else (),
    )


def _outcome_label(study: Study) -> str:
    if study.outcome is not None:
        return ready.outcome(study).words
    return f"CAR{study.event_time.headline_window.label}"


def wanted(study: Study) -> Wanted:
    """The columns a study reads beyond the fixed ones."""
    parts = roles(study)
    alike_numbers, alike_texts = plan_returns.candidate_columns(study)
    peers = plan_returns.peers_column(study)
    if parts is None:
        currency = plan_prices.candidate_currency(study, alike_numbers)
        return Wanted((), peers, alike_numbers, (*alike_texts, *currency))
    book = recipes(study)
    past = tuple(
        name for name in needed(list(parts.numbers), book) if name in book and book[name].lag
    )
    numbers, texts = _columns([name for name in parts.numbers if name not in past], book)
    c_numbers, c_texts = _columns((*parts.selection, *parts.excluded, *past), book)
    flags, cells = _seen_by(study, numbers)
    d_numbers, d_texts = study.scrutiny.columns((*book, *numbers, *flags))
    currency = plan_prices.candidate_currency(study, (*c_numbers, *alike_numbers))
    return Wanted(
        deal_numbers=tuple(dict.fromkeys((*numbers, *flags, *d_numbers))),
        deal_texts=tuple(
            dict.fromkeys((*texts, *parts.effects, *parts.clusters, *cells, *d_texts, *peers))
        ),
        candidate_numbers=tuple(dict.fromkeys((*c_numbers, *alike_numbers))),
        candidate_texts=tuple(dict.fromkeys((*c_texts, *alike_texts, *currency))),
        candidate_extras=_columns(parts.controls, book)[0] if parts.selection else (),
    )


def _seen_by(study: Study, numbers: tuple[str, ...]) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Columns behind the bounds: the flag, and the cells that are not read as numbers anyway."""
    if study.bounds is None:
        return (), ()
    flags = (study.bounds.observed,) if study.bounds.observed else ()
    return flags, tuple(name for name in study.bounds.cells if name not in (*numbers, *flags))


def _columns(
    names: Iterable[str], book: dict[str, Recipe]
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Raw columns behind variables: numeric ones, and text ones that indicators compare."""
    numbers: list[str] = []
    texts: list[str] = []
    for name in needed(list(names), book):
        recipe = book.get(name) or Recipe(name, "column", (name,))
        if recipe.source == "interaction":
            continue
        is_text = recipe.source == "indicator" and isinstance(recipe.equals, str)
        (texts if is_text else numbers).extend(recipe.columns)
    return tuple(dict.fromkeys(numbers)), tuple(dict.fromkeys(texts))


def event_options(study: Study) -> EventOptions:
    """How events are placed and screened."""
    time = study.event_time
    return EventOptions(
        estimation=time.estimation_window,
        headline=time.headline_window,
        span=span(study),
        minimum_observations=time.minimum_observations,
        cutoff_minutes=time.cutoff_minutes,
        mask_sessions=time.mask_sessions,
        confounding_days=time.confounding_days,
        real_jumps=frozenset(time.real_jumps),
        confounding=time.confounding,
        repeats=time.repeats,
        earliest=time.day_zero == "earliest",
        longest_halt=study.screens.longest_halt,
    )


def calendar_changes(study: Study) -> dict[str, CalendarChange]:
    """The calendar changes of a study, by exchange."""
    return {
        exchange: CalendarChange(
            tuple(item.closed),
            tuple((date.fromisoformat(day), clock) for day, clock in item.closes.items()),
        )
        for exchange, item in study.calendars.items()
    }


def windows(study: Study, date_only: bool) -> tuple[Window, ...]:
    """The study's windows, the headline first.

    With announcements of an unknown time, day zero alone may miss the reaction: a window of that
    one session gets [0, +1] beside it.
    """
    listed = study.event_time.all_windows
    alone = Window(0, 0) in listed and not any(w.start <= 0 and w.end >= 1 for w in listed)
    return (*listed, Window(0, 1)) if date_only and alone else listed


def span(study: Study) -> Window:
    """The event days held: every window, and the days of the path that estimation leaves free."""
    windows = (*study.event_time.all_windows, Window(0, 1))
    path = path_days(study)
    return Window(
        min(path.start, *(window.start for window in windows)),
        max(path.end, *(window.end for window in windows)),
    )


def path_days(study: Study) -> Window:
    """The days drawn in the path."""
    first = max(PATH_DAYS.start, study.event_time.estimation_window.end + 1)
    headline = study.event_time.headline_window
    return Window(min(first, headline.start), max(PATH_DAYS.end, headline.end))


def facts(study: Study, leading_test: str, listed: tuple[Window, ...]) -> StudyFacts:
    """What the report may know of the study, the test that leads and the windows tested."""
    parts = roles(study)
    arguments = {
        "What moves the decision to bid and nothing else": study.selection,
        "What moves the feature asked about and nothing else": study.instruments,
        "Why the bounds hold": study.bounds,
        "What moves the return and not the choice": study.scrutiny.argued,
    }
    return StudyFacts(
        name=study.name,
        title=study.title,
        question=study.question,
        headline=study.event_time.headline_window,
        windows=listed,
        estimation=study.event_time.estimation_window,
        minimum_observations=study.event_time.minimum_observations,
        models=study.expected_returns.all_models,
        headline_test=leading_test,
        headline_test_reason=entry(TESTS, leading_test).why if leading_test else "",
        treatment=parts.treatment if parts else "",
        groups=(study.report.groups[0], study.report.groups[1]),
        regressors=(parts.treatment, *parts.controls) if parts else (),
        effects=parts.effects if parts else (),
        clusters=parts.clusters if parts else (),
        instruments=parts.instruments if parts else (),
        excluded=parts.excluded if parts else (),
        selection=parts.selection if parts else (),
        rationales={head: part.rationale for head, part in arguments.items() if part is not None},
        labels=labels(study),
        notes=conventions(study) if study.outcome is None else ready.conventions(study),
        level=study.level,
        currency=study.report.currency,
        seed=study.seed,
        outcome=ready.outcome(study),
        house=house_of(study.papers),
        deal_pages=study.report.deal_pages if "html" in study.report.formats else 0,
    )


def labels(study: Study) -> dict[str, str]:
    """Variable -> its words on a page."""
    made = {name: item.label for name, item in study.characteristics.items() if item.label}
    return {**made, **ready.labels(study), **study.labels}


def conventions(study: Study) -> tuple[str, ...]:
    """The conventions a reader must know, one sentence each, from the study's own values."""
    time = study.event_time
    minutes = "minute" if time.cutoff_minutes == 1 else "minutes"
    less = f", less {time.cutoff_minutes} {minutes}," if time.cutoff_minutes else ""
    return (
        f"Day zero is the first session of the listing's own exchange whose close{less} comes at "
        "or after the announcement.",
        *plan_events.date_sentences(study),
        "An announcement with a date and no time takes that date's session; the session after "
        "may hold its reaction.",
        *plan_prices.return_sentences(study),
        *plan_events.event_sentences(study),
    )


def fit_options(study: Study) -> FitOptions:
    """What the study chooses about every fit."""
    chosen = study.fit
    return FitOptions(
        level=study.level,
        covariance=chosen.covariance,
        cluster=(chosen.cluster_all or bool(plan_events.company_clusters(study)))
        and chosen.covariance == "auto",
        allow_functional_form=chosen.curvature_only,
        learner=chosen.learner,
        folds=chosen.folds,
        matches=chosen.matches,
        draws=chosen.bootstrap_draws,
        seed=study.seed,
    )
