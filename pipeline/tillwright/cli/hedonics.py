"""The command `hedonic`: indexes adjusted for quality, from a panel file with attributes."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from tillwright.choices import COEFFICIENT_ERRORS, FORMS, HEDONIC_METHODS, MISSING, REGRESSIONS, THIN, HedonicMethod
from tillwright.cli.options import (
    Decorator,
    check_ending,
    output_options,
    panel_argument,
    period_option,
    read_panel,
    role_options,
    together,
    write_result,
)
from tillwright.kernels.hedonic import LEAST_OBSERVATIONS

if TYPE_CHECKING:
    from tillwright.api.hedonics import Hedonics

DIAGNOSTICS = ("coefficients", "fit", "outliers")


def _attribute(name: str, target: str, text: str) -> Decorator:
    return click.option(name, target, multiple=True, metavar="COLUMN", help=text + " May be repeated.")


_regression = together(
    _attribute("--numeric", "numeric", "Attribute that enters as it is."),
    _attribute("--log", "logs", "Attribute that enters as its natural log."),
    _attribute("--categorical", "categorical", "Attribute that enters as dummies."),
    click.option(
        "--weighted/--unweighted",
        default=True,
        show_default=True,
        help="Whether regressions are weighted by expenditure shares.",
    ),
    click.option(
        "--form", type=click.Choice(FORMS), default="chained", show_default=True, help="Form of --method imputation."
    ),
    click.option(
        "--regressions",
        type=click.Choice(REGRESSIONS),
        default="period",
        show_default=True,
        help="Of imputation: one in each period, or one over all.",
    ),
    click.option(
        "--errors",
        type=click.Choice(COEFFICIENT_ERRORS),
        default="classical",
        show_default=True,
        help="Standard errors; HC1 holds whatever the variances.",
    ),
    click.option(
        "--missing",
        type=click.Choice(MISSING),
        default="category",
        show_default=True,
        help="Products without a category: a category of their own, or left out.",
    ),
    click.option(
        "--least",
        type=click.IntRange(min=1),
        default=LEAST_OBSERVATIONS,
        show_default=True,
        help="Fewest prices to make a regression of.",
    ),
    click.option(
        "--thin",
        type=click.Choice(THIN),
        default="refuse",
        show_default=True,
        help="What has too few prices, or nothing to compare: refuse to go on, or leave it blank.",
    ),
)


@click.command("hedonic")
@panel_argument
@click.option(
    "--method",
    type=click.Choice(HEDONIC_METHODS),
    default="time-dummy",
    show_default=True,
    help="Read off period dummies, or products that enter or exit imputed (geks: all periods with all).",
)
@_regression
@output_options
@click.option(
    "--diagnostics",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for coefficients, fit and outliers, in the format of --out.",
)
@period_option
@role_options
def hedonic_command(
    panel: Path,
    method: HedonicMethod,
    out: Path,
    by: tuple[str, ...],
    diagnostics: Path | None,
    as_json: bool,
    **settings: Any,
) -> int:
    """Indexes adjusted for quality, from a panel file (Parquet or CSV) that also holds attributes of the products.

    Writes the --by columns, the period as given, index (first period = 100), observations of the regressions, and of a
    time dummy the standard_error of the index.

    \b
    Example:
        tillwright hedonic panel.parquet --numeric fat --log size --categorical brand --by ea --out index.csv
    """
    from tillwright.api.hedonics import hedonic

    check_ending(out)
    frame = read_panel(panel, (*by, settings["product"], *settings["categorical"]))
    result = hedonic(frame, method, by=by, **settings)
    written = _write_diagnostics(result, diagnostics, out.suffix.lower()) if diagnostics else []
    index = result.indexes
    series = index.select(by).n_unique() if by else 1
    told = {"diagnostics": written} if written else {}
    facts = {"series": series, "empty": index["index"].null_count()}
    write_result(index, out, as_json=as_json, method=method, **facts, **told)
    if written and not as_json:
        click.echo(f"Diagnostics: {', '.join(written)}.")
    return 0


def _write_diagnostics(result: Hedonics, folder: Path, ending: str) -> list[str]:
    """Write a file for each table of diagnostics; their names. CSV, which has no lists, takes them as JSON."""
    import polars as pl

    from tillwright.store.workspace import write_frame

    written = []
    for name in DIAGNOSTICS:
        table: pl.DataFrame = getattr(result, name)
        if ending == ".csv" and "dropped" in table.columns:
            names = [json.dumps(dropped, ensure_ascii=False) for dropped in table["dropped"].to_list()]
            table = table.with_columns(pl.Series("dropped", names, pl.String))
        path = folder / f"{name}{ending}"
        write_frame(table, path)
        written.append(str(path))
    return written
