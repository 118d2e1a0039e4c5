"""What each screen does to the indexes: every elementary aggregate as it would be without that one."""

from __future__ import annotations

import polars as pl

from tillwright.choices import SCREEN_REASONS, Screen
from tillwright.stages.context import Context
from tillwright.stages.indexes import index_groups
from tillwright.stages.screening import KEY, screen_panel
from tillwright.tables import TABLES

GROUP = ("ea", "stratum")
ROW = (*GROUP, "period")


def measure_effects(context: Context) -> int:
    """Write `screen_effects`; the number of indexes that some screen moves or cannot do without.

    The other screens see what the one that is off would have set aside, as in a compile with it off.
    """
    workspace = context.workspace
    panel, screened = workspace.read("panel"), workspace.read("screened")
    levels = workspace.read("ea_indexes").select(*ROW, "level")
    parts = [pl.DataFrame(schema=TABLES["screen_effects"].columns)]
    parts += [_effect(context, screen, panel, screened, levels) for screen in context.plan.screening.on]
    effects = pl.concat(parts)
    workspace.write("screen_effects", effects)
    moved = effects.filter(pl.col("level").ne_missing(pl.col("level_without")))
    return moved.select(*GROUP, "screen").n_unique()


def _effect(
    context: Context, screen: Screen, panel: pl.DataFrame, screened: pl.DataFrame, levels: pl.DataFrame
) -> pl.DataFrame:
    """The rows of one screen; where it changes no verdict, the index is not made again."""
    without = screen_panel(context, panel, context.plan.screening.without(screen))
    used = [frame.filter(pl.col("verdict") != "excluded").select(*KEY, "linked") for frame in (screened, without)]
    differ = pl.concat(used).filter(pl.struct(pl.all()).is_unique())
    touched = differ.select(GROUP).unique()
    made = _levels(context, without.join(touched, on=GROUP, how="semi", maintain_order="left"))
    rows = screened.filter(pl.col("reason") == SCREEN_REASONS[screen]).group_by(ROW).agg(pl.len().alias("rows"))
    every = pl.concat([levels, made]).select(ROW).unique()
    same = levels.join(touched, on=GROUP, how="anti")
    return (
        every.join(levels, on=ROW, how="left")
        .join(pl.concat([same, made]).rename({"level": "level_without"}), on=ROW, how="left")
        .join(rows, on=ROW, how="left")
        .select(
            *ROW,
            pl.lit(screen).alias("screen"),
            "level",
            "level_without",
            pl.col("rows").fill_null(0).cast(pl.Int64),
        )
    )


def _levels(context: Context, screened: pl.DataFrame) -> pl.DataFrame:
    """Levels as in `ea_indexes`, of groups that have any."""
    periods = context.periods()["period"]
    schema = {name: TABLES["ea_indexes"].columns[name] for name in (*ROW, "level")}
    made = [pl.DataFrame(schema=schema)]
    for group in index_groups(context, screened, []) if screened.height else []:
        if group.index is not None:
            ea, stratum = (pl.lit(name).alias(column) for name, column in zip(group.key, GROUP, strict=True))
            level = pl.Series("level", 100.0 * group.index).fill_nan(None)
            made.append(pl.DataFrame({"period": periods, "level": level}).select(ea, stratum, "period", "level"))
    return pl.concat(made)
