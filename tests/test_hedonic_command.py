"""`tillwright hedonic`: the same as `tw.hedonic`, from file to file, and what becomes of thin groups."""

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
from click.testing import CliRunner, Result
from polars.testing import assert_frame_equal

import tillwright as tw
from tillwright.choices import HEDONIC_METHODS
from tillwright.cli import commands
from tillwright.errors import CallError, MissingColumns, TooFewObservations, UnconnectedPeriods

MONTHS = ("2024-01", "2024-02", "2024-03", "2024-04")
ATTRIBUTES: dict[str, Any] = {"numeric": ["power"], "logs": ["size"], "categorical": ["wood"]}
OPTIONS = ("--numeric", "power", "--log", "size", "--categorical", "wood", "--by", "shelf")
WRITTEN = 1e-15
"""A CSV file holds the shortest text that reads back as the same number."""
Hedonic = Callable[..., Result]


@pytest.fixture
def hedonic() -> Hedonic:
    def run(*arguments: str | Path) -> Result:
        given = [str(argument) for argument in ("hedonic", *arguments)]
        return CliRunner().invoke(commands, given, standalone_mode=False, catch_exceptions=False)

    return run


def panel(seed: int = 3, *, products: int = 60) -> pl.DataFrame:
    """Invented tables on two shelves that come and go, and their attributes; the code of wood looks like a number."""
    rng = np.random.default_rng(seed)
    rows = []
    for shelf in ("01.1", "01.10"):
        for number in range(products):
            wood, size, power = ("07", "7", "oak")[number % 3], float(rng.uniform(50, 200)), float(rng.normal())
            start, life = int(rng.integers(-1, 3)), int(rng.integers(2, 4))
            for month in range(max(start, 0), min(start + life, 4)):
                log = np.log(size) + 0.1 * power + 0.2 * (wood == "oak") + 0.05 * month + rng.normal(0, 0.1)
                row = {"shelf": shelf, "period": MONTHS[month], "product": f"table {number}", "wood": wood}
                figures = {"size": size, "power": power, "price": float(np.exp(log)), "quantity": rng.integers(1, 20)}
                rows.append({**row, **figures})
    return pl.DataFrame(rows)


def thin(frame: pl.DataFrame, least: int = 5) -> pl.DataFrame:
    """The panel with few tables left on the shelf 01.10 in the third month."""
    few = frame.filter(pl.col("shelf") == "01.10", pl.col("period") == MONTHS[2]).head(least - 1)
    return pl.concat([frame.filter((pl.col("shelf") != "01.10") | (pl.col("period") != MONTHS[2])), few])


def written(frame: pl.DataFrame, folder: Path, ending: str = ".parquet") -> Path:
    path = folder / f"panel{ending}"
    if ending == ".csv":
        frame.write_csv(path)
    else:
        frame.write_parquet(path)
    return path


@pytest.mark.parametrize("ending", [".parquet", ".csv"])
@pytest.mark.parametrize("method", HEDONIC_METHODS)
def test_every_method_gives_what_the_function_gives(hedonic: Hedonic, tmp_path: Path, method: Any, ending: str) -> None:
    out = tmp_path / "index.parquet"
    result = hedonic(written(panel(), tmp_path, ending), "--method", method, *OPTIONS, "--least", 10, "--out", out)
    assert result.return_value == 0
    expected = tw.hedonic(panel(), method, by="shelf", least=10, **ATTRIBUTES).indexes
    assert_frame_equal(pl.read_parquet(out), expected)
    assert result.output == f"{out}: {method}, 2 series, 8 rows.\n"


def test_a_time_dummy_is_the_default(hedonic: Hedonic, tmp_path: Path) -> None:
    out = tmp_path / "index.parquet"
    hedonic(written(panel(), tmp_path), *OPTIONS, "--out", out)
    assert_frame_equal(pl.read_parquet(out), tw.hedonic(panel(), by="shelf", **ATTRIBUTES).indexes)


