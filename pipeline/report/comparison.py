"""The estimators side by side: one table, its reading, first stages and identification."""

from __future__ import annotations

from collections.abc import Callable

from pipeline.core.estimate import Column as Estimated
from pipeline.core.estimate import Estimate, NotApplicable, Withheld
from pipeline.core.house import INTERVAL, House
from pipeline.core.outcome import Unit
from pipeline.report.document import (
    Bullets,
    Cell,
    Column,
    Paragraph,
    Piece,
    Row,
    Statistic,
    Table,
    Text,
)
from pipeline.report.material import Material, capital, effect_digits, embedded, named, prose, taken
from pipeline.report.numerals import count, in_unit, p_value, plain, true_minus, unit_digits
from pipeline.report.wording import (
    SET_ALONE,
    STAR_WORDS,
    coefficient_cell,
    df_words,
    per_unit,
    set_cell,
    set_pieces,
    set_words,
    spoken,
)


def comparison_table(material: Material, *, full: bool = True) -> Table:
    """Columns are estimators, rows the same variables; footers say what each column is.

    ``full`` adds the facts of each fit and the tests to the footer.
    """
    columns = material.results.columns
    variables = _variables(material)
    rows = [_variable_row(material, name) for name in variables]
    footer = [*_footer(material), *(_fit_rows(columns) if full else ())]
    footer += _set_rows(columns, material.unit)
    footer += _test_rows(columns) if full else ()
    unit = per_unit(material.unit)
    headings = [Column("Variable"), *(Column(_heading(c), unit) for c in columns)]
    return Table(
        "comparison",
        prose("The estimators side by side"),
        tuple(headings),
        tuple(rows + footer),
        _notes(material),
        footer=len(rows),
    )


def _heading(column: Estimated) -> str:
    return true_minus(column.title)


def _variables(material: Material) -> list[str]:
    """The treatment, the regressors of the study, then what else an estimator has."""
    found = dict.fromkeys(name for e in material.estimates for name in e.names)
    first = [material.study.treatment, *material.study.regressors]
    known = [name for name in dict.fromkeys(first) if name in found]
    return known + [name for name in found if name not in known]


def _variable_row(material: Material, name: str) -> Row:
    cells = (_coefficient(c, name, material.unit, material.house) for c in material.results.columns)
    return (Text(_variable_words(material, name)), *cells)


def _variable_words(material: Material, name: str) -> str:
    return capital(material.study.words(name))


def _coefficient(column: Estimated, name: str, unit: Unit, house: House) -> Cell:
    if not isinstance(column, Estimate) or name not in column.names:
        return None
    term = column.term(name)
    digits = unit_digits(float(term["std_error"]), unit)
    if name == column.treatment and column.robust_set is not None:
        return set_cell(term["coefficient"], column.interval, digits, unit)
    return coefficient_cell(term, house, lambda value: in_unit(value, unit, digits))


def _footer(material: Material) -> list[Row]:
    columns = material.results.columns
    effects = dict.fromkeys(name for e in material.estimates for name in e.effects)
    clusters = dict.fromkeys(name for e in material.estimates for name in e.clusters)
    rows = [
        _row("Deals (n)", columns, lambda e: count(e.n)),
        *(
            _row(f"Clusters: {material.study.words(name)}", columns, _cluster_cell(name))
            for name in clusters
        ),
        *(
            _row(f"Fixed effects: {material.study.words(name)}", columns, _effect_cell(name))
            for name in effects
        ),
        _row("What it estimates", columns, lambda e: Text(material.in_words(e.estimand))),
        _row("Covariance", columns, lambda e: Text(material.in_words(e.covariance_name))),
        _row("Degrees of freedom", columns, lambda e: Text(df_words(e.df))),
        _row("Degrees of freedom from", columns, lambda e: Text(material.in_words(e.df_rule))),
    ]
    if material.withheld:
        rows.append((Text("No number because"), *(_reason(material, c) for c in columns)))
    return rows


def _reason(material: Material, column: Estimated) -> Cell:
    return Text(material.in_words(column.reason)) if isinstance(column, Withheld) else None


def _row(title: str, columns: tuple[Estimated, ...], cell: Callable[[Estimate], Cell]) -> Row:
    return (Text(title), *(cell(c) if isinstance(c, Estimate) else None for c in columns))


def _cluster_cell(name: str) -> Callable[[Estimate], Cell]:
    return lambda e: count(e.clusters[name], "clusters") if name in e.clusters else None


def _effect_cell(name: str) -> Callable[[Estimate], Cell]:
    return lambda e: Text("yes" if name in e.effects else "no")


def _fit_rows(columns: tuple[Estimated, ...]) -> list[Row]:
    keys = dict.fromkeys(key for c in columns if isinstance(c, Estimate) for key in c.fit)
    keys = {key: None for key in keys if "r_squared" in key}  # the rest stands in the appendix
    return [_row(spoken(key), columns, _fit_cell(key)) for key in keys]


def _fit_cell(key: str) -> Callable[[Estimate], Cell]:
    return lambda e: plain(float(e.fit[key])) if key in e.fit else None


