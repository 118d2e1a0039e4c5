"""Scores of product definitions against figures by hand, a loop over sales, and what must hold on the sample."""

import itertools
import json
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import polars as pl
import pytest
from click.testing import CliRunner, Result

from tests.stages.plans import problems
from tests.stages.small import Row, feed, line, put, sections, write_plan
from tests.stages.test_successions import compiled as compiled_relaunches
from tillwright.cli import commands
from tillwright.errors import CallError
from tillwright.stages.compiling import Compiled, Request, carry_out
from tillwright.stages.definitions import assess_definitions
from tillwright.store.workspace import Workspace

SCORE = 1e-9
"""Sums of some hundred squares in float64, in another order."""
MASTER = {
    "feed": "shop",
    "file": "items.csv",
    "columns": {"item": "code", "brand": "make", "size": "pack"},
    "attributes": ["kind"],
}
WEIGHTS = "year,heading,weight\n2023,M,60\n2023,S,40\n2024,M,60\n2024,S,40\n"
Sold = dict[tuple[str, int], tuple[float, float]]


def sale(item: str, month: int, price: float, quantity: float) -> Row:
    return line(item=item, day=f"2024-{month:02d}-05", quantity=str(quantity), turnover=f"{price * quantity:.4f}")


def compile_sold(folder: Path, sold: Sold, items: str, *, link_month: int = 12, **changes: Any) -> Compiled:
    put(folder / "in/a.csv", [sale(item, month, *figures) for (item, month), figures in sold.items()])
    put(folder / "items.csv", items)
    put(folder / "assignment.csv", "item,ea\n" + "".join(f"{item},M\n" for item in sorted({item for item, _ in sold})))
    put(folder / "weights.csv", WEIGHTS)
    plan = sections(feed(), item_master=[changes.pop("master", MASTER)], screening={"extreme": "off"}, **changes)
    plan["weights"] |= {"link_month": link_month}
    return carry_out(Request(write_plan(folder, plan)))


def assess(made: Compiled) -> tuple[pl.DataFrame, dict[str, dict[str, Any]]]:
    """`definitions`, and `definition_scores` by definition."""
    workspace = made.context.workspace
    scores = assess_definitions(made.context.plan.source, workspace)
    written = workspace.read("definition_scores")
    assert scores.drop("label").sort("ea", "definition").equals(written)
    return workspace.read("definitions"), {row["definition"]: row for row in scores.to_dicts()}


# February is the worked example of tests/kernels/test_mars.py; in March only what the base lacks is sold.
BY_HAND: Sold = {
    ("A", 1): (2.0, 5),
    ("A", 2): (1.0, 3),
    ("B", 2): (3.0, 1),
    ("C", 2): (8.0, 4),
    ("C", 3): (8.0, 1),
}
ITEMS = "code,make,pack,kind\nA,X,1 kg,\nB,X,1 kg,\nC,Y,1 kg,\n"


def test_scores_of_three_items_worked_by_hand(tmp_path: Path) -> None:
    by_period, scores = assess(compile_sold(tmp_path, BY_HAND, ITEMS))
    found = {(row["definition"], row["period"].month): row for row in by_period.to_dicts()}
    assert {row["base"].month for row in found.values()} == {1}
    february = {name: (found[name, 2]["match"], found[name, 2]["r2"]) for name in ("item", "brand", "size", "(plan)")}
    # A and B are one product with quantity 4 of 8 and unit value 1.5; all spread is 87.5, between brands 84.5.
    assert february["item"] == february["(plan)"] == pytest.approx((3 / 8, 1.0), abs=SCORE)
    assert february["brand"] == pytest.approx((4 / 8, 84.5 / 87.5), abs=SCORE)
    assert february["size"] == pytest.approx((1.0, 0.0), abs=SCORE)
    march = {name: (found[name, 3]["match"], found[name, 3]["r2"]) for name in ("item", "brand", "size")}
    assert march == {"item": (0.0, 1.0), "brand": (0.0, 1.0), "size": (1.0, 1.0)}
    # Turnover is 38 in February and 8 in March.
    assert {found["item", month]["turnover"] for month in (2, 3)} == {38.0, 8.0}
    means = {name: scores[name]["score"] for name in ("item", "brand", "size")}
    assert means["item"] == pytest.approx(3 / 8 * 38 / 46, abs=SCORE)
    assert means["brand"] == pytest.approx(0.5 * 84.5 / 87.5 * 38 / 46, abs=SCORE)
    assert means["size"] == pytest.approx(8 / 46, abs=SCORE)
    assert {name: scores[name]["products"] for name in ("item", "brand", "size")} == {"item": 3, "brand": 2, "size": 1}


