"""Decisions on successions: taken against the tables of the last compile, kept in the ledger."""

from __future__ import annotations

from collections.abc import Sequence

import polars as pl

from tillwright.errors import CallError
from tillwright.store.decisions import Decision
from tillwright.store.ledger import Ledger
from tillwright.store.workspace import Workspace


def proposed(workspace: Workspace, statuses: Sequence[str]) -> pl.DataFrame:
    """The successions of the last compile with what their items are called, those to decide first.

    Raises CallError where nothing has been compiled.
    """
    table = _table(workspace, "successions").filter(pl.col("status").is_in(statuses))
    items = _table(workspace, "items").select("feed", "item", "description", "size")
    for side in ("old", "new"):
        named = items.rename({"item": f"{side}_item", "description": side, "size": f"{side}_size"})
        table = table.join(named, on=["feed", f"{side}_item"], how="left")
    order = pl.col("status").replace_strict({"asked": 0, "displaced": 1, "accepted": 2, "declined": 3})
    return table.sort(order, -pl.col("score").fill_null(1.0), "feed", "old_item")


def decide(workspace: Workspace, decisions: Sequence[Decision]) -> None:
    """Record decisions.

    Raises
    ------
    CallError : an item that the last compile does not know, or that would continue, or be continued by, two; nothing
        is recorded then.
    WorkspaceBusy : a compile is under way.
    """
    known = set(_table(workspace, "items").select("feed", "item").iter_rows())
    for one in decisions:
        for item in (one.old_item, one.new_item):
            if (one.feed, item) not in known:
                raise CallError(f"Feed '{one.feed}' has no item '{item}' in the last compile; nothing was recorded.")
        if one.old_item == one.new_item:
            raise CallError(f"Item '{one.old_item}' cannot continue itself; nothing was recorded.")
    with Ledger(workspace.ledger) as ledger:
        _check_one_to_one([*ledger.decisions(), *decisions])
        ledger.decide(decisions)


def decisions_of(workspace: Workspace) -> list[Decision]:
    """Every decision ever taken, in order. Raises CallError where nothing has been compiled."""
    _table(workspace, "items")
    with Ledger(workspace.ledger) as ledger:
        return ledger.decisions()


def _table(workspace: Workspace, name: str) -> pl.DataFrame:
    if not workspace.path(name).is_file():
        raise CallError(f"The workspace {workspace.root} has no table '{name}' yet; compile the plan first.")
    return workspace.read(name)


def _check_one_to_one(decisions: Sequence[Decision]) -> None:
    standing = {(one.feed, one.old_item, one.new_item): one.verdict for one in decisions}
    accepted = [pair for pair, verdict in standing.items() if verdict == "accepted"]
    for side, word in ((1, "continued by"), (2, "the continuation of")):
        seen: dict[tuple[str, str], str] = {}
        for pair in accepted:
            other = pair[3 - side]
            if (pair[0], pair[side]) in seen:
                raise CallError(
                    f"Item '{pair[side]}' of feed '{pair[0]}' would be {word} both '{seen[pair[0], pair[side]]}' and "
                    f"'{other}'. Decline one of them; nothing was recorded."
                )
            seen[pair[0], pair[side]] = other
