"""The command that lists relaunches and takes decisions on them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import click

from tillwright.errors import CallError

if TYPE_CHECKING:
    import polars as pl

    from tillwright.store.decisions import Decision

STATUSES = ("accepted", "asked", "declined", "displaced")
Pairs = tuple[tuple[str, str, str], ...]


@click.command("successions")
@click.argument("plan", type=click.Path(path_type=Path))
@click.option("--work", type=click.Path(path_type=Path), help="Workspace folder.  [default: work/ beside the plan]")
@click.option("--status", type=click.Choice(STATUSES), multiple=True, help="List these only. May be repeated.")
@click.option(
    "--accept", type=(str, str, str), multiple=True, metavar="FEED OLD NEW", help="NEW continues OLD. May be repeated."
)
@click.option(
    "--decline", type=(str, str, str), multiple=True, metavar="FEED OLD NEW", help="It does not. May be repeated."
)
@click.option("--by", metavar="NAME", help="Who decides.")
@click.option("--why", metavar="TEXT", help="The reason.")
@click.option("--import", "source", type=click.Path(path_type=Path), help="CSV file of decisions to take over.")
@click.option("--export", "out", type=click.Path(path_type=Path), help="CSV file to write every decision to.")
@click.option("--json", "as_json", is_flag=True, help="List as JSON.")
def successions_command(
    plan: Path,
    work: Path | None,
    status: tuple[str, ...],
    accept: Pairs,
    decline: Pairs,
    by: str | None,
    why: str | None,
    source: Path | None,
    out: Path | None,
    as_json: bool,
) -> int:
    """List items that may continue another, and decide on them.

    Without --accept, --decline, --import or --export it lists what the last compile proposed, with its evidence. A
    decision keeps who took it, when and why; every later compile follows the last one on a pair.

    \b
    Example:
        tillwright successions plan.toml --accept brindlow 107148 107316 --by desk --why recoded
    """
    from tillwright.stages.compiling import Request, workspace_of
    from tillwright.stages.deciding import decide, decisions_of, proposed
    from tillwright.store.decisions import read_decisions, write_decisions

    workspace = workspace_of(Request(plan, work))
    new = [*_decisions(accept, "accepted", by, why), *_decisions(decline, "declined", by, why)]
    if source is not None:
        new += read_decisions(source)
    if new:
        decide(workspace, new)
        click.echo(f"{len(new)} decisions recorded. The next compile follows them.")
    if out is not None:
        decided = decisions_of(workspace)
        write_decisions(decided, out)
        click.echo(f"{out}: {len(decided)} decisions.")
    if new or out is not None:
        return 0
    _list(proposed(workspace, status or STATUSES), as_json=as_json)
    return 0


def _decisions(
    pairs: Pairs, verdict: Literal["accepted", "declined"], by: str | None, why: str | None
) -> list[Decision]:
    from tillwright.store.decisions import Decision, now

    if not pairs:
        return []
    if not by or not why:
        raise CallError("A decision needs --by, who takes it, and --why, the reason.")
    return [Decision(feed, old, new, verdict, by, why, now()) for feed, old, new in pairs]


def _list(frame: pl.DataFrame, *, as_json: bool) -> None:
    from tillwright.report.successions import render

    if as_json:
        click.echo(json.dumps(frame.to_dicts(), ensure_ascii=False, indent=2, default=str))
    else:
        click.echo(render(frame))


__all__ = ["successions_command"]
