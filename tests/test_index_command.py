"""`tillwright index` as DESIGN section 6 has it: the same as the Python functions, from file to file."""

import json
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
from click.testing import CliRunner, Result

import tillwright as tw
from tillwright.choices import (
    BASE_WEIGHTED_FORMULAS,
    BILATERAL_FORMULAS,
    FORMS,
    METHODS,
    MULTILATERAL_METHODS,
    ONTO,
    SPLICES,
)
from tillwright.cli import commands

MONTHS = ("2024-01", "2024-02", "2024-03", "2024-04", "2024-05")
Index = Callable[..., Result]


@pytest.fixture
def index() -> Index:
    def run(*arguments: str | Path) -> Result:
        given = [str(argument) for argument in ("index", *arguments)]
        return CliRunner().invoke(commands, given, standalone_mode=False, catch_exceptions=False)

    return run


def panel(seed: int = 3) -> pl.DataFrame:
    """Two aggregates in two regions, four products each, some of them coming late or ending early."""
    rng = np.random.default_rng(seed)
    rows = [
        {
            "ea": ea,
            "region": region,
            "product": f"{ea}{number}",
            "period": month,
            "price": round(float(np.exp(rng.normal(1, 0.2))), 2),
            "quantity": int(rng.integers(1, 40)),
        }
        for ea in ("milk", "tea")
        for region in ("north", "south")
        for number in range(4)
        for t, month in enumerate(MONTHS)
        if (number != 1 or t >= 2) and (number != 2 or t <= 2)
    ]
    return pl.DataFrame(rows)


def written(frame: pl.DataFrame, folder: Path, ending: str = ".parquet") -> Path:
    path = folder / f"panel{ending}"
    if ending == ".csv":
        frame.write_csv(path)
    else:
        frame.write_parquet(path)
    return path


def expected(frame: pl.DataFrame, method: str, **settings: Any) -> pl.DataFrame:
    call = tw.multilateral if method in MULTILATERAL_METHODS else tw.bilateral
    return call(frame, method, **settings)


@pytest.mark.parametrize("ending", [".parquet", ".csv"])
@pytest.mark.parametrize("method", METHODS)
def test_every_method_gives_what_the_function_gives(index: Index, tmp_path: Path, method: str, ending: str) -> None:
    frame = panel().filter(pl.col("ea") == "milk", pl.col("region") == "north")
    out = tmp_path / "index.parquet"
    weighted = method in BASE_WEIGHTED_FORMULAS
    options = ("--weight-period", MONTHS[0], "--weight-period", MONTHS[1]) if weighted else ()
    result = index(written(frame, tmp_path, ending), "--method", method, *options, "--out", out)
    assert result.return_value == 0
    asked = {"weight_period": MONTHS[:2]} if weighted else {}
    assert pl.read_parquet(out).equals(expected(frame, method, **asked))


@pytest.mark.parametrize("form", FORMS)
def test_form_is_passed_on_and_chained_by_default(index: Index, tmp_path: Path, form: str) -> None:
    source, out = written(panel(), tmp_path), tmp_path / "index.parquet"
    index(source, "--method", "fisher", "--by", "ea", "--by", "region", "--form", form, "--out", out)
    assert pl.read_parquet(out).equals(expected(panel(), "fisher", by=["ea", "region"], form=form))
    index(source, "--method", "fisher", "--by", "ea", "--by", "region", "--out", out)
    assert pl.read_parquet(out).equals(expected(panel(), "fisher", by=["ea", "region"]))


@pytest.mark.parametrize("splice", [name for name in SPLICES if name != "link-month"])
@pytest.mark.parametrize("onto", ONTO)
def test_window_splice_and_onto_are_passed_on(index: Index, tmp_path: Path, splice: str, onto: str) -> None:
    source, out = written(panel(), tmp_path), tmp_path / "index.parquet"
    options = ("--window", "3", "--splice", splice, "--onto", onto)
    index(source, "--method", "geks-tornqvist", "--by", "ea", "--by", "region", *options, "--out", out)
    asked = expected(panel(), "geks-tornqvist", by=["ea", "region"], window=3, splice=splice, onto=onto)
    assert pl.read_parquet(out).equals(asked)


