"""The plan: what is valid, every kind of problem told with key, found and allowed, and nothing done before.

What is allowed is the contract of DESIGN section 5; messages are held to name the key and what was found.
"""

from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from tests.stages.plans import problems, read
from tests.stages.small import COLUMNS, HEADINGS, feed, line, put, sections, write_plan
from tillwright.errors import PlanError
from tillwright.plan import Clearance, Imputation, SmallSales
from tillwright.plan_file import read_plan
from tillwright.stages.compiling import Request, carry_out


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    put(tmp_path / "in/a.csv", [line()])
    return tmp_path


def changed(**sections_changes: Any) -> dict[str, Any]:
    """The valid plan with keys of its sections changed."""
    plan = sections()
    for section, changes in sections_changes.items():
        plan[section] = plan.get(section, {}) | changes
    return plan


def test_valid_plan_has_the_careful_defaults(folder: Path) -> None:
    plan, references = read(folder)
    assert (plan.plan.period, plan.plan.month_rule, str(plan.plan.first_day)) == ("month", "calendar", "2024-01-01")
    assert (plan.index.method, plan.index.window, plan.index.splice, plan.index.onto) == (
        "geks-tornqvist",
        25,
        "mean",
        "published",
    )
    assert plan.screening.extreme == (0.25, 4.0)
    assert plan.screening.on == ("extreme",)
    assert plan.feed[0].replaces == "same-name"
    assert plan.feed[0].returns == "net"
    assert references.tree.leaves == ("M", "S")
    assert references.tree.ancestry("M") == ["M", "0"]


def test_every_key_of_the_contract_is_accepted(folder: Path) -> None:
    put(folder / "in" / "a_202403.csv", "named as the feed announces\n")
    put(folder / "items.csv", "code,text\nA,x\n")
    put(folder / "rents.csv", "heading,period,index\nR,2024-01,100\n")
    put(folder / "headings.csv", HEADINGS + "R,0,Rents\n")
    put(folder / "weights.csv", "year,heading,weight\n2024,M,50\n2024,S,40\n2024,R,10\n")
    columns = dict.fromkeys(("line_id", "region", "household_group", "description", "brand", "size", "category"), "day")
    full = feed(
        columns=COLUMNS | columns,
        timezone="Europe/Lisbon",
        stamped_in="UTC",
        replaces=r"(?P<what>\w+)_v(?P<version>\d+)",
        announced=r"(?P<period>\d{6})",
        returns="refuse",
        item_code="gtin",
        turnover_less=["deposit"],
        encoding="latin-1",
        delimiter=";",
        decimal=",",
        limits={"unit_price": [0.01, 5000.0]},
    )
    plan = sections(
        full,
        plan={"title": "T", "currency": "c", "period": "month", "start": "2024-01", "reference": "2024-03"}
        | {"month_rule": "first-weeks", "weeks": 3},
        item_master=[{"feed": "shop", "file": "items.csv", "columns": {"item": "code"}, "attributes": ["text"]}],
        classification={"headings": "headings.csv", "assignment": "assignment.csv", "stratum": ["feed", "region"]},
        weights={"source": "file", "file": "weights.csv", "formula": "young", "price_update": False, "link_month": 12},
        products={"by": ["item"]},
        screening={"extreme": "off"},
        index={"method": "geks-fisher", "window": 13, "splice": "half", "onto": "recalculated", "form": "direct"}
        | {"override": [{"heading": "M", "method": "jevons", "form": "direct"}]},
        outside_series=[{"file": "rents.csv"}],
        release={"rounding": 2},
        answer=[{"gate": "overlap", "feed": "shop", "on": "a.csv", "by": "desk", "why": "known"}],
    )
    found, references = read(folder, plan)
    assert found.index.recipe(references.tree.ancestry("M")).method == "jevons"
    assert found.index.recipe(references.tree.ancestry("S")).method == "geks-fisher"
    assert references.outside["index"].to_list() == [100.0]


def test_nearest_override_on_the_way_up_wins(folder: Path) -> None:
    overrides = [{"heading": "M", "splice": "half"}, {"heading": "0", "splice": "window", "window": 13}]
    plan, references = read(folder, changed(index={"override": overrides}))
    near, far = (plan.index.recipe(references.tree.ancestry(heading)) for heading in ("M", "S"))
    assert (near.splice, near.window) == ("half", 13)
    assert (far.splice, far.window) == ("window", 13)


