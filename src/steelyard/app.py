"""The command line: ``steelyard run``, ``steelyard check`` and ``steelyard outline``.

Knows how results and errors are said to a person at a terminal or in a log. Refuses to know how anything
is computed. What the core does not bring is imported when a command needs it.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from importlib.metadata import version
from io import TextIOWrapper
from pathlib import Path
from typing import TYPE_CHECKING, Any

from steelyard.errors import MissingExtraError, OutputError, SteelyardError, SteelyardWarning

if TYPE_CHECKING:
    from rich.console import Console

    from steelyard.data.checkup import Checkup
    from steelyard.report.disclosure import Released
    from steelyard.report.tables import Table

Progress = Callable[[str, int, int], None]

EXTRA = "pip install 'steelyard[app]'"
FOUND, REFUSED, INTERRUPTED = 1, 2, 130
LOG_WIDTH = 118
COLUMNS_NAMED = 8
STRATA_SHOWN = 30


def main() -> None:
    """Run the command line and leave with its exit code.

    0: done. 1: ``check`` found what a run would refuse. 2: refused, or failed. 130: interrupted.
    """
    for stream in (sys.stdout, sys.stderr):
        # A log in a narrow encoding gets question marks, not a traceback.
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="replace")
    with _told(trace=False):
        _require("typer", "rich")
        application = _application()
    application()


def run_study(plan: Path, out: Path, workers: int | None) -> None:
    """Carry out a plan, write its results and print a short summary.

    Raises
    ------
    SteelyardError
        Anything that would make the answer wrong, or its files incomplete.
    """
    _require("matplotlib", "jinja2")
    from steelyard.report.disclosure import release
    from steelyard.report.staging import refuse_unusable
    from steelyard.report.write import write_answer
    from steelyard.study import Study

    study = Study.read(plan)
    refuse_unusable(out)
    with _progress() as progress:
        answer = study.run(progress=progress, workers=workers)
    released = release(answer)
    written = write_answer(answer, out, released)
    _print_summary(_console(), released, written)


def check_study(plan: Path, workers: int | None) -> int:
    """Print the check-up of a plan's extract and design, and return the exit code."""
    from steelyard.study import Study

    study = Study.read(plan)
    with _progress() as progress:
        checkup = study.check(progress=progress, workers=workers)
    _print_checkup(_console(), checkup)
    return FOUND if any(finding.weight == "error" for finding in checkup.findings) else 0


def outline_extract(extract: str, plan: Path | None) -> None:
    """Print the columns of an extract and what may be its design; write a plan to edit if asked.

    Raises
    ------
    OutputError
        The file for the plan exists already, or cannot be written.
    """
    from steelyard.data.outline import outline
    from steelyard.data.source import open_extract

    if plan is not None and plan.exists():
        raise _taken(plan)
    folder = plan.parent if plan is not None else Path()
    found = outline(open_extract(str(Path(extract).absolute()), folder))
    console = _console()
    console.print(f"{found.rows:,} rows, {len(found.columns)} columns; looked at {found.looked_at:,} rows.\n")
    _print_frame(console, "Columns", found.columns.drop(columns=["low", "high"]))
    for guess in found.guesses:
        others = f" (or {', '.join(guess.others)})" if guess.others else ""
        named = ", ".join(guess.columns)
        if len(guess.columns) > COLUMNS_NAMED:
            named = f"{guess.columns[0]} to {guess.columns[-1]}"
        console.print(f"{guess.part}: {named}{others}\n  {guess.reason}.")
    if not found.guesses:
        console.print("No column looks like a part of the design.")
    if plan is None:
        console.print("\nA plan to edit: steelyard outline EXTRACT --plan study.toml")
        return
    _write_plan(plan, found.plan_text)
    console.print(f"\nWrote {plan}.", soft_wrap=True)
    if folder.absolute() not in Path(extract).absolute().parents:
        console.print("The extract does not lie below the plan's folder: put its path into data.files.")


