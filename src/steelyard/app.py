"""The command line: run a plan, check an extract, outline one.

Imports nothing outside the core until a command runs, so that a missing extra can be told in words.
Annotations are evaluated here, unlike elsewhere: typer reads those of the commands.
"""

import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

from steelyard.errors import MissingExtraError, OutputError, SteelyardError

if TYPE_CHECKING:
    import pandas as pd

    from steelyard.data.checkup import Checkup
    from steelyard.data.outline import Outline
    from steelyard.data.passes import Progress
    from steelyard.results.answer import Answer

REFUSED, FAILED, INTERRUPTED = 2, 1, 130


def main() -> None:
    """Run the command line; the installed ``steelyard`` command calls this."""
    try:
        commands = _commands()
    except ImportError as error:
        _say(
            MissingExtraError(
                f"The command line needs {error.name}.", mend="Run: pip install 'steelyard[app]'"
            )
        )
        sys.exit(REFUSED)
    commands()


@contextmanager
def _told(trace: bool) -> Iterator[None]:
    """Tell what goes wrong in words and leave with its code; with ``trace``, as Python does."""
    import typer

    try:
        yield
    except typer.Exit:
        raise
    except KeyboardInterrupt:
        print("Interrupted: nothing was written.", file=sys.stderr)
        raise typer.Exit(INTERRUPTED) from None
    except SteelyardError as error:
        if trace:
            raise
        _say(error)
        raise typer.Exit(REFUSED) from None
    except Exception as error:
        if trace:
            raise
        print(f"steelyard failed: {type(error).__name__}: {error}", file=sys.stderr)
        print(
            "This is a fault of steelyard's. Run again with --trace to see where it arose.", file=sys.stderr
        )
        raise typer.Exit(FAILED) from None


def _say(error: SteelyardError) -> None:
    print(f"steelyard: {error.message}", file=sys.stderr)
    if error.mend:
        print(f"  {error.mend}", file=sys.stderr)


def _commands() -> Any:
    import typer

    for needed in ("jinja2", "matplotlib", "rich"):
        __import__(needed)

    app = typer.Typer(
        add_completion=False,
        no_args_is_help=True,
        pretty_exceptions_enable=False,
        help="What difference does an exposure nobody randomised make? Effects from household surveys, with "
        "sampling weights, strata and clusters combined with propensity weights.",
    )
    plan_argument = typer.Argument(metavar="PLAN", help="The plan, a TOML file.", show_default=False)
    workers_option = typer.Option(
        min=1, help="Threads to work with; default one a processor.", show_default=False
    )
    trace_option = typer.Option("--trace", help="On an error, show where in the program it arose.")

    @app.callback(invoke_without_command=True)
    def version(
        context: typer.Context,
        show: Annotated[bool, typer.Option("--version", help="Print the version and exit.")] = False,
    ) -> None:
        if show:
            from importlib.metadata import version

            print(f"steelyard {version('steelyard')}")
            raise typer.Exit
        if context.invoked_subcommand is None:
            print(context.get_help())

    @app.command()
    def run(
        plan: Annotated[Path, plan_argument],
        out: Annotated[Path, typer.Option(help="Directory for the five result files.", show_default=False)],
        workers: Annotated[int | None, workers_option] = None,
        trace: Annotated[bool, trace_option] = False,
    ) -> None:
        """Carry out a plan: effects.csv, balance.csv, weights.parquet, report.html and record.json.

        The files are written beside and renamed into place at the end, all or none.
        """
        with _told(trace):
            from steelyard.report.write import write_answer
            from steelyard.study import Study

            study = Study.read(plan)
            with warnings.catch_warnings(), _progress() as progress:
                # The warnings are printed with the summary, and stand in the report.
                warnings.simplefilter("ignore")
                answer = study.run(workers=workers, progress=progress)
                progress("writing the results", 0, 1)
                files = write_answer(answer, out)
                progress("writing the results", 1, 1)
            _summary(answer, files)

    @app.command()
    def check(
        plan: Annotated[Path, plan_argument],
        workers: Annotated[int | None, workers_option] = None,
        trace: Annotated[bool, trace_option] = False,
    ) -> None:
        """Check the extract and the design of a plan; nothing is estimated.

        Exits with 1 where a run would refuse the extract as it is.
        """
        with _told(trace):
            from steelyard.study import Study

            study = Study.read(plan)
            with _progress() as progress:
                checkup = study.check(workers=workers, progress=progress)
            _checkup(checkup, study.report.minimum_count)
            if any(finding.weight == "error" for finding in checkup.findings):
                raise typer.Exit(FAILED)

    @app.command(name="outline")
    def outline_command(
        extract: Annotated[
            list[str], typer.Argument(metavar="EXTRACT...", help="Parquet files, a glob or a folder.")
        ],
        plan: Annotated[
            Path | None, typer.Option(help="Also write a plan to edit to this file.", show_default=False)
        ] = None,
        trace: Annotated[bool, trace_option] = False,
    ) -> None:
        """Look at an extract: columns, types, likely design columns, and a plan to edit."""
        with _told(trace):
            from steelyard.data.outline import outline
            from steelyard.data.source import open_extract

            # File names in the plan to edit start at its folder.
            folder = plan.parent if plan is not None else Path()
            found = outline(open_extract([str(Path(name).absolute()) for name in extract], folder))
            _outline(found)
            if plan is None:
                print(found.plan_text)
            else:
                _write_new(plan, found.plan_text)
                print(f"Wrote {plan}: edit it, then run: steelyard check {plan}")

    return app


