"""Is the reaction real: the average path, the spread over deals, windows and their tests."""

from __future__ import annotations

import math

from pipeline.core.estimate import NotApplicable, TestResult
from pipeline.core.results import WindowTests
from pipeline.report.document import (
    Block,
    Cell,
    Column,
    Interval,
    Paragraph,
    Section,
    Statistic,
    Table,
    Text,
)
from pipeline.report.finding import agreement_sentence, reaction_sentence
from pipeline.report.graphs import distribution_figure, path_figure
from pipeline.report.material import Material, embedded, prose, taken
from pipeline.report.numerals import BP, bp, bp_digits, count, p_value, percent, plain
from pipeline.report.proof import proof_blocks
from pipeline.report.several_windows import several_windows_table
from pipeline.report.wording import distribution_words, level_words, window_label


def reaction_section(material: Material) -> Section:
    """Figures of the path and of the spread, and the tables of windows and tests."""
    opening = prose(reaction_sentence(material), agreement_sentence(material))
    figures = [path_figure(material), distribution_figure(material)]
    tables = [
        windows_table(material),
        several_windows_table(material),
        tests_table(material, models(material)[0]),
    ]
    blocks: list[Block] = [opening, *(part for part in (*figures, *tables) if part is not None)]
    more = (averages_table(material), groups_table(material))
    after = [*(t for t in more if t.rows), assumptions_table(material), *proof_blocks(material)]
    return Section("Is the reaction real", (*blocks, *after))


