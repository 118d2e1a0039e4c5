"""Commands that work on a panel file, without a plan: index, places and contributions."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tillwright.choices import FORMS, METHODS, ONTO, PLACE_METHODS, SPLICES, UNCONNECTED, Unconnected
from tillwright.errors import CallError, DataError

if TYPE_CHECKING:
    import polars as pl

ENDINGS = (".parquet", ".csv", ".json")
Decorator = Callable[[Callable[..., Any]], Callable[..., Any]]


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


def _together(*decorators: Decorator) -> Decorator:
    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        for one in reversed(decorators):
            function = one(function)
        return function

    return decorate


_panel = click.argument("panel", type=click.Path(path_type=Path))
_output = _together(
    click.option(
        "--out", type=click.Path(path_type=Path), required=True, help="File to write: .parquet, .csv or .json."
    ),
    click.option(
        "--by", multiple=True, metavar="COLUMN", help="Column that splits the panel, one result each; may be repeated."
    ),
)
_roles = _together(
    click.option("--product", default="product", show_default=True, metavar="COLUMN"),
    click.option("--price", default="price", show_default=True, metavar="COLUMN", help="Currency per unit."),
    click.option("--quantity", default="quantity", show_default=True, metavar="COLUMN", help="Units."),
    click.option("--json", "as_json", is_flag=True, help="Tell what was written as JSON."),
)
_period = click.option(
    "--period", default="period", show_default=True, metavar="COLUMN", help="Date, YYYY-MM or integer."
)
_groups = click.option(
    "--groups",
    type=click.IntRange(min=2),
    help="Add standard errors, by leaving out each of so many groups of products in turn.",
)


def _settings(*, several: bool) -> Decorator:
    """How an index is made; each option may be repeated where several are taken."""
    again = " May be repeated." if several else ""

    def choose(name: str, choices: Sequence[str], default: str, text: str) -> Decorator:
        return click.option(
            name,
            type=click.Choice(choices),
            default=[default] if several else default,
            show_default=True,
            multiple=several,
            help=text + again,
        )

    return _together(
        click.option(
            "--method",
            type=click.Choice(METHODS),
            required=True,
            multiple=several,
            help="Formula or multilateral method." + again,
        ),
        click.option(
            "--window",
            type=WindowLength(),
            multiple=several,
            help=f"Periods in a window, expanding (from the last link month on), or all.{again}  [default: all]",
        ),
        choose("--splice", SPLICES, "mean", "Link of later windows."),
        choose("--onto", ONTO, "published", "Series that windows are linked onto."),
        choose("--form", FORMS, "chained", "Form of bilateral formulas."),
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
    )


@click.command("index")
@_panel
@_settings(several=True)
@_output
@_groups
@click.option("--over", metavar="COLUMN", help="Group the values of this column, such as the outlet, instead.")
@click.option(
    "--unconnected",
    type=click.Choice(UNCONNECTED),
    default="refuse",
    show_default=True,
    help="What to do where the periods of a window share no products.",
)
@_period
@_roles
def index_command(
    panel: Path,
    method: tuple[str, ...],
    window: tuple[Any, ...],
    splice: tuple[Any, ...],
    onto: tuple[Any, ...],
    form: tuple[Any, ...],
    weight_period: tuple[str, ...],
    link_month: int,
    out: Path,
    by: tuple[str, ...],
    groups: int | None,
    over: str | None,
    unconnected: Unconnected,
    as_json: bool,
    **columns: str,
) -> int:
    """Indexes straight from a panel file (Parquet or CSV), one row per product and period.

    Writes the --by columns, the period as given, index (first period = 100), products, and matched: products also sold
    in the period before. Settings given more than once are combined, each with a column of its own.

    \b
    Example:
        tillwright index panel.parquet --method geks-tornqvist --method tpd --window 25 --by ea --out index.csv
    """
    from tillwright.api.indexes import indexes

    _check_ending(out)
    codes = (*by, columns["product"], *([over] if over else []))
    result = indexes(
        _read_panel(panel, codes),
        _one_or_more(method),
        form=_one_or_more(form),
        window=_one_or_more(window) if window else None,
        splice=_one_or_more(splice),
        onto=_one_or_more(onto),
        weight_period=list(weight_period) or None,
        link_month=link_month,
        unconnected=unconnected,
        groups=groups,
        over=over,
        by=by,
        **columns,
    )
    settings = [name for name in ("method", "form", "window", "splice", "onto") if name in result.columns]
    series = result.select(*by, *settings).n_unique() if by or settings else 1
    _write(result, out, as_json=as_json, method=_one_or_more(method), series=series)
    return 0


@click.command("places")
@_panel
@click.option(
    "--method", type=click.Choice(PLACE_METHODS), required=True, multiple=True, help="Method. May be repeated."
)
@click.option("--place", default="region", show_default=True, metavar="COLUMN", help="Column of the places.")
@click.option("--base", metavar="PLACE", help="Place that is 100.  [default: the geometric mean of all]")
@_output
@_groups
@_roles
def places_command(
    panel: Path,
    method: tuple[str, ...],
    place: str,
    base: str | None,
    out: Path,
    by: tuple[str, ...],
    groups: int | None,
    as_json: bool,
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

    _check_ending(out)
    frame = _read_panel(panel, (*by, place, columns["product"]))
    result = place_levels(frame, _one_or_more(method), place=place, base=base, groups=groups, by=by, **columns)
    _write(result, out, as_json=as_json, method=_one_or_more(method), places=result[place].n_unique())
    return 0


@click.command("contributions")
@_panel
@click.argument("start")
@click.argument("end")
@_settings(several=False)
@_output
@_period
@_roles
def contributions_command(
    panel: Path,
    start: str,
    end: str,
    method: str,
    weight_period: tuple[str, ...],
    out: Path,
    by: tuple[str, ...],
    as_json: bool,
    **settings: Any,
) -> int:
    """What each product contributes to the change of an index from period START to END.

    Writes the --by columns, the product, its status (continuing, entering, exiting, between, or splice for what linking
    windows moved) and its contribution in percentage points; they add up to the change exactly.

    \b
    Example:
        tillwright contributions panel.parquet 2024-01 2024-02 --method geks-tornqvist --window 25 --out parts.csv
    """
    from tillwright.api.contributions import contributions

    _check_ending(out)
    frame = _read_panel(panel, (*by, settings["product"]))
    weights = list(weight_period) or None
    result = contributions(frame, method, start, end, weight_period=weights, by=by, **settings)
    _write(result, out, as_json=as_json, method=method, start=start, end=end)
    return 0


def _one_or_more(values: Sequence[Any]) -> Any:
    """A single value by itself, which adds no column to the result."""
    return values[0] if len(values) == 1 else list(values)


def _check_ending(out: Path) -> None:
    if out.suffix.lower() not in ENDINGS:
        raise CallError(f"--out is '{out}'; its ending says the format and must be one of {', '.join(ENDINGS)}.")


def _write(result: pl.DataFrame, out: Path, *, as_json: bool, method: str | list[str], **facts: Any) -> None:
    from tillwright.store.workspace import write_frame

    write_frame(result, out)
    if as_json:
        click.echo(json.dumps({"out": str(out), "method": method, **facts, "rows": result.height}))
        return
    named = method if isinstance(method, str) else ", ".join(method)
    counted = "".join(f"{value} {name}, " for name, value in facts.items() if name in {"series", "places"})
    click.echo(f"{out}: {named}, {counted}{result.height} rows.")


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