def test_screens_that_are_on_have_the_limits_of_common_practice(folder: Path) -> None:
    on: dict[str, Any] = {"clearance": {}, "small": {}, "imputation": {}}
    override = [{"heading": "M", "method": "carli"}]
    plan, references = read(folder, changed(screening=on, index={"override": override}))
    screening = plan.screening
    assert screening.clearance == Clearance(price_fall=0.7, quantity_fall=0.5, ahead=2)
    assert screening.small == SmallSales(factor=1.25)
    assert screening.imputation == Imputation(run="short", limit=3)
    assert screening.on == ("extreme", "clearance", "small", "imputation")
    assert screening.without("small").on == ("extreme", "clearance", "imputation")
    formulas = [plan.elementary_formula(references.tree.ancestry(leaf)) for leaf in ("M", "S")]
    assert formulas == ["carli", None]


def test_plan_cannot_be_changed(folder: Path) -> None:
    plan, _ = read(folder)
    for section, key in ((plan, "title"), (plan.plan, "start"), (plan.feed[0].columns, "item"), (plan.index, "window")):
        with pytest.raises(ValidationError):
            setattr(section, key, "other")
    assert isinstance(plan.feed, tuple)
    assert isinstance(plan.index.override, tuple)


def test_paths_are_relative_to_the_plan_not_to_where_one_stands(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write_plan(folder)
    monkeypatch.chdir(folder.parent)
    plan = read_plan(Path(folder.name) / path.name)
    assert [file.name for file in plan.delivery_files(plan.feed[0])] == ["a.csv"]


def test_missing_plan_is_told_with_its_path(tmp_path: Path) -> None:
    with pytest.raises(PlanError, match=r"nowhere\.toml"):
        read_plan(tmp_path / "nowhere.toml")


@pytest.mark.parametrize("content", [b"[plan\n", b"title = 'x'\ntitle = 'y'\n", b"title = 'K\xe4se'\n"])
def test_text_that_is_not_toml_is_told(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "plan.toml"
    path.write_bytes(content)
    with pytest.raises(PlanError, match="TOML"):
        read_plan(path)


def test_folder_in_place_of_a_plan_is_told(tmp_path: Path) -> None:
    with pytest.raises(PlanError):
        read_plan(tmp_path)


MISSHAPEN: list[tuple[str, dict[str, Any]]] = [
    ("plan.titel", changed(plan={"titel": "x"})),
    ("wieghts", sections(wieghts={})),
    ("feed.0.columns.prise", sections(feed(columns=COLUMNS | {"prise": "p"}))),
    ("feed.0.gates.refused", sections(feed(gates={"refused": 0.1}))),
    ("folder", sections(folder="/tmp")),
    ("plan.title", changed(plan={"title": 7})),
    ("plan.weeks", changed(plan={"weeks": 5})),
    ("plan.period", changed(plan={"period": "year"})),
    ("feed.0.turnover_less", sections(feed(turnover_less="deposit"))),
    ("feed.0.delimiter", sections(feed(delimiter=";;"))),
    ("feed.0.encoding", sections(feed(encoding="cp1252"))),
    ("feed.0.decimal", sections(feed(decimal="'"))),
    ("feed.0.returns", sections(feed(returns="keep"))),
    ("feed.0.name", sections(feed(name="../shop"))),
    ("feed.0.gates.refused_share", sections(feed(gates={"refused_share": -0.1}))),
    ("feed.0.limits.unit_price.0", sections(feed(limits={"unit_price": [0.0, 10.0]}))),
    ("index.window", changed(index={"window": 1})),
    ("screening.clearance", changed(screening={"clearance": "on"})),
    ("screening.clearance", changed(screening={"clearance": 0.7})),
    ("screening.clearance.price", changed(screening={"clearance": {"price": 0.7}})),
    ("screening.clearance.price_fall", changed(screening={"clearance": {"price_fall": 0.0}})),
    ("screening.clearance.quantity_fall", changed(screening={"clearance": {"quantity_fall": -0.5}})),
    ("screening.clearance.ahead", changed(screening={"clearance": {"ahead": 0}})),
    ("screening.small", changed(screening={"small": "on"})),
    ("screening.small.lambda", changed(screening={"small": {"lambda": 1.25}})),
    ("screening.small.factor", changed(screening={"small": {"factor": 0.0}})),
    ("screening.imputation", changed(screening={"imputation": "short"})),
    ("screening.imputation.run", changed(screening={"imputation": {"run": "medium"}}, index={"method": "jevons"})),
    ("screening.imputation.limit", changed(screening={"imputation": {"limit": 0}}, index={"method": "jevons"})),
    ("index.method", changed(index={"method": "guess"})),
    ("index.override.0.method", changed(index={"override": [{"heading": "M", "method": "guess"}]})),
    ("weights.link_month", changed(weights={"link_month": 13})),
    ("release.rounding", changed(release={"rounding": -1})),
    ("answer.0.gate", sections(answer=[{"gate": "hunger", "on": "x", "by": "y", "why": "z"}])),
    ("classification.stratum.0", changed(classification={"stratum": ["till"]})),
    ("feed.0.columns.item", sections(feed(columns={k: v for k, v in COLUMNS.items() if k != "item"}))),
    ("feed.0.files", sections({"name": "shop", "columns": COLUMNS})),
    ("classification", {k: v for k, v in sections().items() if k != "classification"}),
    ("feed", {k: v for k, v in sections().items() if k != "feed"}),
    ("answer.0.why", sections(answer=[{"gate": "overlap", "on": "x", "by": "y"}])),
]


@pytest.mark.parametrize(("key", "plan"), MISSHAPEN, ids=[key for key, _ in MISSHAPEN])
def test_unknown_missing_and_mistyped_keys_are_named(folder: Path, key: str, plan: dict[str, Any]) -> None:
    found = problems(folder, plan)
    assert [name for name in found if name == key or name.startswith(key + ".")]


SCOPE = {"title": "T", "currency": "c"}
SENSELESS: list[tuple[str, dict[str, Any]]] = [
    ("feed.0.columns", sections(feed(columns=COLUMNS | {"week": "day"}))),
    ("feed.0.columns", sections(feed(columns={k: v for k, v in COLUMNS.items() if k != "sold_at"}))),
    ("feed.0.timezone", sections(feed(timezone="Mars/Base"))),
    ("feed.0.stamped_in", sections(feed(stamped_in="EDT5"))),
    ("feed.0.timezone", sections(feed(timezone="../etc"))),
    ("feed.0.announced", sections(feed(announced="("))),
    ("feed.0.announced", sections(feed(announced=r"\d{6}"))),
    ("feed.0.replaces", sections(feed(replaces="["))),
    ("feed.0.replaces", sections(feed(replaces=r"v(?P<version>\d+)"))),
    ("feed.0.files", sections(feed(files="nothing/*.csv"))),
    ("feed.0.limits.unit_price", sections(feed(limits={"unit_price": [5.0, 1.0]}))),
    ("feed.1.name", sections(feed(), feed())),
    ("feed.0.columns.region", changed(classification={"stratum": ["region"]})),
    ("plan.start", changed(plan={"start": "January"})),
    ("plan.start", changed(plan={"start": "2024-W01"})),
    ("plan.reference", changed(plan={"reference": "2023"})),
    ("plan.reference", changed(plan={"reference": "2023-12"})),
    ("plan.reference", changed(plan={"reference": "the year before"})),
    ("plan.month_rule", changed(plan={"period": "week", "start": "2024-W01", "month_rule": "whole-weeks"})),
    ("classification.headings", changed(classification={"headings": "no.csv"})),
    ("classification.assignment", changed(classification={"assignment": "no.csv"})),
    ("weights.file", changed(weights={"file": "no.csv"})),
    ("weights.file", sections(weights={"source": "file"})),
    ("item_master.0.file", sections(item_master=[{"feed": "shop", "file": "no.csv", "columns": {"item": "i"}}])),
    (
        "item_master.0.feed",
        sections(item_master=[{"feed": "shoq", "file": "weights.csv", "columns": {"item": "year"}}]),
    ),
    ("outside_series.0.file", sections(outside_series=[{"file": "no.csv"}])),
    ("answer.0.feed", sections(answer=[{"gate": "overlap", "feed": "shoq", "on": "x", "by": "y", "why": "z"}])),
    ("screening.extreme", changed(screening={"extreme": [1.5, 4.0]})),
    ("screening.extreme", changed(screening={"extreme": [0.2, 0.5]})),
    ("screening.extreme", changed(screening={"extreme": [4.0, 0.25]})),
    ("screening.clearance.price_fall", changed(screening={"clearance": {"price_fall": 1.0}})),
    ("screening.clearance.quantity_fall", changed(screening={"clearance": {"quantity_fall": 1.5}})),
    ("screening.small.factor", changed(screening={"small": {"factor": 1.0}})),
    ("screening.imputation", changed(screening={"imputation": {}})),
    (
        "screening.imputation",
        changed(screening={"imputation": {}}, index={"override": [{"heading": "0", "method": "fisher"}]}),
    ),
    ("successions.ask", changed(successions={"accept": 0.7, "ask": 0.8})),
    ("products.by", changed(products={"by": ["fat"]})),
    ("products.by", changed(products={"by": []})),
    ("products.by", changed(products={"by": ["item", "brand"]})),
    ("products.override.0.by", changed(products={"override": [{"heading": "01", "by": ["colour"]}]})),
    ("products.override.0.heading", changed(products={"override": [{"heading": "X", "by": ["brand"]}]})),
    ("feed.0.item_part", sections(feed(item_part="2[0-9]"))),
    ("index.splice", changed(index={"window": "expanding"})),
    ("index.window", changed(index={"window": 12, "splice": "link-month"})),
    ("index.override.0.window", changed(index={"override": [{"heading": "01", "window": 5, "splice": "link-month"}]})),
    ("index.override.0.heading", changed(index={"override": [{"heading": "X", "window": 13}]})),
]


@pytest.mark.parametrize(("key", "plan"), SENSELESS, ids=[f"{n}-{key}" for n, (key, _) in enumerate(SENSELESS)])
def test_values_that_make_no_sense_together_are_named(folder: Path, key: str, plan: dict[str, Any]) -> None:
    assert key in problems(folder, plan)


def test_found_and_allowed_are_told(folder: Path) -> None:
    found = problems(folder, changed(plan={"period": "year", "titel": "x"}))
    assert "year" in found["plan.period"].found
    assert "month" in found["plan.period"].allowed
    assert "'x'" in found["plan.titel"].found


def test_two_answers_to_one_gate_are_a_problem_of_the_plan(folder: Path) -> None:
    answer = {"gate": "overlap", "feed": "shop", "on": "a.csv", "by": "desk", "why": "known"}
    assert [
        key for key in problems(folder, sections(answer=[answer, answer | {"why": "else"}])) if key.startswith("answer")
    ]


def test_all_problems_of_one_kind_are_told_at_once(folder: Path) -> None:
    plan = sections(feed(timezone="Mars/Base", announced="("), weights={"source": "file"})
    plan["plan"] |= {"start": "January"}
    assert set(problems(folder, plan)) == {"feed.0.timezone", "feed.0.announced", "weights.file", "plan.start"}


def test_problems_of_every_kind_are_told_at_once(folder: Path) -> None:
    put(folder / "headings.csv", HEADINGS + "X,nowhere,Lost\n")
    plan = sections(feed(timezone="Mars/Base"), index={"window": 1})
    plan["plan"] |= {"titel": "x"}
    assert set(problems(folder, plan)) == {
        "plan.titel",
        "index.window",
        "feed.0.timezone",
        "classification.headings",
    }


@pytest.mark.parametrize("spoil", ["titel", "zone", "tree"])
def test_nothing_is_written_before_the_plan_is_found_valid(folder: Path, spoil: str) -> None:
    plan = sections(feed(timezone="Mars/Base" if spoil == "zone" else "UTC"))
    if spoil == "titel":
        plan["plan"] |= {"titel": "x"}
    if spoil == "tree":
        put(folder / "headings.csv", HEADINGS + "X,nowhere,Lost\n")
    path = write_plan(folder, plan)
    before = sorted(folder.rglob("*"))
    with pytest.raises(PlanError, match="nothing was read or written"):
        carry_out(Request(path))
    assert sorted(folder.rglob("*")) == before