def test_defaults_are_one_window_mean_and_published(index: Index, tmp_path: Path) -> None:
    source, out = written(panel(), tmp_path), tmp_path / "index.parquet"
    index(source, "--method", "geks-fisher", "--by", "ea", "--by", "region", "--out", out)
    assert pl.read_parquet(out).equals(expected(panel(), "geks-fisher", by=["ea", "region"], window=None))
    index(source, "--method", "geks-fisher", "--by", "ea", "--by", "region", "--window", "3", "--out", out)
    asked = {"window": 3, "splice": "mean", "onto": "published"}
    assert pl.read_parquet(out).equals(expected(panel(), "geks-fisher", by=["ea", "region"], **asked))


def test_by_columns_come_first_then_period_index_products_and_matched(index: Index, tmp_path: Path) -> None:
    out = tmp_path / "index.csv"
    index(written(panel(), tmp_path), "--method", "jevons", "--by", "region", "--by", "ea", "--out", out)
    found = pl.read_csv(out)
    assert found.columns == ["region", "ea", "period", "index", "products", "matched"]
    assert found.select("region", "ea").n_unique() == 4
    first = found.filter(pl.col("period") == MONTHS[0])
    assert (first["index"] == 100.0).all()
    assert (first["products"] == 3).all()
    assert (first["matched"] == 0).all()
    second = found.filter(pl.col("period") == MONTHS[2])
    assert (second["products"] == 4).all()
    assert (second["matched"] == 3).all()


@pytest.mark.parametrize("ending", [".parquet", ".csv"])
@pytest.mark.parametrize(
    "labels",
    [
        pytest.param([date(2024, month, 1) for month in range(1, 6)], id="date"),
        pytest.param(list(MONTHS), id="text"),
        pytest.param([9, 10, 11, 12, 13], id="integer"),
    ],
)
def test_periods_come_back_as_given(index: Index, tmp_path: Path, labels: list[Any], ending: str) -> None:
    frame = panel().filter(pl.col("ea") == "tea", pl.col("region") == "north")
    given = frame.with_columns(frame["period"].replace_strict(dict(zip(MONTHS, labels, strict=True))))
    out = tmp_path / f"index{ending}"
    assert index(written(given, tmp_path, ending), "--method", "tornqvist", "--out", out).return_value == 0
    found = pl.read_parquet(out) if ending == ".parquet" else pl.read_csv(out)
    kept = labels if ending == ".parquet" or not isinstance(labels[0], date) else [day.isoformat() for day in labels]
    assert found["period"].to_list() == kept
    np.testing.assert_array_equal(found["index"].to_numpy(), expected(frame, "tornqvist")["index"].to_numpy())


def test_the_three_endings_hold_the_same_at_full_precision(index: Index, tmp_path: Path) -> None:
    source = written(panel(), tmp_path)
    asked = expected(panel(), "geks-tornqvist", by=["ea", "region"])
    for ending in (".parquet", ".csv", ".json", ".CSV"):
        out = tmp_path / "new folder" / f"index{ending}"
        assert (
            index(source, "--method", "geks-tornqvist", "--by", "ea", "--by", "region", "--out", out).return_value == 0
        )
    folder = tmp_path / "new folder"
    assert pl.read_parquet(folder / "index.parquet").equals(asked)
    assert pl.read_csv(folder / "index.csv").equals(asked)
    assert pl.DataFrame(json.loads((folder / "index.json").read_text(encoding="utf-8"))).equals(asked)
    assert (folder / "index.CSV").read_bytes() == (folder / "index.csv").read_bytes()
    assert len(list(folder.iterdir())) == 4


def test_a_missing_level_is_an_empty_cell_or_null(index: Index, tmp_path: Path) -> None:
    frame = pl.DataFrame({"period": [1, 2], "product": ["a", "b"], "price": [1.0, 2.0], "quantity": [1, 1]})
    source = written(frame, tmp_path)
    index(source, "--method", "jevons", "--out", tmp_path / "index.json")
    assert json.loads((tmp_path / "index.json").read_text(encoding="utf-8"))[1]["index"] is None
    index(source, "--method", "jevons", "--out", tmp_path / "index.csv")
    assert (tmp_path / "index.csv").read_text(encoding="utf-8").splitlines()[2] == "2,,1,0"