def averages_table(material: Material) -> Table:
    """The headline reaction under other averages."""
    level = level_words(material.study.level)
    columns = (
        Column("Average"), Column("Deals", "n"), Column(f"Mean with {level} interval", "bp"),
        Column("What it says", prose=True),
    )  # fmt: skip
    frame = material.results.averages
    low, high = material.tests.interval
    digits = bp_digits(BP * (high - low) / 4, material.unit.decimals)
    rows = tuple(
        (
            Text(str(row["average"])), count(int(row["n"])),
            Interval(
                bp(float(row["value"]), digits), bp(float(row["ci_low"]), digits),
                bp(float(row["ci_high"]), digits),
            ),
            Text(str(row["meaning"])),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    note = prose("An average in percent and one in money can differ in sign: a few large deals "
                 "may lose what many small ones gain. Deals are taken as independent.")  # fmt: skip
    return Table("averages", prose("The reaction under other averages"), columns, rows, (note,))


def groups_table(material: Material) -> Table:
    """One group of deals against the other, before anything is held fixed."""
    columns = (
        Column("Test"), Column("Deals", "n"), Column("Difference", "bp"), Column("Statistic"),
        Column("p"), Column("Source", prose=True),
    )  # fmt: skip
    frame = material.results.groups
    rows = tuple(
        (
            Text(str(row["test"])), count(int(row["n_first"] + row["n_second"])),
            bp(float(row["difference"])) if "standardised" not in str(row["test"]) else None,
            plain(float(row["statistic"]), 2), p_value(float(row["p_value"])),
            Text(str(row["source"])),
        )
        for _, row in frame.iterrows()
    )  # fmt: skip
    words = material.study.groups
    title = prose("Deals ", embedded(words[1], "study"), " against deals ",
                  embedded(words[0], "study"))  # fmt: skip
    note = prose("Nothing is held fixed here; deals of one date are taken as independent. The "
                 "difference of the last test is that of the medians.")  # fmt: skip
    return Table("groups", title, columns, rows, (note,))


def other_models_section(material: Material) -> Section | None:
    """Windows and tests under the other expected-return models; None without one."""
    others = models(material)[1:]
    if not others:
        return None
    tables = [windows_table(material, others), *(tests_table(material, m) for m in others)]
    return Section("Other expected-return models", tuple(tables), 3)


def models(material: Material) -> tuple[str, ...]:
    """The expected-return models that were tested, the headline one first."""
    return tuple(dict.fromkeys(entry.model for entry in material.results.window_tests))


def windows_table(material: Material, which: tuple[str, ...] = ()) -> Table:
    """One row a window and expected-return model, of the headline model unless others are named."""
    chosen = which or models(material)[:1]
    level = level_words(material.study.level)
    columns = (
        Column("Window", "sessions"), Column("Expected return"), Column("Declared as"),
        Column("Deals", "n"), Column(f"Mean with {level} interval", "bp"), Column("Median", "bp"),
        Column("Standard deviation", "bp"), Column("Share above zero", "%"),
    )  # fmt: skip
    entries = [entry for entry in material.results.window_tests if entry.model in chosen]
    rows = tuple(_window_row(material, entry) for entry in entries)
    notes = (
        prose("Cumulative abnormal returns, in basis points of the share price, over the sessions "
              "stated, counted from the session that could first react."),
        prose("The headline window and model were declared before looking; the others are "
              "secondary."),
    )  # fmt: skip
    name = "windows_other_models" if which else "windows"
    return Table(name, prose("The reaction by window"), columns, rows, notes)


def is_headline(material: Material, entry: WindowTests) -> bool:
    """Whether an entry is the one declared before looking."""
    return entry is material.tests


def _declared(material: Material, entry: WindowTests) -> str:
    if is_headline(material, entry):
        return "headline"
    return "other model" if entry.window == material.study.headline else "secondary"


def _window_row(material: Material, entry: WindowTests) -> tuple[Cell, ...]:
    low, high = entry.interval
    digits = bp_digits(BP * (high - low) / 4, material.unit.decimals)
    return (
        Text(window_label(entry.window.label)),
        Text(material.study.words(entry.model)),
        Text(_declared(material, entry)),
        count(entry.n),
        Interval(bp(entry.mean, digits), bp(low, digits), bp(high, digits)),
        bp(entry.median, digits),
        bp(entry.std_dev),
        percent(entry.share_positive),
    )


def tests_table(material: Material, model: str) -> Table:
    """One row a test and one column a window, under one expected-return model."""
    entries = [entry for entry in material.results.window_tests if entry.model == model]
    titles = test_titles(entries)
    columns = [Column("Test"), Column("Holds here")]
    for entry in entries:
        mark = ", headline" if is_headline(material, entry) else ""
        columns.append(Column(f"{window_label(entry.window.label)}{mark}", "statistic, p"))
    rows = tuple(
        (Text(title), _holds_cell(entries[0], key), *(_test_cell(entry, key) for entry in entries))
        for key, title in titles.items()
        if any(isinstance(entry.tests.get(key), TestResult) for entry in entries)
    )
    title = prose("Tests of a zero mean, ", taken(material.study.words(model), "study"))
    name = "tests" if model == models(material)[0] else f"tests_{model}"
    return Table(name, title, tuple(columns), rows, _test_notes(material, entries))


def holds(test: TestResult) -> Text:
    """Whether a test holds in this sample, and if not why."""
    return Text(f"no: {test.doubt}" if test.doubt else "yes")


def test_titles(entries: list[WindowTests]) -> dict[str, str]:
    """Test key -> its title, in the order met."""
    return {key: test.name for entry in entries for key, test in entry.tests.items()}


def _holds_cell(entry: WindowTests, key: str) -> Cell:
    test = entry.tests.get(key)
    return Text("no" if test.doubt else "yes") if isinstance(test, TestResult) else None


def _test_cell(entry: WindowTests, key: str) -> Cell:
    test = entry.tests.get(key)
    if test is None:
        return None
    if isinstance(test, NotApplicable):
        return Text("no answer")
    statistic = plain(test.statistic, 2)
    if statistic is None:
        return Text("no answer")
    return Statistic(statistic, p_value(test.p_value), p_value(entry.p_holm.get(key, math.nan)))


def _test_notes(material: Material, entries: list[WindowTests]) -> tuple[Paragraph, ...]:
    notes = [
        prose("Each cell: the statistic, its p-value, and the p-value adjusted for the number of "
              "secondary windows (Holm) where there is one. All p-values are two-sided. Whether a "
              "test holds is told of the first window; a test that does not hold has no say in the "
              "finding.")
    ]  # fmt: skip
    silent: dict[tuple[str, str], list[str]] = {}
    for entry in entries:
        for test in entry.tests.values():
            if isinstance(test, NotApplicable):
                label = window_label(entry.window.label)
                silent.setdefault((test.name, test.reason), []).append(label)
    for (name, reason), windows in silent.items():
        where = "" if len(windows) == len(entries) else f", {' '.join(windows)}"
        notes.append(prose("No answer: ", taken(f"{name}{where}: {reason}", "test")))
    return tuple(notes)


def assumptions_table(material: Material) -> Table:
    """What each test supposes: its null, its distribution in the headline window, its caution."""
    columns = (
        Column("Test"), Column("Null hypothesis", prose=True), Column("Distribution"),
        Column("Holds in this sample", prose=True),
        Column("Where it does not hold", prose=True), Column("Source", prose=True),
    )  # fmt: skip
    made = [t for t in material.tests.tests.values() if isinstance(t, TestResult)]
    rows = tuple(
        (
            Text(t.name),
            Text(t.null),
            Text(distribution_words(t)),
            holds(t),
            Text(t.caution),
            Text(t.citation),
        )
        for t in made
    )
    return Table("test_assumptions", prose("What each test supposes"), columns, rows)
