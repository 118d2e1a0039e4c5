"""Commands that work on a plan: compile, intake and definitions."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from tillwright.report.summary import Summary
    from tillwright.stages.compiling import Compiled, Orchestrate, Request
    from tillwright.stages.keyed import StepResult
    from tillwright.stages.sequence import Step

HELD = 1


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


@click.command("compile")
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


@click.command("intake")
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


@click.command("definitions")
@click.argument("plan", type=click.Path(path_type=Path))
@click.option("--work", type=click.Path(path_type=Path), help="Workspace folder.  [default: work/ beside the plan]")
@click.option("--json", "as_json", is_flag=True, help="Print every score as JSON.")
def definitions_command(plan: Path, work: Path | None, as_json: bool) -> int:
    """Score definitions of products on what was compiled: homogeneous, and yet lasting.

    Items, their attributes and combinations of these (products.candidates of the plan, or pairs) are compared for every
    elementary aggregate. Writes the tables definitions and definition_scores, and changes nothing else.

    \b
    Example:
        tillwright definitions sample_parquet/plan.toml
    """
    from rich.console import Console

    from tillwright.report.definitions import render
    from tillwright.stages.compiling import Request, workspace_of
    from tillwright.stages.definitions import assess_definitions

    scores = assess_definitions(plan, workspace_of(Request(plan, work)))
    if as_json:
        click.echo(json.dumps(scores.to_dicts(), ensure_ascii=False, indent=2))
    else:
        click.echo(render(scores, Console(highlight=False, width=None if sys.stdout.isatty() else 120)))
    return 0


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
