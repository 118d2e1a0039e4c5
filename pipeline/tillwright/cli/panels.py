"""Commands that work on a panel file, without a plan: index, places and contributions."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import click

from tillwright.choices import FORMS, METHODS, ONTO, PLACE_METHODS, SPLICES, UNCONNECTED, Unconnected
from tillwright.cli.options import (
    Decorator,
    check_ending,
    one_or_more,
    output_options,
    panel_argument,
    period_option,
    read_panel,
    role_options,
    together,
    write_result,
)


class WindowLength(click.ParamType[Any]):
    """A number of periods from 2 on, "expanding" or "all"."""

    name = "PERIODS"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """The window as the functions take it: an int, "expanding", or None for one over all."""
        if value == "all":
            return None
        if value is None or value == "expanding" or isinstance(value, int):
            return value
        if not value.isdecimal() or int(value) < 2:
            self.fail(f"'{value}' is no window: give a number of periods from 2 on, expanding, or all.", param, ctx)
        return int(value)


_unconnected = click.option(
    "--unconnected",
    type=click.Choice(UNCONNECTED),
    default="refuse",
    show_default=True,
    help="What shares no chain of products: refuse to go on, or leave it blank.",
)
_groups = click.option(
    "--groups",
    type=click.IntRange(min=2),
    help="Add standard errors, by leaving out each of so many groups of products in turn.",
)


def _choose(name: str, choices: Sequence[str], default: str, text: str) -> Decorator:
    return click.option(
        name,
        type=click.Choice(choices),
        default=[default],
        show_default=True,
        multiple=True,
        help=text + " May be repeated.",
    )


_settings = together(
    click.option(
        "--method",
        type=click.Choice(METHODS),
        required=True,
        multiple=True,
        help="Formula or multilateral method. May be repeated.",
    ),
    click.option(
        "--window",
        type=WindowLength(),
        multiple=True,
        help="Periods in a window, expanding (from the last link month on), or all. May be repeated.  [default: all]",
    ),
    _choose("--splice", SPLICES, "mean", "Link of later windows (half: t−⌊W/2⌋)."),
    _choose("--onto", ONTO, "published", "Series that windows are linked onto."),
    _choose("--form", FORMS, "chained", "Form of bilateral formulas."),
    click.option(
        "--weight-period",
        multiple=True,
        metavar="PERIOD",
        help="Period that gives lowe, young and geometric-young their weights; several are added up.",
    ),
    click.option(
        "--link-month",
        type=click.IntRange(1, 12),
        default=12,
        show_default=True,
        help="Month that a year ends in, for --splice link-month.",
    ),
    _unconnected,
)


@click.command("index")
@panel_argument
@_settings
@output_options
@_groups
@click.option(
    "--over",
    metavar="COLUMN",
    help="With --groups: leave out values of this column, such as outlets, instead; prices are compared within them.",
)
@period_option
@role_options
def index_command(
    panel: Path,
    method: tuple[str, ...],
    out: Path,
    by: tuple[str, ...],
    groups: int | None,
    over: str | None,
    as_json: bool,
    **settings: Any,
) -> int:
    """Indexes straight from a panel file (Parquet or CSV), one row per product and period.

    Writes the --by columns, the period as given, index (first period = 100), products, and matched: products also sold
    in the period before. Settings given more than once are combined, each with a column of its own.

    \b
    Example:
        tillwright index panel.parquet --method geks-tornqvist --method tpd --window 25 --by ea --out index.csv
    """
    from tillwright.api.indexes import indexes

    check_ending(out)
    frame = read_panel(panel, (*by, settings["product"], *([over] if over else [])))
    result = indexes(frame, one_or_more(method), groups=groups, over=over, by=by, **_passed_on(settings))
    told = [name for name in ("method", "form", "window", "splice", "onto") if name in result.columns]
    series = result.select(*by, *told).n_unique() if by or told else 1
    facts = {"series": series, "empty": result["index"].null_count()}
    write_result(result, out, as_json=as_json, method=one_or_more(method), **facts)
    return 0


@click.command("places")
@panel_argument
@click.option(
    "--method", type=click.Choice(PLACE_METHODS), required=True, multiple=True, help="Method. May be repeated."
)
@click.option("--place", default="region", show_default=True, metavar="COLUMN", help="Column of the places.")
@click.option(
    "--base",
    multiple=True,
    metavar="PLACE",
    help="Place that is 100; of several, their geometric mean.  [default: all places]",
)
@output_options
@_groups
@_unconnected
@role_options
def places_command(
    panel: Path,
    method: tuple[str, ...],
    place: str,
    base: tuple[str, ...],
    out: Path,
    by: tuple[str, ...],
    groups: int | None,
    as_json: bool,
    unconnected: Unconnected,
    **columns: str,
) -> int:
    """Price levels of places, such as regions or outlets, from a file with one row per product and place.

    Writes the --by columns (give the period here), the place, its level, products sold there, and shared: products also
    sold in another place.

    \b
    Example:
        tillwright places panel.parquet --place region --method geks-fisher --by period --out levels.csv
    """
    from tillwright.api.places import place_levels

    check_ending(out)
    frame = read_panel(panel, (*by, place, columns["product"]))
    result = place_levels(
        frame,
        one_or_more(method),
        place=place,
        base=list(base) or None,
        groups=groups,
        unconnected=unconnected,
        by=by,
        **columns,
    )
    facts = {"places": result[place].n_unique(), "empty": result["level"].null_count()}
    write_result(result, out, as_json=as_json, method=one_or_more(method), **facts)
    return 0


@click.command("contributions")
@panel_argument
@click.argument("start")
@click.argument("end")
@_settings
@output_options
@period_option
@role_options
def contributions_command(
    panel: Path,
    start: str,
    end: str,
    method: tuple[str, ...],
    out: Path,
    by: tuple[str, ...],
    as_json: bool,
    **settings: Any,
) -> int:
    """What each product contributes to the change of an index from period START to END.

    Writes the --by columns, the product, its status (continuing, entering, exiting, neither, or splice for what linking
    windows moved), its contribution in percentage points, and its price and share of turnover in both periods.
    Contributions add up to the change exactly.

    \b
    Example:
        tillwright contributions panel.parquet 2024-01 2024-02 --method geks-tornqvist --window 25 --out parts.csv
    """
    from tillwright.api.contributions import contributions

    check_ending(out)
    frame = read_panel(panel, (*by, settings["product"]))
    result = contributions(frame, one_or_more(method), start, end, by=by, **_passed_on(settings))
    missing = result.filter(result["status"] == "missing").height
    write_result(result, out, as_json=as_json, method=one_or_more(method), start=start, end=end, missing=missing)
    return 0


def _passed_on(settings: dict[str, Any]) -> dict[str, Any]:
    """The settings of an index as the functions take them."""
    passed = {
        name: one_or_more(value) if name in {"form", "window", "splice", "onto"} else value
        for name, value in settings.items()
    }
    return passed | {
        "window": one_or_more(settings["window"]) if settings["window"] else None,
        "weight_period": list(settings["weight_period"]) or None,
    }