@pytest.mark.parametrize(
    ("options", "settings"),
    [
        (("--unweighted",), {"weighted": False}),
        (("--errors", "HC1"), {"errors": "HC1"}),
        (("--method", "imputation", "--form", "direct"), {"method": "imputation", "form": "direct"}),
        (("--method", "imputation", "--regressions", "pooled"), {"method": "imputation", "regressions": "pooled"}),
        (("--missing", "leave-out"), {"missing": "leave-out"}),
    ],
    ids=str,
)
def test_settings_are_passed_on(
    hedonic: Hedonic, tmp_path: Path, options: tuple[str, ...], settings: dict[str, Any]
) -> None:
    frame = panel().with_columns(wood=pl.when(pl.col("wood") == "07").then(None).otherwise("wood"))
    out = tmp_path / "index.parquet"
    hedonic(written(frame, tmp_path), *OPTIONS, "--least", 10, *options, "--out", out)
    expected = tw.hedonic(frame, by="shelf", **{"least": 10, **settings}, **ATTRIBUTES)
    assert_frame_equal(pl.read_parquet(out), expected.indexes)
    plain = tw.hedonic(frame, by="shelf", least=10, **ATTRIBUTES).indexes
    assert not pl.read_parquet(out).equals(plain)


def test_columns_of_other_names_are_named(hedonic: Hedonic, tmp_path: Path) -> None:
    names = {"period": "month", "product": "code", "price": "unit", "quantity": "sold"}
    out = tmp_path / "index.parquet"
    roles = [part for role, name in names.items() for part in (f"--{role}", name)]
    hedonic(written(panel().rename(names), tmp_path), *OPTIONS, *roles, "--out", out)
    expected = tw.hedonic(panel(), by="shelf", **ATTRIBUTES).indexes
    assert_frame_equal(pl.read_parquet(out), expected.rename({"period": "month"}))


@pytest.mark.parametrize("method", ["time-dummy", "geks-imputation"])
@pytest.mark.parametrize("ending", [".parquet", ".csv", ".json"])
def test_diagnostics_are_files_of_the_format_of_the_index(
    hedonic: Hedonic, tmp_path: Path, ending: str, method: Any
) -> None:
    # The second attribute of two that say the same is dropped, and told; a price fifty times too high lies outside.
    wrong = pl.when(pl.int_range(pl.len()) == 0).then(50).otherwise(1)
    frame = panel().with_columns(horses=pl.col("power") * 2, price=pl.col("price") * wrong)
    out, folder = tmp_path / f"index{ending}", tmp_path / "more" / "diagnostics"
    options = ("--method", method, "--numeric", "power", "--numeric", "horses", "--by", "shelf", "--least", "10")
    result = hedonic(written(frame, tmp_path), *options, "--out", out, "--diagnostics", folder)
    expected = tw.hedonic(frame, method, numeric=["power", "horses"], by="shelf", least=10)
    assert expected.outliers.height > 0
    for name in ("coefficients", "fit", "outliers"):
        path, told = folder / f"{name}{ending}", getattr(expected, name)
        assert str(path) in result.output
        if ending == ".parquet":
            found = pl.read_parquet(path)
        elif ending == ".csv":
            found = pl.read_csv(path, schema_overrides={"shelf": pl.String})
            if name == "fit":
                assert [json.loads(text) for text in found["dropped"]] == told["dropped"].to_list()
                found = found.with_columns(told["dropped"])
        else:
            found = pl.DataFrame(json.loads(path.read_text(encoding="utf-8")), schema=told.schema)
        assert_frame_equal(found, told, rel_tol=WRITTEN)
    assert expected.fit["dropped"].to_list()[0] == ["horses"]
    assert sorted(path.name for path in folder.iterdir()) == [
        f"{n}{ending}" for n in ("coefficients", "fit", "outliers")
    ]


def test_json_tells_what_was_written(hedonic: Hedonic, tmp_path: Path) -> None:
    out, folder = tmp_path / "index.csv", tmp_path / "diagnostics"
    result = hedonic(written(panel(), tmp_path), *OPTIONS, "--out", out, "--diagnostics", folder, "--json")
    assert json.loads(result.output) == {
        "out": str(out),
        "method": "time-dummy",
        "series": 2,
        "empty": 0,
        "diagnostics": [str(folder / f"{name}.csv") for name in ("coefficients", "fit", "outliers")],
        "rows": 8,
    }


def test_a_thin_group_is_refused_by_name_with_the_number_of_others(hedonic: Hedonic, tmp_path: Path) -> None:
    frame, out = thin(panel()), tmp_path / "index.csv"
    options = ("--method", "geks-imputation", *OPTIONS, "--least", "5", "--out", out)
    with pytest.raises(TooFewObservations, match=r"for shelf 01\.10 in period 2024-03: it has 4 prices.*thin 'blank'"):
        hedonic(written(frame, tmp_path), *options)
    assert not out.exists()
    with pytest.raises(TooFewObservations, match=r"for shelf 01\.1: .* 1 more groups fail likewise\."):
        hedonic(written(panel(), tmp_path), *OPTIONS, "--least", 1000, "--out", out)


