"""The command `tillwright`.

Exit status: 0 done, 1 done but something is held for a decision, 2 the plan or the call is wrong,
3 the data cannot be used.
"""

from __future__ import annotations

import json
import signal
import sys
import tempfile
import traceback
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tillwright import __version__
from tillwright.choices import BILATERAL_FORMULAS, FORMS, METHODS, ONTO, SPLICES, Form, Onto, Splice
from tillwright.errors import CallError, DataError, TillwrightError

if TYPE_CHECKING:
    import polars as pl

    from tillwright.report.summary import Summary
    from tillwright.stages.compiling import Compiled, Orchestrate, Request
    from tillwright.stages.keyed import StepResult
    from tillwright.stages.sequence import Step

HELD = 1
ENDINGS = (".parquet", ".csv", ".json")


def main() -> None:
    """Run the command and leave with its exit status; never with a traceback."""
    # Prefect takes SIGTERM for itself; as an exit, what was done so far is recorded first.
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    try:
        status = commands.main(standalone_mode=False)
    except click.ClickException as error:
        error.show()
        status = CallError.exit_status
    except (click.Abort, KeyboardInterrupt):
        click.echo("Interrupted. Finished steps are kept; the same command goes on from there.", err=True)
        status = 130
    except TillwrightError as error:
        click.echo(str(error), err=True)
        status = error.exit_status
    except OSError as error:
        click.echo(
            f"{error.filename or 'A file'} cannot be used: {error.strerror or error}. Finished steps are kept.",
            err=True,
        )
        status = DataError.exit_status
    except Exception as error:  # noqa: BLE001 - the last resort: a message instead of a traceback
        click.echo(_defect(error), err=True)
        status = DataError.exit_status
    sys.exit(status)


def _defect(error: Exception) -> str:
    with tempfile.NamedTemporaryFile("w", prefix="tillwright-", suffix=".txt", delete=False, encoding="utf-8") as file:
        traceback.print_exception(error, file=file)
    return (
        f"Tillwright stopped on an error that it does not know: {type(error).__name__}: {error}. Finished steps are "
        f"kept. This is a defect; please report it with {file.name}, which says where it happened."
    )


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="tillwright")
def commands() -> None:
    """From till records to price indexes that can be published and defended.

    Exit status: 0 done, 1 done but something is held for a decision, 2 the plan or the call is
    wrong, 3 the data cannot be used.
    """


def _plan_options(function: Callable[..., Any]) -> Callable[..., Any]:
    decorators = [
        click.argument("plan", type=click.Path(path_type=Path)),
        click.option(
            "--work", type=click.Path(path_type=Path), help="Workspace folder.  [default: work/ beside the plan]"
        ),
        click.option(
            "--memory", default="4GB", show_default=True, help="Memory that queries may use before they spill to disk."
        ),
        click.option("--direct", is_flag=True, help="Run the same steps without Prefect."),
        click.option("--json", "as_json", is_flag=True, help="Print the summary as JSON."),
    ]
    for decorate in reversed(decorators):
        function = decorate(function)
    return function


@commands.command("compile")
@_plan_options
@click.option("--through", metavar="PERIOD", help="Last period to compile.  [default: the last with sales]")
def compile_command(
    plan: Path, work: Path | None, memory: str, direct: bool, as_json: bool, through: str | None
) -> int:
    """Compile a plan: files in, headings out.

    Takes in new and corrected deliveries, then makes unit values, elementary indexes and headings. Steps whose inputs,
    plan sections and code are unchanged are not run again; a compile that was killed goes on where it was.

    \b
    Example:
        tillwright compile sample_parquet/plan.toml --through 2024-06
    """
    from tillwright.report.summary import summarise_compile
    from tillwright.stages.compiling import Request

    request = Request(plan, work, through, memory, "compile", _orchestrator(direct))
    return _carry_out(request, summarise_compile, as_json=as_json)


@commands.command("intake")
@_plan_options
def intake_command(plan: Path, work: Path | None, memory: str, direct: bool, as_json: bool) -> int:
    """Take in deliveries and check their gates, and no more.

    \b
    Example:
        tillwright intake sample_parquet/plan.toml
    """
    from tillwright.report.summary import summarise_intake
    from tillwright.stages.compiling import Request

    request = Request(plan, work, None, memory, "intake", _orchestrator(direct))
    return _carry_out(request, summarise_intake, as_json=as_json)