def test_of_equal_scores_the_simpler_definition_wins(tmp_path: Path) -> None:
    _, scores = assess(compile_sold(tmp_path, BY_HAND, ITEMS))
    assert scores["brand + size"]["score"] == pytest.approx(scores["brand"]["score"], abs=SCORE)
    assert [name for name, row in scores.items() if row["wins"]] == ["brand"]


def test_an_attribute_that_is_told_of_no_item_is_no_candidate_and_a_blank_one_stands_alone(tmp_path: Path) -> None:
    _, scores = assess(compile_sold(tmp_path / "blank", BY_HAND, ITEMS))
    assert set(scores) == {"item", "brand", "size", "brand + size", "(plan)"}
    _, scores = assess(compile_sold(tmp_path / "told", BY_HAND, ITEMS.replace("A,X,1 kg,", "A,X,1 kg,rye")))
    assert scores["kind"]["products"] == 3
    assert scores["kind"]["score"] == pytest.approx(scores["item"]["score"], abs=SCORE)


def test_combinations_of_the_plan_take_the_place_of_pairs(tmp_path: Path) -> None:
    items = ITEMS.replace("1 kg,", "1 kg,rye")
    plan = {"candidates": [["kind", "brand", "size"], ["size", "brand"]]}
    _, scores = assess(compile_sold(tmp_path, BY_HAND, items, products=plan))
    assert list(scores) == ["item", "brand", "size", "kind", "kind + brand + size", "size + brand", "(plan)"]


def test_a_combination_of_something_unknown_is_a_problem_of_the_plan(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line()])
    found = problems(tmp_path, sections(products={"candidates": [["brand"], ["brand", "colour"], ["item", "size"]]}))
    assert set(found) == {"products.candidates.1", "products.candidates.2"}
    assert "colour" in found["products.candidates.1"].found
    assert set(problems(tmp_path, sections(products={"candidates": [[]]}))) == {"products.candidates.0"}


def test_without_combinations_the_best_known_attributes_and_their_pairs_are_ten(tmp_path: Path) -> None:
    names = ["k1", "k2", "k3", "k4"]
    # k1 is told of B alone, which sells least; the others of more.
    rows = ["A,X,1 kg,,,r,s", "B,X,1 kg,p,,,", "C,Y,1 kg,,q,r,s"]
    items = f"code,make,pack,{','.join(names)}\n" + "\n".join(rows) + "\n"
    made = compile_sold(tmp_path, BY_HAND, items, master=MASTER | {"attributes": names})
    _, scores = assess(made)
    known = ["brand", "size", "k3", "k4"]
    pairs = [f"{one} + {other}" for one, other in itertools.combinations(known, 2)]
    assert list(scores) == ["item", *known, *pairs, "(plan)"]


def test_products_of_a_plan_with_successions_win_over_its_items(tmp_path: Path) -> None:
    # Of 90.00 a month, 40.00 is of a line of relaunches: 20 of 30 items match January from April on.
    by_period, scores = assess(compiled_relaunches(tmp_path, successions={}))
    found = {(row["definition"], row["period"].month): row["match"] for row in by_period.to_dicts()}
    assert found["item", 3] == 1.0
    assert [name for name, row in scores.items() if row["wins"]] == ["(plan)"]
    assert (scores["(plan)"]["match"], scores["(plan)"]["r2"]) == pytest.approx((1.0, 1.0), abs=SCORE)
    assert (scores["item"]["products"], scores["(plan)"]["products"]) == (5, 3)
    assert scores["item"]["match"] < 1.0