@pytest.mark.parametrize("method", HEDONIC_METHODS)
def test_blank_leaves_a_thin_group_or_month_empty_and_the_others_as_they_are(
    hedonic: Hedonic, tmp_path: Path, method: Any
) -> None:
    # A time dummy has one regression over all months: its group is thin as a whole, or not at all.
    whole = method == "time-dummy"
    frame = thin(panel(), 5)
    few = frame.filter(pl.col("shelf") == "01.10")
    least = few.height + 1 if whole else 5
    if whole:
        frame = pl.concat(
            [frame, panel(4).filter(pl.col("shelf") == "01.1").with_columns(product="again " + pl.col("product"))]
        )
    out = tmp_path / "index.parquet"
    options = ("--method", method, *OPTIONS, "--least", least, "--thin", "blank", "--out", out)
    result = hedonic(written(frame, tmp_path), *options, "--diagnostics", tmp_path / "d")
    found = pl.read_parquet(out)
    blank = found.filter(shelf="01.10")
    assert blank["index"].is_null().to_list() == ([True] * 4 if whole else [False, False, True, False])
    assert f" {4 if whole else 1} levels empty" in result.output
    alone = tw.hedonic(frame.filter(shelf="01.1"), method, by="shelf", least=least, **ATTRIBUTES)
    assert_frame_equal(found.filter(shelf="01.1"), alone.indexes)
    if whole:
        assert pl.read_parquet(tmp_path / "d/fit.parquet")["shelf"].to_list() == ["01.1"]
        assert blank["standard_error"].is_null().all()
    else:
        rest = few.filter(pl.col("period") != MONTHS[2])
        expected = tw.hedonic(rest, method, least=least, **ATTRIBUTES).indexes["index"]
        assert blank["index"].drop_nulls().to_list() == pytest.approx(expected.to_list(), rel=1e-12)


def test_blank_leaves_empty_what_every_regression_is_too_thin_for() -> None:
    for method in HEDONIC_METHODS:
        made = tw.hedonic(panel(), method, by="shelf", least=1000, thin="blank", **ATTRIBUTES)
        assert made.indexes["index"].is_null().all()
        assert made.indexes.columns[:3] == ["shelf", "period", "index"]
        assert made.coefficients.is_empty()
        assert made.fit.is_empty()
        assert made.outliers.is_empty()
        full = tw.hedonic(panel(), method, by="shelf", least=5, **ATTRIBUTES)
        for name in ("indexes", "coefficients", "fit", "outliers"):
            assert getattr(made, name).schema == getattr(full, name).schema


def test_periods_with_nothing_to_compare_are_refused_or_blank() -> None:
    # Wood that is sold in one month only cannot be predicted in any other, so no pair of months has anything.
    frame = panel().with_columns(wood=pl.col("period"), product=pl.col("product") + pl.col("period"))
    settings: dict[str, Any] = {"categorical": ["wood"], "by": "shelf", "least": 5}
    with pytest.raises(UnconnectedPeriods, match=r"of shelf 01\.1: .*1 more groups fail likewise"):
        tw.hedonic(frame, "geks-imputation", **settings)
    blank = tw.hedonic(frame, "geks-imputation", thin="blank", **settings)
    assert blank.indexes["index"].is_null().all()


@pytest.mark.parametrize(
    ("error", "said", "options"),
    [
        (CallError, "No attribute", ()),
        (CallError, "--out is", ("--numeric", "size", "--out", "index.txt")),
        (MissingColumns, "'colour'", ("--categorical", "colour")),
        (CallError, "not a file", ("--numeric", "size", "absent")),
    ],
)
def test_what_makes_no_sense_is_told_before_anything_is_written(
    hedonic: Hedonic, tmp_path: Path, error: type[Exception], said: str, options: tuple[str, ...]
) -> None:
    source = tmp_path / "absent.parquet" if "absent" in options else written(panel(), tmp_path)
    given = [option for option in options if option != "absent"]
    with pytest.raises(error, match=said):
        hedonic(source, "--out", tmp_path / "index.csv", *given)
    assert not (tmp_path / "index.csv").exists()


def test_a_thin_that_is_no_choice_is_told() -> None:
    with pytest.raises(CallError, match="thin is 'skip'; allowed: refuse, blank"):
        tw.hedonic(panel(), by="shelf", thin="skip", **ATTRIBUTES)  # type: ignore[arg-type]