def test_columns_are_named_by_options(index: Index, tmp_path: Path) -> None:
    frame = panel().filter(pl.col("ea") == "tea", pl.col("region") == "north")
    names = {"period": "month", "product": "gtin", "price": "unit_value", "quantity": "units"}
    options = [part for role, name in names.items() for part in (f"--{role}", name)]
    out = tmp_path / "index.parquet"
    index(written(frame.rename(names), tmp_path), "--method", "geks-fisher", *options, "--out", out)
    found = pl.read_parquet(out)
    assert found.columns == ["month", "index", "products", "matched"]
    assert found.rename({"month": "period"}).equals(expected(frame, "geks-fisher"))


def test_a_formula_of_prices_alone_needs_no_quantity_in_the_file(index: Index, tmp_path: Path) -> None:
    frame = panel().filter(pl.col("ea") == "tea", pl.col("region") == "north")
    out = tmp_path / "index.parquet"
    assert index(written(frame.drop("quantity"), tmp_path), "--method", "dutot", "--out", out).return_value == 0
    assert pl.read_parquet(out).equals(expected(frame, "dutot"))


def test_an_empty_price_in_a_csv_means_not_sold(index: Index, tmp_path: Path) -> None:
    frame = panel().filter(pl.col("ea") == "tea", pl.col("region") == "north")
    gone = (pl.col("product") == "tea3") & (pl.col("period") == MONTHS[1])
    emptied = frame.with_columns(pl.when(gone).then(None).otherwise(pl.col("price")).alias("price"))
    out = tmp_path / "index.parquet"
    index(written(emptied, tmp_path, ".csv"), "--method", "tornqvist", "--out", out)
    assert pl.read_parquet(out).equals(expected(frame.filter(~gone), "tornqvist"))


def test_codes_in_a_csv_are_text_and_not_numbers(index: Index, tmp_path: Path) -> None:
    # Read as numbers 01.1 and 01.10 are one heading, and 007 and 7 one product.
    source, out = tmp_path / "panel.csv", tmp_path / "index.csv"
    lines = ["period,product,price,quantity,ea"]
    for ea, growth in (("01.1", 1.1), ("01.10", 1.3)):
        for product in ("007", "7") if ea == "01.1" else ("8", "08"):
            lines += [f"2024-01,{product},1.0,1,{ea}", f"2024-02,{product},{growth},1,{ea}"]
    source.write_text("\n".join(lines) + "\n", encoding="utf-8")
    assert index(source, "--method", "jevons", "--by", "ea", "--out", out).return_value == 0
    found = pl.read_csv(out, infer_schema=False).select("ea", "period", "products")
    assert found.rows() == [
        ("01.1", "2024-01", "2"),
        ("01.1", "2024-02", "2"),
        ("01.10", "2024-01", "2"),
        ("01.10", "2024-02", "2"),
    ]


def test_a_file_that_was_there_is_replaced_whole(index: Index, tmp_path: Path) -> None:
    source, out = written(panel(), tmp_path), tmp_path / "index.csv"
    out.write_text("old\n" * 1000, encoding="utf-8")
    index(source, "--method", "jevons", "--by", "ea", "--by", "region", "--out", out)
    assert "old" not in out.read_text(encoding="utf-8")
    assert {path.name for path in tmp_path.iterdir()} == {"panel.parquet", "index.csv"}


def test_what_was_written_is_told_as_text_and_as_json(index: Index, tmp_path: Path) -> None:
    source, out = written(panel(), tmp_path), tmp_path / "index.csv"
    arguments = (source, "--method", "geks-fisher", "--by", "ea", "--by", "region", "--out", out)
    told = index(*arguments).stdout
    assert str(out) in told
    assert "4 series" in told
    said = json.loads(index(*arguments, "--json").stdout)
    assert said == {"out": str(out), "method": "geks-fisher", "series": 4, "empty": 0, "rows": 20}


def test_the_methods_on_offer_are_the_formulas_and_the_multilateral_methods() -> None:
    assert set(METHODS) == {*BILATERAL_FORMULAS, *BASE_WEIGHTED_FORMULAS, *MULTILATERAL_METHODS}
