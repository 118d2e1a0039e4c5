"""The small files that a plan names: each problem told with key, found and allowed, before any delivery is opened."""

from pathlib import Path

import pytest

from tests.stages.plans import problems, read
from tests.stages.small import ASSIGNMENT, HEADINGS, WEIGHTS, line, put, sections

RENTS = {"outside_series": [{"file": "rents.csv"}]}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    put(tmp_path / "in/a.csv", [line()])
    return tmp_path


TREES = {
    "no root": "heading,parent,label\nM,S,Milk\nS,M,Soft drinks\n",
    "two roots": HEADINGS + "9,,More\n",
    "twice": HEADINGS + "M,0,Milk again\n",
    "unknown parent": HEADINGS + "X,nowhere,Lost\n",
    "circle": HEADINGS + "X,Y,x\nY,X,y\n",
    "own parent": HEADINGS + "X,X,x\n",
    "no heading": HEADINGS + ",0,Nameless\n",
    "other columns": "code,above,label\n0,,All\n",
    "torn": HEADINGS + "X,0,too,many,cells\n",
    "empty": "",
    "header only": "heading,parent,label\n",
}


@pytest.mark.parametrize("headings", TREES.values(), ids=TREES)
def test_headings_that_are_no_tree_are_told(folder: Path, headings: str) -> None:
    put(folder / "headings.csv", headings)
    assert "classification.headings" in problems(folder)


ASSIGNMENTS = {
    "unknown aggregate": ASSIGNMENT + ",,C,X\n",
    "not a leaf": ASSIGNMENT + ",,C,0\n",
    "no aggregate": ASSIGNMENT + ",,C,\n",
    "unknown feed": ASSIGNMENT + "shoq,,C,M\n",
    "twice": ASSIGNMENT + ",,A,S\n",
    "neither item nor category": "feed,ea\nshop,M\n",
    "no column ea": "feed,item\nshop,A\n",
}


@pytest.mark.parametrize("assignment", ASSIGNMENTS.values(), ids=ASSIGNMENTS)
def test_assignments_that_make_no_sense_are_told(folder: Path, assignment: str) -> None:
    put(folder / "assignment.csv", assignment)
    assert "classification.assignment" in problems(folder)


WEIGHINGS = {
    "unknown heading": WEIGHTS + "2024,X,1\n",
    "not a leaf": WEIGHTS + "2024,0,100\n",
    "negative": WEIGHTS + "2025,M,-1\n2025,S,2\n",
    "not finite": WEIGHTS + "2025,M,inf\n2025,S,2\n",
    "no number": WEIGHTS + "2025,M,many\n2025,S,2\n",
    "no year": WEIGHTS + "soon,M,1\n",
    "twice": WEIGHTS + "2024,M,1\n",
    "a leaf without": WEIGHTS + "2025,M,1\n",
    "all zero": WEIGHTS + "2025,M,0\n2025,S,0\n",
    "blank": WEIGHTS + "2025,M,\n2025,S,2\n",
    "other columns": "year,heading,share\n2024,M,1\n",
}


@pytest.mark.parametrize("weights", WEIGHINGS.values(), ids=WEIGHINGS)
def test_weights_that_make_no_sense_are_told(folder: Path, weights: str) -> None:
    put(folder / "weights.csv", weights)
    assert "weights.file" in problems(folder)


OUTSIDE = {
    "unknown heading": "X,2024-01,100",
    "no period": "M,January,100",
    "another kind of period": "M,2024-W01,100",
    "blank period": "M,,100",
    "zero": "M,2024-01,0",
    "no number": "M,2024-01,high",
    "twice": "M,2024-01,100\nM,2024-01,101",
}


@pytest.mark.parametrize("rows", OUTSIDE.values(), ids=OUTSIDE)
def test_outside_series_that_make_no_sense_are_told(folder: Path, rows: str) -> None:
    put(folder / "rents.csv", f"heading,period,index\n{rows}\n")
    assert [key for key in problems(folder, sections(**RENTS)) if key.startswith("outside_series")]


def test_leaf_that_is_sold_and_collected_elsewhere_is_told(folder: Path) -> None:
    put(folder / "rents.csv", "heading,period,index\nM,2024-01,100\n")
    assert "outside_series.file" in problems(folder, sections(**RENTS))


def test_outside_series_beside_weights_from_turnover_are_told(folder: Path) -> None:
    put(folder / "rents.csv", "heading,period,index\nM,2024-01,100\n")
    put(folder / "assignment.csv", "item,ea\nB,S\n")
    assert set(problems(folder, sections(weights={"source": "turnover"}, **RENTS))) == {"weights.source"}


def test_outside_series_that_names_a_leaf_is_fine(folder: Path) -> None:
    put(folder / "assignment.csv", "item,ea\nB,S\n")
    put(folder / "rents.csv", "heading,period,index\nM,2024-01,100\n")
    _, references = read(folder, sections(**RENTS))
    assert references.outside.height == 1


def test_problems_of_all_files_are_told_at_once(folder: Path) -> None:
    put(folder / "headings.csv", TREES["two roots"])
    put(folder / "assignment.csv", ASSIGNMENTS["unknown feed"])
    put(folder / "weights.csv", WEIGHINGS["negative"])
    put(folder / "rents.csv", "heading,period,index\nM,2024-01,0\n")
    found = problems(folder, sections(**RENTS))
    assert {key.split(".")[0] for key in found} == {"classification", "weights", "outside_series"}
    assert {"classification.headings", "classification.assignment", "weights.file"} < set(found)


def test_unreadable_and_senseless_files_are_told_at_once(folder: Path) -> None:
    put(folder / "headings.csv", TREES["two roots"])
    put(folder / "weights.csv", WEIGHINGS["no number"])
    assert set(problems(folder)) == {"classification.headings", "weights.file"}


def test_blanks_around_words_do_not_matter(folder: Path) -> None:
    put(folder / "headings.csv", "heading,parent,label\n 0 ,, All items \nM,0 ,Milk\nS, 0,Soft drinks\n")
    _, references = read(folder)
    assert references.tree.parents == {"0": "", "M": "0", "S": "0"}


def test_weights_from_turnover_need_no_file(folder: Path) -> None:
    plan, references = read(folder, sections(weights={"source": "turnover"}))
    assert plan.weights.file is None
    assert references.weights.height == 0


@pytest.mark.parametrize(
    "assignment", ["category,ea\ndairy,M\n", "item,ea\nA,M\n", "feed,category,item,ea\n,dairy,,M\n"]
)
def test_assignment_needs_one_of_category_and_item(folder: Path, assignment: str) -> None:
    put(folder / "assignment.csv", assignment)
    _, references = read(folder)
    assert references.assignment.columns == ["feed", "category", "item", "ea"]


def test_row_that_assigns_neither_item_nor_category_is_told(folder: Path) -> None:
    put(folder / "assignment.csv", ASSIGNMENT + "shop,,,M\n")
    assert "classification.assignment" in problems(folder)


def test_message_names_the_plan(folder: Path) -> None:
    put(folder / "headings.csv", TREES["two roots"])
    with pytest.raises(Exception, match=r"plan\.toml"):
        read(folder)