def _application() -> Callable[[], Any]:
    import typer

    app = typer.Typer(
        name="steelyard",
        help="Effects of exposures nobody randomised, from household surveys.",
        add_completion=False,
        no_args_is_help=True,
        pretty_exceptions_enable=False,
        rich_markup_mode=None,
    )
    plan_file = typer.Argument(..., metavar="PLAN", help="The plan, a TOML file.")
    extract_files = typer.Argument(
        ..., metavar="EXTRACT", help="A Parquet file, a folder of them, or a glob in quotes."
    )
    out_folder = typer.Option(..., "--out", help="The folder for the results.")
    threads = typer.Option(None, "--workers", min=1, help="Threads (default: one a processor).")
    new_plan = typer.Option(None, "--plan", help="Write a plan to edit to this file.")
    with_trace = typer.Option(False, "--trace", help="If something fails, show where.")

    def show_version(wanted: bool) -> None:
        if wanted:
            print(f"steelyard {version('steelyard')}")
            raise typer.Exit

    about = typer.Option(False, "--version", is_eager=True, callback=show_version, help="Say the version.")

    @app.callback()
    def steelyard(version: bool = about) -> None:
        """Effects of exposures nobody randomised, from household surveys."""

    @app.command()
    def run(
        plan: Path = plan_file,
        out: Path = out_folder,
        workers: int | None = threads,
        trace: bool = with_trace,
    ) -> None:
        """Do the whole job: check, weight, compare, estimate; write the results and a report."""
        with _told(trace):
            run_study(plan, out, workers)

    @app.command()
    def check(plan: Path = plan_file, workers: int | None = threads, trace: bool = with_trace) -> None:
        """Check the extract and the design, nothing estimated; exit code 1 if a run would refuse them."""
        with _told(trace):
            code = check_study(plan, workers)
        raise typer.Exit(code)

    @app.command()
    def outline(extract: str = extract_files, plan: Path | None = new_plan, trace: bool = with_trace) -> None:
        """Show the columns of an extract and what may be its design, and draft a plan."""
        with _told(trace):
            outline_extract(extract, plan)

    return app


def _require(*packages: str) -> None:
    for package in packages:
        try:
            importlib.import_module(package)
        except ImportError as error:
            if error.name != package:
                raise
            raise MissingExtraError(
                f"The command line needs {package}, which is not installed.", mend=EXTRA
            ) from None