def test_prices_by_contents_are_of_what_is_measured_alike(tmp_path: Path) -> None:
    # Two packs at one price per kilogram, and a piece that cannot be compared with them.
    prices = {"A": (5.0, 4), "B": (10.0, 2), "C": (3.0, 1)}
    sold: Sold = {(item, month): figures for item, figures in prices.items() for month in (1, 2)}
    items = "code,make,pack,kind\nA,X,500 g,\nB,X,1 kg,\nC,X,2 pieces,\n"
    _, by_item = assess(compile_sold(tmp_path / "item", sold, items))
    assert by_item["brand"]["r2"] == pytest.approx(0.0, abs=SCORE)
    by_period, by_contents = assess(compile_sold(tmp_path / "contents", sold, items, products={"unit_pricing": True}))
    assert by_contents["brand"]["score"] == pytest.approx(1.0, abs=SCORE)
    assert (by_contents["item"]["products"], by_contents["brand"]["products"]) == (2, 1)
    assert set(by_period["turnover"]) == {40.0}


def random_market(seed: int) -> tuple[Sold, dict[str, tuple[str, str, str]]]:
    """Forty items over eight months, with nothing sold in March; some lack a brand, a size or a kind."""
    rng = np.random.default_rng(seed)

    def one_of(options: list[str]) -> str:
        return options[int(rng.integers(len(options)))]

    told = {
        f"I{n}": (one_of(["X", "Y", "Z", ""]), one_of(["1 kg", "500 g", ""]), one_of(["rye", "oat", ""]))
        for n in range(40)
    }
    sold = {
        (item, month): (round(float(rng.uniform(1, 9)), 2), int(rng.integers(1, 20)))
        for item, month in itertools.product(told, (1, 2, 4, 5, 6, 7, 8))
        if rng.random() < 0.5
    }
    return dict(sold), told


def base_of(month: int, link_month: int, sold: Sold) -> int | None:
    """The last month with sales up to the link month; before it, or without such a month, the first with sales."""
    months = sorted({other for _, other in sold})
    linked = [other for other in months if other <= link_month] if month > link_month else []
    base = linked[-1] if linked else months[0]
    return base if base < month else None


def loop(sold: Sold, unit_of: dict[str, str], base: int, month: int) -> tuple[float, float]:
    """Match and R² from the sums of the definition (Chessa 2019), over sales one by one."""
    now = {item: figures for (item, when), figures in sold.items() if when == month}
    before = {unit_of[item] for item, when in sold if when == base}
    total = sum(q for _, q in now.values())
    mean = sum(p * q for p, q in now.values()) / total
    match = sum(q for item, (_, q) in now.items() if unit_of[item] in before) / total
    between = 0.0
    for unit in {unit_of[item] for item in now}:
        sales = [figures for item, figures in now.items() if unit_of[item] == unit]
        quantity = sum(q for _, q in sales)
        between += quantity * (sum(p * q for p, q in sales) / quantity - mean) ** 2
    return match, between / sum(q * (p - mean) ** 2 for p, q in now.values())


@pytest.mark.parametrize("link_month", [3, 5, 12])
def test_a_random_market_has_the_scores_of_the_loop(tmp_path: Path, link_month: int) -> None:
    sold, told = random_market(link_month)
    items = "code,make,pack,kind\n" + "".join(f"{item},{','.join(facts)}\n" for item, facts in told.items())
    by_period, scores = assess(compile_sold(tmp_path, sold, items, link_month=link_month))
    names = ("brand", "size", "kind")
    expected = {}
    for candidate in ("item", "brand", "size", "kind", "brand + size", "brand + kind", "size + kind", "(plan)"):
        places = [names.index(name) for name in candidate.split(" + ") if name in names]
        unit_of = {
            item: "/".join(facts[place] for place in places) if places and all(facts[p] for p in places) else item
            for item, facts in told.items()
        }
        for month in sorted({month for _, month in sold}):
            base = base_of(month, link_month, sold)
            if base is not None:
                expected[candidate, month] = (base, *loop(sold, unit_of, base, month))
    found = {(row["definition"], row["period"].month): row for row in by_period.to_dicts()}
    assert set(found) == set(expected)
    for key, (base, match, homogeneity) in expected.items():
        assert found[key]["base"].month == base
        figures = (found[key]["match"], found[key]["r2"], found[key]["score"])
        assert figures == pytest.approx((match, homogeneity, match * homogeneity), abs=SCORE)
    assert sum(row["wins"] for row in scores.values()) == 1
    best = max(row["score"] for row in scores.values())
    assert [row["score"] for row in scores.values() if row["wins"]] == pytest.approx([best], abs=SCORE)


