"""Arguments in, exit code out; computes nothing. Heavy libraries are imported where used."""

from __future__ import annotations

import signal
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, TypeVar

import typer

if TYPE_CHECKING:
    from pipeline.core.findings import InputProblem
    from pipeline.study.schema import Study

BAD_INPUT = 2
RESTRICTED = 3
T = TypeVar("T")

app = typer.Typer(
    name="dealwake",
    help="How the market priced announced deals, and whether a choice in them made the difference.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
StudyFile = Annotated[Path, typer.Argument(help="The study file, ending in .toml.")]
Quiet = Annotated[bool, typer.Option("--quiet", help="Print the result only.")]
AsJson = Annotated[bool, typer.Option("--json", help="Print the result as JSON, for machines.")]


@app.callback()
def _root() -> None:
    """Commands of dealwake."""


@app.command()
def run(
    study: StudyFile,
    out: Annotated[
        Path | None,
        typer.Option(
            help="Folder to write; reports/<study name> if absent, with --window its own."
        ),
    ] = None,
    window: Annotated[
        str, typer.Option(help="Another headline window, as first:last session, e.g. -3:3.")
    ] = "",
    open_page: Annotated[
        bool, typer.Option("--open", help="Open the page in your browser when it is done.")
    ] = False,
    fresh: Annotated[
        bool, typer.Option("--fresh", help="Make everything again, whatever earlier runs kept.")
    ] = False,
    quiet: Quiet = False,
    as_json: AsJson = False,
) -> None:
    """Run a study: from the tables it names to the committee's documents."""
    from pipeline.screen import Screen, open_document, start_with

    screen = Screen(quiet=quiet, as_json=as_json)

    def work() -> None:
        from pipeline.core.clock import Clock
        from pipeline.core.store import refuse_foreign
        from pipeline.flow import run as run_stages
        from pipeline.progress import earlier_seconds
        from pipeline.saving import save

        with screen.progress() as tell:
            plan = _load(study, window)
            folder = out or Path("reports") / _folder(plan.name, window)
            refuse_foreign(folder)
            tell.expect(earlier_seconds(folder))
            results, seconds = run_stages(plan, tell, fresh)
            written = save(plan, results, seconds, folder, Clock(tell))
        shown = open_document(folder / start_with(written)) if open_page else None
        screen.finished(results, folder, written, shown)

    _guard(work, screen.problem)


@app.command()
def check(
    study: StudyFile,
    rows: Annotated[
        Path | None,
        typer.Option(help="Workbook (.xlsx) of the rows to look at, for whoever keeps the tables."),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Read and check everything a study needs; estimate nothing."""
    from pipeline.screen import Screen

    screen = Screen(quiet=False, as_json=as_json)

    def work() -> None:
        from pipeline.flow.checked import check_with_rows

        with screen.progress() as tell:
            ledger, findings = check_with_rows(_load(study, ""), rows, tell)
        screen.checked(ledger, findings)

    try:
        _guard(work, screen.problem)
    finally:
        if rows is not None and rows.is_file() and not as_json:
            typer.echo(f"Rows to look at: {rows}", err=True)


@app.command()
def draft(
    folder: Annotated[Path, typer.Argument(help="The folder with your tables.")],
    out: Annotated[
        Path | None, typer.Option(help="Study file to write; study.toml in the folder if absent.")
    ] = None,
    answer: Annotated[
        list[str] | None,
        typer.Option(help="A key and its value, such as inputs.timestamp_zone=Europe/London."),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Write a study file from your own tables: what each is, and what only you can say."""
    from pipeline.screen import Screen

    screen = Screen(quiet=False, as_json=as_json)
    passed = True

    def work() -> None:
        nonlocal passed
        from pipeline.flow.drafted import drafted
        from pipeline.screen_draft import show_drafted

        answers = dict(_answer(text) for text in answer or ())
        with screen.progress() as tell:
            found = drafted(folder, out or folder / "study.toml", answers, tell)
        show_drafted(found, as_json=as_json)
        passed = found.checked

    _guard(work, screen.problem)
    if not passed:
        raise typer.Exit(BAD_INPUT)


@app.command()
def power(study: StudyFile, as_json: AsJson = False) -> None:
    """Say how small a mean reaction the study's deals can find, and how many deals others need."""
    from pipeline.screen import Screen

    screen = Screen(quiet=False, as_json=as_json)

    def work() -> None:
        from pipeline.flow import power as power_stages

        with screen.progress() as tell:
            frame, smallest, deals = power_stages(_load(study, ""), tell)
        screen.power(frame, smallest, deals)

    _guard(work, screen.problem)


@app.command()
def deal(
    study: StudyFile,
    name: Annotated[str, typer.Argument(help="The deal's identifier in the deal list.")],
    whole: Annotated[
        bool, typer.Option(help="Run every stage and tell what each column makes of it, too.")
    ] = False,
    page: Annotated[
        Path | None, typer.Option(help="Run every stage and write its page to this file.")
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Tell one deal's whole story: day zero and why, its returns, its place, its ledger."""
    from pipeline.screen import Screen
    from pipeline.screen_deal import show_deal, show_deal_page

    screen = Screen(quiet=False, as_json=as_json)

    def work() -> None:
        if whole or page is not None:
            from pipeline.flow import deal_page

            with screen.progress() as tell:
                document = deal_page(_load(study, ""), name, tell)
            show_deal_page(document, page, as_json=as_json)
            return
        from pipeline.flow import deal as deal_stages

        with screen.progress() as tell:
            story, row, told = deal_stages(_load(study, ""), name, tell)
        show_deal(name, story, row, told, as_json=as_json)

    _guard(work, screen.problem)


@app.command()
def contrast(
    first: Annotated[Path, typer.Argument(help="Folder of the earlier run.")],
    second: Annotated[Path, typer.Argument(help="Folder of the later run.")],
    out: Annotated[
        Path | None, typer.Option(help="Folder to write; beside the later run if absent.")
    ] = None,
    quiet: Quiet = False,
    as_json: AsJson = False,
) -> None:
    """Say what differs between two runs, what moved, and how much each difference explains."""
    from pipeline.screen import Screen

    screen = Screen(quiet=quiet, as_json=as_json)

    def work() -> None:
        from pipeline.core.store import refuse_foreign
        from pipeline.flow import contrast as contrast_runs
        from pipeline.saving import save_contrast

        folder = out or second.resolve().parent / f"{first.name}_and_{second.name}"
        refuse_foreign(folder)
        with screen.progress() as tell:
            found = contrast_runs(first, second, tell)
        screen.contrasted(found, folder, save_contrast(found, folder))

    _guard(work, screen.problem)


@app.command()
def explain(
    rule: Annotated[
        str, typer.Argument(help="A rule's key as shown in brackets; empty: all.")
    ] = "",
    as_json: AsJson = False,
) -> None:
    """Say what a rule means, why it matters, with an example, and what to do."""
    from pipeline.screen import explain_rule

    if not explain_rule(rule, as_json):
        raise typer.Exit(BAD_INPUT)


def _load(path: Path, window: str) -> Study:
    from pipeline.study.load import load_study

    overrides: Mapping[str, Any] = {}
    if window:
        overrides = {"event_time": {"headline": _span(window)}}
    return load_study(path, overrides)


def _folder(name: str, window: str) -> str:
    """The study's own folder; a window of the command line gets one beside it."""
    return f"{name}_{window.replace(':', '_').replace('-', 'm')}" if window else name


def _answer(text: str) -> tuple[str, Any]:
    """``key=value``, the value as TOML, or as the words they are."""
    import tomllib

    from pipeline.core.findings import problem

    key, mark, value = (part.strip() for part in text.partition("="))
    if not mark or not key or not value:
        raise problem(
            "bad_value",
            "command line",
            column="--answer",
            got=f"'{text}'",
            expected="a key of the study file and its value: inputs.timestamp_zone=Europe/London",
            remedy="Write the key, an equals sign and the value, without spaces.",
        )
    try:
        return key, tomllib.loads(f"value = {value}")["value"]
    except tomllib.TOMLDecodeError:
        return key, value


def _span(text: str) -> list[int]:
    """``-3:3`` as two sessions."""
    from pipeline.core.findings import problem

    first, _, last = text.partition(":")
    try:
        return [int(first), int(last)]
    except ValueError:
        raise problem(
            "bad_value",
            "command line",
            column="--window",
            got=f"'{text}'",
            expected="first:last session counted from the announcement, such as -3:3",
            remedy="Write two whole numbers with a colon between them.",
        ) from None


def _stop(*_: object) -> None:
    """A request to end is treated like the person's own, so that nothing half-written stays."""
    raise KeyboardInterrupt


def _guard(work: Callable[[], None], show: Callable[[InputProblem], None]) -> None:
    """Run; a problem of the input becomes one screen and exit code 2, a restricted company 3."""
    from pipeline.core.findings import InputProblem

    signal.signal(signal.SIGTERM, _stop)
    try:
        work()
    except InputProblem as fault:
        show(fault)
        stopped = any(finding.rule == "restricted_company" for finding in fault.findings)
        raise typer.Exit(RESTRICTED if stopped else BAD_INPUT) from None
    except KeyboardInterrupt:
        typer.echo("Stopped; the last finished run is untouched.", err=True)
        raise typer.Exit(130) from None