def _set_rows(columns: tuple[Estimated, ...], unit: Unit) -> list[Row]:
    titles = set_titles(columns)
    return [_row(f"Set: {title}", columns, _set_cell(key, unit)) for key, title in titles.items()]


def set_titles(columns: tuple[Estimated, ...]) -> dict[str, str]:
    """Further confidence set -> its title: that of the test of the same key, if there is one."""
    tests = _tests(columns)
    keys = dict.fromkeys(key for c in columns if isinstance(c, Estimate) for key in c.sets)
    return {key: tests.get(key, spoken(key)) for key in keys}


def _set_cell(key: str, unit: Unit) -> Callable[[Estimate], Cell]:
    def cell(estimate: Estimate) -> Cell:
        if key not in estimate.sets:
            return None
        return Text(set_words(estimate.sets[key], effect_digits(estimate, unit), unit))

    return cell


def _tests(columns: tuple[Estimated, ...]) -> dict[str, str]:
    return {
        key: test.name
        for column in columns
        if isinstance(column, Estimate)
        for key, test in column.tests.items()
    }


def _test_rows(columns: tuple[Estimated, ...]) -> list[Row]:
    return [_row(title, columns, _test_cell(key)) for key, title in _tests(columns).items()]


def _test_cell(key: str) -> Callable[[Estimate], Cell]:
    def cell(estimate: Estimate) -> Cell:
        test = estimate.tests.get(key)
        if test is None:
            return None
        statistic = None if isinstance(test, NotApplicable) else plain(test.statistic, 2)
        if isinstance(test, NotApplicable) or statistic is None:
            return Text("no answer")
        return Statistic(statistic, p_value(test.p_value))

    return cell


def lead_cell(material: Material, column: Estimate) -> Cell:
    """The feature's coefficient in a column, as in the table."""
    return _coefficient(column, column.treatment, material.unit, material.house)


def cell_notes(material: Material) -> tuple[Paragraph, ...]:
    """What a cell holds: the outcome, the unit, what stands in brackets, and the stars."""
    outcomes = dict.fromkeys(e.outcome for e in material.estimates)
    notes = [
        prose("Explained: ", taken("; ".join(outcomes), "estimate"), ". Cells hold the change "
              "in ", taken(material.unit.words, "study"),
              " per unit of the variable; ", *_below(material),
              " A blank cell: not part of that column."),
    ]  # fmt: skip
    if material.house.stars:
        alone = SET_ALONE if _robust(material) else ""
        notes.append(prose(taken(STAR_WORDS, "convention"), alone))
    return tuple(notes)


def _notes(material: Material) -> tuple[Paragraph, ...]:
    notes = list(cell_notes(material))
    for key, title in set_titles(material.results.columns).items():
        found = dict.fromkeys(e.sets[key].method for e in material.estimates if key in e.sets)
        methods = material.in_words("; ".join(found))
        notes.append(prose("Confidence set ", taken(f"{named(title)}: {methods}", "estimate")))
    if len({e.n for e in material.estimates}) > 1:
        notes.append(prose("The columns do not stand on the same number of deals: see the row "
                           "of deals, and what each column says below."))  # fmt: skip
    return tuple(notes)


def _below(material: Material) -> tuple[Piece, ...]:
    """What stands below a coefficient, in words."""
    level = material.percent("confidence_level")
    if material.house.brackets == INTERVAL:
        return ("its ", *level, " confidence set stands below, an interval in brackets, any other "
                "set in words.")  # fmt: skip
    kept = (" Where a column's ", *level, " confidence set is not made from its standard error, "
            "the feature's cell holds that set instead.")  # fmt: skip
    what = f"its {material.house.brackets} stands below in brackets."
    return (what, *(kept if _robust(material) else ()))


def _robust(material: Material) -> bool:
    """Whether a column has a confidence set that its standard error does not make."""
    return any(e.robust_set is not None for e in material.estimates)


def reading(material: Material, *, notes: bool = True) -> Bullets:
    """How to read each column, one item a column: its number, its estimand and its notes."""
    items = [_reading(material, column, notes) for column in material.results.columns]
    return Bullets(tuple(items))


def _reading(material: Material, column: Estimated, with_notes: bool) -> Paragraph:
    if isinstance(column, Withheld):
        reason = taken(material.in_words(column.reason), "estimate")
        return prose("no number: ", reason, lead=f"{column.title}:")
    name = material.effect_name(column)
    digits = effect_digits(column, material.unit)
    notes = (taken(material.in_words(note), "estimate") for note in column.notes if with_notes)
    spaced = tuple(piece for note in notes for piece in (" ", note))
    return prose(
        taken(_variable_words(material, column.treatment), "study"),
        f" {column.claim} ", material.unit.before, material.coefficient(column),
        f"{material.unit.change} (",
        material.percent(name, "level"), " set: ", set_pieces(material, name, digits),
        "). It estimates: ", embedded(material.in_words(column.estimand), "estimate"), ".",
        spaced, lead=f"{true_minus(column.title)}:",
    )  # fmt: skip