@pytest.fixture(scope="module")
def scored_sample(sample: Compiled, tmp_path_factory: pytest.TempPathFactory) -> tuple[Workspace, pl.DataFrame]:
    """A copy of the sample's workspace with its definitions scored, and the scores."""
    work = tmp_path_factory.mktemp("definitions") / "work"
    shutil.copytree(sample.context.workspace.root, work)
    return Workspace(work), assess_definitions(sample.context.plan.source, Workspace(work))


def test_scores_of_the_sample_are_shares_and_one_definition_wins_each(
    scored_sample: tuple[Workspace, pl.DataFrame],
) -> None:
    workspace, scores = scored_sample
    by_period = workspace.read("definitions")
    for name in ("match", "r2", "score"):
        assert by_period[name].null_count() == scores[name].null_count() == 0
        assert by_period[name].is_between(0, 1).all()
        assert scores[name].is_between(0, 1 + SCORE).all()
    assert (by_period["base"] < by_period["period"]).all()
    assert (scores.group_by("ea").agg(pl.col("wins").sum())["wins"] == 1).all()
    assert set(scores["ea"]) == set(workspace.read("ea_indexes")["ea"])
    assert scores.group_by("ea").len()["len"].max() == 12


def test_joining_items_of_the_sample_matches_more_and_explains_less(
    scored_sample: tuple[Workspace, pl.DataFrame],
) -> None:
    by_period = scored_sample[0].read("definitions")
    alone = by_period.filter(pl.col("definition") == "item").select("ea", "period", "match", "r2")
    both = by_period.join(alone, on=["ea", "period"], suffix="_item", validate="m:1")
    assert (both["match"] >= both["match_item"] - SCORE).all()
    np.testing.assert_allclose(alone["r2"], 1.0, rtol=SCORE)
    # The sample's plan makes every item a product.
    plan = both.filter(pl.col("definition") == "(plan)")
    np.testing.assert_allclose(plan["match"], plan["match_item"], rtol=SCORE)


def call(*arguments: str | Path) -> Result:
    return CliRunner().invoke(commands, ["definitions", *map(str, arguments)], standalone_mode=False)


def test_the_command_tells_what_wins_where_and_writes_two_tables(tmp_path: Path) -> None:
    made = compile_sold(tmp_path, BY_HAND, ITEMS)
    tables = made.context.workspace.tables
    before = {path: path.read_bytes() for path in tables.rglob("*.parquet")}
    done = call(tmp_path / "plan.toml")
    assert done.return_value == 0
    (row,) = [words for words in map(str.split, done.output.splitlines()) if words[:1] == ["M"]]
    assert row[1:5] == ["Milk", "brand", f"{0.5 * 84.5 / 87.5 * 38 / 46:.3f}", f"{0.5 * 38 / 46:.3f}"]
    after = {path: path.read_bytes() for path in tables.rglob("*.parquet")}
    assert {path.stem for path in after.keys() - before.keys()} == {"definitions", "definition_scores"}
    assert all(after[path] == content for path, content in before.items())
    told = json.loads(call(tmp_path / "plan.toml", "--json").output)
    assert [row["definition"] for row in told if row["wins"]] == ["brand"]
    assert {path: path.read_bytes() for path in tables.rglob("*.parquet")} == after


def test_one_period_has_nothing_to_compare(tmp_path: Path) -> None:
    compile_sold(tmp_path, {("A", 1): (2.0, 5)}, ITEMS)
    assert call(tmp_path / "plan.toml").output.startswith("No definition can be scored")


def test_the_command_needs_a_compile(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line()])
    refused = call(write_plan(tmp_path))
    assert isinstance(refused.exception, CallError)
    assert "compile the plan first" in str(refused.exception)