@commands.command("index")
@click.argument("panel", type=click.Path(path_type=Path))
@click.option("--method", type=click.Choice(METHODS), required=True, help="Formula or multilateral method.")
@click.option("--out", type=click.Path(path_type=Path), required=True, help="File to write: .parquet, .csv or .json.")
@click.option(
    "--by", multiple=True, metavar="COLUMN", help="Column that splits the panel, one series each; may be repeated."
)
@click.option("--window", type=click.IntRange(min=2), help="Periods in a window.  [default: one window over all]")
@click.option("--splice", type=click.Choice(SPLICES), default="mean", show_default=True, help="Link of later windows.")
@click.option(
    "--onto",
    type=click.Choice(ONTO),
    default="published",
    show_default=True,
    help="Series that windows are linked onto.",
)
@click.option(
    "--form", type=click.Choice(FORMS), default="chained", show_default=True, help="Form of bilateral formulas."
)
@click.option("--period", default="period", show_default=True, metavar="COLUMN", help="Date, YYYY-MM or integer.")
@click.option("--product", default="product", show_default=True, metavar="COLUMN")
@click.option("--price", default="price", show_default=True, metavar="COLUMN", help="Currency per unit.")
@click.option("--quantity", default="quantity", show_default=True, metavar="COLUMN", help="Units.")
@click.option("--json", "as_json", is_flag=True, help="Tell what was written as JSON.")
def index_command(
    panel: Path,
    method: str,
    out: Path,
    by: tuple[str, ...],
    window: int | None,
    splice: Splice,
    onto: Onto,
    form: Form,
    as_json: bool,
    **columns: str,
) -> int:
    """Index straight from a panel file (Parquet or CSV), one row per product and period.

    Writes the --by columns, the period as given, index (first period = 100), products, and matched: products also sold
    in the period before.

    \b
    Example:
        tillwright index panel.parquet --method geks-tornqvist --window 25 --splice mean --by ea --out index.csv
    """
    from tillwright.api import bilateral, multilateral
    from tillwright.store.workspace import write_frame

    if out.suffix.lower() not in ENDINGS:
        raise CallError(f"--out is '{out}'; its ending says the format and must be one of {', '.join(ENDINGS)}.")
    frame = _read_panel(panel, (*by, columns["product"]))
    if method in BILATERAL_FORMULAS:
        result = bilateral(frame, method, form=form, by=by, **columns)
    else:
        result = multilateral(frame, method, window=window, splice=splice, onto=onto, by=by, **columns)
    write_frame(result, out)
    series = result.select(by).n_unique() if by else 1
    if as_json:
        click.echo(json.dumps({"out": str(out), "method": method, "series": series, "rows": result.height}))
    else:
        click.echo(f"{out}: {method}, {series} series, {result.height} rows.")
    return 0


def _read_panel(path: Path, codes: Sequence[str]) -> pl.DataFrame:
    """A panel file; in a CSV the columns of codes stay text, so that 01.1 and 01.10 remain two."""
    import polars as pl

    if not path.is_file():
        raise CallError(f"The panel {path} is not a file.")
    try:
        if path.suffix.lower() != ".csv":
            return pl.read_parquet(path, glob=False)
        return pl.read_csv(path, infer_schema_length=None, schema_overrides=dict.fromkeys(codes, pl.String))
    except (OSError, pl.exceptions.PolarsError) as error:
        reason = str(error).strip().splitlines()[0]
        raise DataError(f"The panel {path} cannot be read as Parquet, or as CSV if it ends in .csv: {reason}") from None


def _orchestrator(direct: bool) -> str:
    return "direct" if direct else "prefect"


def _carry_out(request: Request, summarise: Callable[[Any, Sequence[StepResult]], Summary], *, as_json: bool) -> int:
    from rich.console import Console

    from tillwright.report.terminal import render
    from tillwright.stages.compiling import carry_out

    compiled: Compiled = carry_out(request, _watched(_runner(request)))
    summary = summarise(compiled.context, compiled.steps)
    if as_json:
        click.echo(json.dumps(summary.as_dict(), ensure_ascii=False, indent=2))
    else:
        console = Console(highlight=False, width=None if sys.stdout.isatty() else 120)
        click.echo(render(summary, console))
    return HELD if summary.held else 0


def _runner(request: Request) -> Orchestrate:
    from tillwright.stages.compiling import in_order, workspace_of

    if request.orchestrator == "direct":
        return in_order
    from tillwright.flow import run_flow

    folder = workspace_of(request).orchestration
    return lambda title, steps: run_flow(title, steps, folder)


def _watched(run: Orchestrate) -> Orchestrate:
    """The same orchestration with a bar on the terminal, if one is watching."""

    def watched(title: str, steps: Sequence[Step]) -> list[StepResult]:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        columns = (
            TextColumn("{task.description:24}"),
            BarColumn(),
            TextColumn("{task.completed}/{task.total}"),
            TimeElapsedColumn(),
        )
        with Progress(*columns, console=Console(stderr=True), transient=True, disable=not sys.stderr.isatty()) as bar:
            task = bar.add_task("", total=len(steps))

            def shown(step: Step) -> Step:
                def act() -> StepResult:
                    bar.update(task, description=step.name)
                    result = step.run()
                    bar.advance(task)
                    return result

                return replace(step, run=act)

            return run(title, [shown(step) for step in steps])

    return watched
