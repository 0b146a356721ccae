"""What the cells of a column show, and what the draft does when they do not tell.

Check digits: three securities' codes as worked examples of ISO 6166 print them (from memory), and
``tests/reference/identifiers.json``. Exchange codes: the registry of ISO 10383.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from pipeline.core.findings import InputProblem
from pipeline.drafting.history import History, windows_of
from pipeline.drafting.likeness import EXACT, PARTLY, likeness
from pipeline.drafting.lines import toml
from pipeline.drafting.make import Draft, draft
from pipeline.drafting.signs import signs_of
from pipeline.flow.drafted import drafted
from pipeline.inputs.codes import is_isin
from pipeline.study.load import load_study
from tests.small import write_small_study

PUBLISHED_ISIN = ["AU0000XVGZA3", "US0378331005", "GB0002634946"]
MICS = ["XNYS", "XLON", "XETR", "XTKS"]


@pytest.mark.parametrize("code", PUBLISHED_ISIN)
def test_published_check_digits_hold_and_no_other_digit_does(code: str) -> None:
    assert is_isin(code)
    others = [code[:-1] + str(digit) for digit in range(10) if str(digit) != code[-1]]
    assert not any(map(is_isin, others))


@pytest.mark.parametrize(
    ("cells", "code"),
    [
        (PUBLISHED_ISIN, "isin"),
        (MICS, "exchange"),
        (["USD", "EUR", "JPY"], "currency"),
        (["Europe/London", "Asia/Tokyo"], "zone"),
        (["US0378331000", "GB0002634940"], ""),
        (["NYSE", "LSE"], ""),
    ],
)
def test_codes_are_proved_by_their_cells(cells: list[str], code: str) -> None:
    assert signs_of("whatever", pd.Series(cells)).code == code


DATES: dict[str, tuple[list[str], str, int, str]] = {
    "iso": (["2021-03-01", "2021-03-02"], "", 0, ""),
    "day first": (["13/02/2021", "01/03/2021"], "%d/%m/%Y", 0, ""),
    "month first, dots": (["02.13.2021", "03.01.2021"], "%m.%d.%Y", 0, ""),
    "day first with a clock": (["13/02/2021 17:45", "01/03/2021 08:00"], "%d/%m/%Y %H:%M", 0, ""),
    "year first": (["2021/02/13", "2021/03/01"], "%Y/%m/%d", 0, ""),
    "without marks": (["20210213", "20210301"], "%Y%m%d", 0, ""),
    "in words": (["13 Feb 2021", "1 Mar 2021"], "%d %b %Y", 0, ""),
    "either way": (["01/02/2021", "03/04/2021"], "", 2, ""),
    "counted by a spreadsheet": (["44240", "44256"], "", 2, ""),
    "two digits": (["13/02/21", "01/03/21"], "", 0, "a year of two digits"),
    "both ways": (["13/02/2021", "02/13/2021"], "", 0, "several formats in one column"),
}


@pytest.mark.parametrize("name", DATES)
def test_dates_are_read_or_left_open(name: str) -> None:
    cells, declared, choices, trouble = DATES[name]
    signs = signs_of("announcement date", pd.Series(cells))
    assert signs.kind == "date"
    assert signs.dating.declared == declared
    assert len(signs.dating.open) == choices
    assert signs.dating.trouble.startswith(trouble)
    assert bool(signs.dating.trouble) == bool(trouble)


def test_numbers_that_readers_refuse_are_said() -> None:
    assert signs_of("v", pd.Series(["1,5", "2,25"])).trouble == "numbers with a decimal comma"
    assert "signs or words" in signs_of("v", pd.Series(["$1.2bn", "300m"])).trouble
    assert signs_of("v", pd.Series(["1.5", "2"])).kind == "number"


def test_names_are_a_second_witness() -> None:
    assert likeness("AnnDate", ["ann date"]) == EXACT
    assert likeness("first_announcement_date", ["announcement date"]) == PARTLY
    assert likeness("industry", ["date"]) == 0


def test_toml_values_read_back() -> None:
    import tomllib

    value = {"column": 'a "quoted" one', "equals": 1.5}
    assert tomllib.loads(f"x = {toml(value)}")["x"] == value
    assert tomllib.loads(f"x = {toml([[0, 1], [-2, 2]])}")["x"] == [[0, 1], [-2, 2]]


@pytest.mark.parametrize(
    ("before", "estimation", "minimum"),
    [(500, (-250, -31), 120), (200, (-199, -31), 120), (69, (-68, -11), 46)],
)
def test_windows_follow_the_history(before: int, estimation: tuple[int, int], minimum: int) -> None:
    windows = windows_of(History(before, 30, 50, 50, 1.0))
    assert windows is not None
    assert (windows.estimation, windows.minimum) == (estimation, minimum)
    assert all(start > estimation[1] for start, _ in windows.secondary)


def test_no_window_without_thirty_returns() -> None:
    assert windows_of(History(40, 30, 50, 50, 1.0)) is None


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_small_study(tmp_path / "mine").unlink()
    return tmp_path / "mine"


def change(folder: Path, table: str, how: Callable[[pd.DataFrame], pd.DataFrame]) -> None:
    path = folder / f"{table}.csv"
    how(pd.read_csv(path, dtype=str)).to_csv(path, index=False)


def made(folder: Path, **answers: object) -> Draft:
    keys = {key.replace("__", "."): value for key, value in answers.items()}
    return draft(folder, folder / "study.toml", keys)


def value(found: Draft, path: str) -> object:
    (line,) = [line for line in found.lines if line.path == path]
    return line.value


def test_names_that_say_nothing_leave_the_cells_to_speak(folder: Path) -> None:
    blank = {"date": "f2", "close": "f3", "security": "f1", "volume": "f4"}
    change(folder, "prices", lambda table: table.rename(columns=blank))
    change(folder, "benchmarks", lambda t: t.rename(columns={"date": "x", "exchange": "y"}))
    found = made(folder)
    assert value(found, "inputs.columns.prices.date") == "f2"
    assert value(found, "inputs.columns.prices.security") == "f1"
    assert value(found, "inputs.columns.benchmarks.exchange") == "y"
    # Closes and volumes are both positive numbers: the guess is marked, never silent.
    close = next(line for line in found.lines if line.path == "inputs.columns.prices.close")
    assert close.doubtful


def test_dates_that_read_both_ways_are_asked_and_the_answer_is_used(folder: Path) -> None:
    def both(table: pd.DataFrame) -> pd.DataFrame:
        days = pd.to_datetime(table["announced_at"])
        days = days.map(lambda day: day.replace(day=min(day.day, 12)))
        return table.assign(announced_at=days.dt.strftime("%d/%m/%Y"))

    change(folder, "deals", both)
    found = made(folder)
    (asked,) = [line for line in found.questions if line.path == "inputs.date_format"]
    assert "'%d/%m/%Y' or '%m/%d/%Y'" in asked.reason
    assert not any(line.section == "event_time" for line in found.lines)
    found = made(folder, inputs__date_format="%d/%m/%Y")
    assert value(found, "inputs.date_format") == "%d/%m/%Y"
    assert value(found, "event_time.headline") == [-1, 1]


def test_prices_as_returns_in_percent(folder: Path) -> None:
    def returns(table: pd.DataFrame) -> pd.DataFrame:
        close = table["close"].astype(float)
        moved = close.groupby(table["security"]).pct_change() * 100
        return table.assign(close=moved).rename(columns={"close": "ret"})

    change(folder, "prices", returns)
    found = made(folder)
    assert value(found, "series.prices.given") == "returns"
    assert value(found, "series.prices.unit") == "percent"


def test_the_company_is_named_as_the_price_file_names_it(folder: Path) -> None:
    def named(table: pd.DataFrame) -> pd.DataFrame:
        isins = [PUBLISHED_ISIN[at % 3] for at in range(len(table))]
        return table.rename(columns={"security": "short"}).assign(isin=isins, ticker=isins)

    change(folder, "deals", named)
    found = made(folder)
    line = next(item for item in found.lines if item.path == "inputs.columns.deals.security")
    assert (line.value, line.doubtful) == ("short", False)
    assert "price file" in line.reason
    assert found.missing == ()


def test_a_decimal_comma_is_asked_about(folder: Path) -> None:
    def commas(table: pd.DataFrame) -> pd.DataFrame:
        return table.assign(size=table["size"].str.replace(".", ","))

    change(folder, "deals", commas)
    (asked,) = [line for line in made(folder).questions if line.key == "decimal"]
    assert (asked.path, asked.example) == ("inputs.source.deals.decimal", '","')


def test_a_missing_column_is_named_with_its_layout(folder: Path) -> None:
    change(folder, "deals", lambda table: table.drop(columns="exchange"))
    (missing,) = made(folder).missing
    assert (missing.rule, missing.file, missing.column) == (
        "missing_column", "deals.csv", "exchange",
    )  # fmt: skip
    assert "ISO 10383" in missing.expected


def test_a_price_file_of_other_companies_is_no_history(folder: Path) -> None:
    change(folder, "prices", lambda table: table.assign(security="Q" + table["security"]))
    rules = {finding.rule for finding in made(folder).missing}
    assert rules == {"many_without_prices"}


def test_words_for_the_payment_become_an_indicator(folder: Path) -> None:
    def words(table: pd.DataFrame) -> pd.DataFrame:
        paid = np.where(table["shares"] == "1", "Shares", "Cash")
        return table.assign(payment_method=paid).drop(columns="shares")

    change(folder, "deals", words)
    found = made(folder, inputs__timestamp_zone="Europe/London")
    name = value(found, "regression.treatment")
    assert str(name).startswith("payment_method_")
    (folder / "study.toml").write_text(found.text)
    study = load_study(folder / "study.toml")
    assert study.regression is not None
    made_of = study.characteristics[study.regression.treatment].indicator
    assert made_of is not None
    assert made_of.column == "payment_method"


def test_sheets_of_a_workbook_are_tables(folder: Path) -> None:
    with pd.ExcelWriter(folder / "book.xlsx") as book:
        pd.DataFrame({"note": ["see the next sheet"]}).to_excel(
            book, sheet_name="Read", index=False
        )
        deals = pd.read_csv(folder / "deals.csv", dtype=str)
        deals.to_excel(book, sheet_name="Deals", index=False)
    (folder / "deals.csv").unlink()
    found = made(folder)
    assert value(found, "inputs.deals") == "book.xlsx"
    assert value(found, "inputs.sheets.deals") == "Deals"


def test_nothing_is_written_over(folder: Path) -> None:
    place = folder / "study.toml"
    place.write_text("mine")
    with pytest.raises(InputProblem, match="a file at"):
        drafted(folder, place, {})
    assert place.read_text() == "mine"


def test_the_written_file_passes_the_check_with_the_zone(folder: Path) -> None:
    found = drafted(folder, folder / "study.toml", {"inputs.timestamp_zone": "Europe/London"})
    assert found.checked
    assert found.kept == (40, 40)
    assert value(found.draft, "regression.treatment") == "shares"
    assert "regression.treatment" in {line.path for line in found.draft.doubtful}


def test_a_folder_without_tables(tmp_path: Path) -> None:
    with pytest.raises(InputProblem, match="no table"):
        made(tmp_path)
    with pytest.raises(InputProblem, match="no folder"):
        made(tmp_path / "none")


def test_a_draft_is_drafted_again_until_someone_changes_it(folder: Path) -> None:
    place = folder / "study.toml"
    assert not drafted(folder, place, {}).checked
    assert drafted(folder, place, {"inputs.timestamp_zone": "Europe/London"}).checked
    place.write_text(place.read_text().replace('title = "', 'title = "My '))
    with pytest.raises(InputProblem, match="wrote or changed"):
        drafted(folder, place, {})
    assert "My " in place.read_text()


def test_answers_about_how_a_file_is_written_are_used(folder: Path) -> None:
    """Semicolons, decimal commas, another encoding and dates with dots, as German desks export."""
    prices = pd.read_csv(folder / "prices.csv")
    prices["date"] = pd.to_datetime(prices["date"]).dt.strftime("%d.%m.%Y")
    prices = prices.rename(columns={"close": "Schlußkurs"})
    prices.to_csv(folder / "prices.csv", sep=";", decimal=",", encoding="cp1252", index=False)
    change(folder, "benchmarks", lambda table: table.assign(
        date=pd.to_datetime(table["date"]).dt.strftime("%d/%m/%Y")))  # fmt: skip
    (lacking,) = made(folder).missing
    assert lacking.remedy.endswith("--answer inputs.source.prices.decimal=,")
    answers = {"inputs.source.prices.decimal": ",", "inputs.timestamp_zone": "Europe/London"}
    found = drafted(folder, folder / "study.toml", answers)
    assert found.checked
    assert found.kept == (40, 40)
    assert value(found.draft, "inputs.source.prices.encoding") == "cp1252"
    formats = {value(found.draft, path) for path in (
        "inputs.date_format", "inputs.source.benchmarks.date_format",
        "inputs.source.prices.date_format")
        if any(line.path == path for line in found.draft.lines)}  # fmt: skip
    assert formats == {"%d.%m.%Y", "%d/%m/%Y"}


def test_a_title_and_a_merged_row_above_the_headings(folder: Path) -> None:
    deals = pd.read_csv(folder / "deals.csv", dtype=str)
    deals["Value (EUR m)"] = np.exp(deals.pop("size").astype(float) * 4).round(3)
    with pd.ExcelWriter(folder / "list.xlsx", engine="openpyxl") as book:
        deals.to_excel(book, index=False, startrow=2)
        sheet = book.sheets["Sheet1"]
        sheet["A1"], sheet["A2"], sheet["D2"] = "Deal list, internal", "Who", "When"
        sheet.merge_cells("A2:C2")
    (folder / "deals.csv").unlink()
    found = drafted(folder, folder / "study.toml", {"inputs.timestamp_zone": "Europe/London"})
    line = next(line for line in found.draft.lines if line.key == "header_row")
    assert (line.path, line.value, line.doubtful) == ("inputs.source.deals.header_row", 3, True)
    # The column that plays a part is called by it wherever the study names it.
    assert value(found.draft, "inputs.columns.deals.deal_value") == "value_(eur_m)"
    assert found.checked


def test_a_decimal_comma_in_closes_side_by_side_is_read_once_answered(folder: Path) -> None:
    closes = pd.read_csv(folder / "prices.csv").pivot(
        index="date", columns="security", values="close"
    )
    closes.to_csv(folder / "prices.csv", sep=";", decimal=",")
    answers = {"inputs.source.prices.decimal": ",", "inputs.timestamp_zone": "Europe/London"}
    found = drafted(folder, folder / "study.toml", answers)
    assert value(found.draft, "inputs.source.prices.layout") == "wide"
    assert found.checked


def test_times_of_day_in_a_column_of_their_own_are_asked_about(folder: Path) -> None:
    """Silence would make every deal date only."""

    def apart(table: pd.DataFrame) -> pd.DataFrame:
        parts = table["announced_at"].str.split(" ", expand=True)
        return table.assign(announced_at=parts[0], clock=parts[1])

    change(folder, "deals", apart)
    found = made(folder)
    (asked,) = [line for line in found.questions if "'clock'" in line.reason]
    assert "write both into one cell" in asked.reason
    assert not [line for line in found.questions if line.key == "timestamp_zone"]