@contextmanager
def _progress() -> "Iterator[Progress]":
    """Give a progress callback: a moving bar on a terminal, nothing in a log."""
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda what, done, total: None
        return
    columns = (TextColumn("{task.description:<44}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as bars:
        task = bars.add_task("", total=None)
        current = ""

        def tell(what: str, done: int, total: int) -> None:
            nonlocal current
            if what != current:
                bars.reset(task, description=what, total=total)
                current = what
            bars.update(task, completed=done, total=total)

        yield tell


def _table(frame: "pd.DataFrame", title: str, right: tuple[str, ...] = ()) -> None:
    """Print a frame of texts: a ruled table on a terminal and in a log alike."""
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False, width=None if sys.stdout.isatty() else 120)
    table = Table(title=title, title_justify="left", box=SIMPLE_HEAD, pad_edge=False, title_style="bold")
    for name in frame.columns:
        table.add_column(Text(str(name)), justify="right" if name in right else "left", overflow="fold")
    for row in frame.itertuples(index=False):
        table.add_row(*(Text(str(cell)) for cell in row))
    console.print(table)


def _summary(answer: "Answer", files: tuple[Path, ...]) -> None:
    import numpy as np
    import pandas as pd

    from steelyard.report.disclosure import shown
    from steelyard.report.numbers import fixed, interval, number, p_value

    tables = shown(answer)
    rows = [
        {
            "outcome": row["outcome"],
            "measure": row["measure"],
            "exposed": number(row["exposed"]),
            "reference": number(row["reference"]),
            "effect": number(row["estimate"]),
            "std. error": number(row["std_error"]),
            "interval": interval(row["ci_low"], row["ci_high"]),
            "p": p_value(row["p_value"]),
        }
        for row in tables.effects.to_dict("records")
    ]
    plan = answer.plan
    title = f"Effects ({plan.exposure.estimand}), {plan.variance.confidence:.0%} intervals"
    _table(pd.DataFrame(rows), title, ("exposed", "reference", "effect", "std. error", "interval", "p"))
    smd = {
        when: np.nanmax(tables.balance[f"smd_{when}"].abs().to_numpy(), initial=0)
        for when in ("before", "after")
    }
    print(
        f"Largest |SMD|: {fixed(smd['before'])} before, {fixed(smd['after'])} after (0.1 is common practice)."
    )
    sizes = [f"{row.group} {number(row.effective_after)}" for row in tables.groups.itertuples()]
    print(f"Effective sizes under the combined weights: {', '.join(sizes)}.")
    for text in (*answer.warnings, *tables.hidden):
        print(f"Note: {text}")
    print(
        "Nobody randomised the exposure: unmeasured confounding remains possible. See the cautions in the report."
    )
    print("Wrote " + ", ".join(str(path) for path in files))


def _checkup(checkup: "Checkup", minimum: int) -> None:
    import pandas as pd

    from steelyard.report.numbers import number, percent

    _table(checkup.facts.astype(str), "The extract and the design", ("value",))
    weights = checkup.weights.copy()
    for name in ("all_rows", "domain_rows"):
        weights[name] = [number(value, 4) for value in weights[name]]
    _table(
        weights.rename(columns=lambda n: n.replace("_", " ")), "Sampling weights", ("all rows", "domain rows")
    )
    if len(checkup.exclusions):
        _table(
            checkup.exclusions.assign(share=checkup.exclusions["share"].map(percent)),
            "Rows left out of the domain",
            ("rows", "share"),
        )
    missing = checkup.missing.copy()
    for name in ("share", "share_exposed", "share_reference"):
        missing[name] = missing[name].map(percent)
    _table(
        missing.rename(columns=lambda n: n.replace("_", " ")),
        "Missing answers, where the domain holds",
        ("missing", "share", "share exposed", "share reference"),
    )
    strata = checkup.strata.rename(columns=lambda n: n.replace("_", " "))
    most = 40
    title = "Strata" if len(strata) <= most else f"Strata (the first {most} of {len(strata)})"
    _table(strata.head(most), title, tuple(strata.columns[1:]))
    if checkup.findings:
        rows = [(f.weight, f"{f.message} {f.mend}") for f in checkup.findings]
        _table(pd.DataFrame(rows, columns=["weight", "finding"]), "Findings")
    else:
        print("Nothing to mend.")
    print(f"Counts here are for the analyst's eyes; results hide those under {minimum}.")


def _write_new(path: Path, text: str) -> None:
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(text)
    except OSError as error:
        raise OutputError(
            f"The plan cannot be written to {path}: {error.strerror}.",
            mend="Name a file that does not exist.",
        ) from None


def _outline(found: "Outline") -> None:
    import pandas as pd

    from steelyard.report.numbers import percent

    columns = found.columns.drop(columns=["low", "high"])
    columns["missing"] = columns["missing"].map(percent)
    columns["distinct"] = [
        "over 1,000" if pd.isna(count) else f"{int(count):,}" for count in columns["distinct"]
    ]
    _table(columns, f"{found.rows:,} rows, the first {found.looked_at:,} looked at", ("missing", "distinct"))
    if not found.guesses:
        print("No column looks like part of the design.")
        return
    rows = [
        (g.part, ", ".join(g.columns), g.reason + (f"; or {', '.join(g.others)}" if g.others else ""))
        for g in found.guesses
    ]
    _table(pd.DataFrame(rows, columns=["may be", "columns", "because"]), "Likely design columns: check each")


if __name__ == "__main__":
    main()