@contextmanager
def _told(trace: bool) -> Iterator[None]:
    """Turn what goes wrong into a message and an exit code; warnings of the house are for the summary."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", SteelyardWarning)
            yield
    except KeyboardInterrupt:
        print("Interrupted. Nothing half-written is left.", file=sys.stderr)
        _leave(INTERRUPTED)
    except SteelyardError as error:
        if trace:
            traceback.print_exc()
        print(f"Error: {error.message}", file=sys.stderr)
        if error.mend:
            print(error.mend, file=sys.stderr)
        _leave(REFUSED)
    except Exception as error:
        if trace:
            traceback.print_exc()
        else:
            print(f"Unexpected {type(error).__name__}: {error}", file=sys.stderr)
            print("This is a defect of steelyard. Run again with --trace to see where.", file=sys.stderr)
        _leave(REFUSED)


def _leave(code: int) -> None:
    raise SystemExit(code)


def _console(stderr: bool = False) -> Console:
    """Return a console without markup, since labels of the data may look like it; plain where it is no terminal."""
    from rich.console import Console

    console = Console(stderr=stderr, markup=False, highlight=False, emoji=False)
    if not console.is_terminal and "COLUMNS" not in os.environ:
        console.width = LOG_WIDTH
    return console


@contextmanager
def _progress() -> Iterator[Progress]:
    """Give a callback for progress: bars on a terminal, else one line for each kind of work, when it is done."""
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    console = _console(stderr=True)
    if not console.is_terminal or console.is_dumb_terminal:
        seen: set[str] = set()

        def write(what: str, done: int, total: int) -> None:
            if done == total and what not in seen:
                seen.add(what)
                print(f"{what}: done", file=sys.stderr)

        yield write
        return
    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
    )
    with Bars(*columns, console=console, transient=True) as bars:
        tasks: dict[str, Any] = {}

        def move(what: str, done: int, total: int) -> None:
            if what not in tasks:
                tasks[what] = bars.add_task(what, total=total)
            bars.update(tasks[what], completed=done, total=total)

        yield move


def _print_summary(console: Console, released: Released, written: tuple[Path, ...]) -> None:
    from steelyard.report import tables, words

    console.print(released.plan.title or "Effects", style="bold")
    console.print(released.target)
    console.print()
    _print_table(console, tables.effects_summary_table(released))
    _say(console, f"Balance: {words.balance_finding(released)}")
    _say(console, f"Effective sizes: {words.effective_sizes(released)}")
    if released.warnings:
        console.print(f"\nWarnings ({len(released.warnings)}):", style="bold")
        for warning in released.warnings:
            _say(console, f"- {warning}")
    if released.minimum:
        _say(console, f"\nCounts under {released.minimum} are hidden here and in the report.")
    console.print("\nWritten:")
    for path in written:
        console.print(f"  {path}", soft_wrap=True)


def _print_checkup(console: Console, checkup: Checkup) -> None:
    from steelyard.report import tables

    _print_table(console, tables.facts_table(checkup))
    _print_table(console, tables.weights_table(checkup))
    _print_table(console, tables.exclusions_table(checkup))
    strata = tables.strata_table(checkup)
    if len(strata.rows) > STRATA_SHOWN:
        few = tables.strata_table(checkup, fewest_psus=STRATA_SHOWN)
        _print_table(console, few)
        console.print(f"The {STRATA_SHOWN} of {len(strata.rows)} strata with the fewest PSUs are shown.\n")
    else:
        _print_table(console, strata)
    _print_table(console, tables.missing_table(checkup))
    if not checkup.findings:
        console.print("The check-up found nothing to mend.")
    for finding in checkup.findings:
        _say(console, f"{finding.weight}: {finding.message}")
        _say(console, f"  {finding.mend}")
    console.print("\nCounts are shown in full: not for release.")


def _print_table(console: Console, table: Table) -> None:
    from rich import box
    from rich.table import Table as Grid

    from steelyard.report.numbers import plain

    if not table.rows:
        console.print(f"{table.caption}: none.\n")
        return
    grid = Grid(
        title=table.caption, title_justify="left", title_style="bold",
        box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0),
    )  # fmt: skip
    for place, name in enumerate(table.columns):
        text = place < table.text_columns
        grid.add_column(plain(name), justify="left" if text else "right", overflow="fold")
    for row in table.rows:
        grid.add_row(*(plain(cell) for cell in row))
    console.print(grid)
    if table.note:
        _say(console, f"{table.note}\n")


def _print_frame(console: Console, caption: str, frame: Any) -> None:
    from steelyard.report.tables import frame_table

    _print_table(console, frame_table(caption, frame))


def _say(console: Console, text: str) -> None:
    from steelyard.report.numbers import plain

    console.print(plain(text))


def _taken(plan: Path) -> OutputError:
    return OutputError(f"{plan} exists already.", mend="Give another name, or remove the file.")


def _write_plan(plan: Path, text: str) -> None:
    """Write a new file, or leave none."""
    try:
        with plan.open("x", encoding="utf-8", newline="\n") as file:
            try:
                file.write(text)
                file.flush()
            except BaseException:
                with suppress(OSError):
                    plan.unlink()
                raise
    except FileExistsError:
        raise _taken(plan) from None
    except OSError as error:
        raise OutputError(
            f"The plan cannot be written to {plan}: {error.strerror or error}.",
            mend="Check the folder and the disk.",
        ) from error


if __name__ == "__main__":
    main()
