"""What commands on a panel file share: options, and reading and writing their files."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tillwright.errors import CallError, DataError

if TYPE_CHECKING:
    import polars as pl

ENDINGS = (".parquet", ".csv", ".json")
Decorator = Callable[[Callable[..., Any]], Callable[..., Any]]


def together(*decorators: Decorator) -> Decorator:
    """Several decorators as one, in the order of the help."""

    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        for one in reversed(decorators):
            function = one(function)
        return function

    return decorate


panel_argument = click.argument("panel", type=click.Path(path_type=Path))
output_options = together(
    click.option(
        "--out", type=click.Path(path_type=Path), required=True, help="File to write: .parquet, .csv or .json."
    ),
    click.option(
        "--by", multiple=True, metavar="COLUMN", help="Column that splits the panel, one result each; may be repeated."
    ),
)
role_options = together(
    click.option("--product", default="product", show_default=True, metavar="COLUMN"),
    click.option("--price", default="price", show_default=True, metavar="COLUMN", help="Currency per unit."),
    click.option("--quantity", default="quantity", show_default=True, metavar="COLUMN", help="Units."),
    click.option("--json", "as_json", is_flag=True, help="Tell what was written as JSON."),
)
period_option = click.option(
    "--period", default="period", show_default=True, metavar="COLUMN", help="Date, 2024-03, 2024-W07 or integer."
)


def one_or_more(values: Sequence[Any]) -> Any:
    """A single value by itself, which adds no column to the result."""
    return values[0] if len(values) == 1 else list(values)


def check_ending(out: Path) -> None:
    """Raise CallError for a file whose ending names no format."""
    if out.suffix.lower() not in ENDINGS:
        raise CallError(f"--out is '{out}'; its ending says the format and must be one of {', '.join(ENDINGS)}.")


def write_result(result: pl.DataFrame, out: Path, *, as_json: bool, method: str | list[str], **facts: Any) -> None:
    """Write the result of a command and tell what was written."""
    from tillwright.store.workspace import write_frame

    write_frame(result, out)
    if as_json:
        click.echo(json.dumps({"out": str(out), "method": method, **facts, "rows": result.height}))
        return
    named = method if isinstance(method, str) else ", ".join(method)
    words = {"series": "series", "places": "places", "empty": "levels empty", "missing": "groups missing"}
    counted = "".join(f"{facts[name]} {word}, " for name, word in words.items() if facts.get(name))
    click.echo(f"{out}: {named}, {counted}{result.height} rows.")


def read_panel(path: Path, codes: Sequence[str]) -> pl.DataFrame:
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
