"""What becomes of each file: taken in, repeated, superseded, withdrawn; and what unreadable ones do to others.

Expected statuses follow the plan's words for `replaces` and DESIGN section 3.
"""

import os
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest

from tests.stages.small import OPEN_GATES, Taken, feed, line, put, sections, take_in, write_plan
from tillwright.errors import UnreadableDeliveries

VERSIONED = {"replaces": r"(?P<what>shop_\d{4}-\d{2})(?:_v(?P<version>\d+))?\."}


def one(turnover: str = "3.00", **changes: Any) -> list[dict[str, Any]]:
    return [line(turnover=turnover, **changes)]


def counted(taken: Taken) -> Decimal:
    """Turnover of the active deliveries."""
    return sum(
        (row["turnover_accepted"] for row in taken.table("deliveries").to_dicts() if row["status"] == "active"),
        Decimal(0),
    )


def test_files_of_one_run_arrive_in_the_order_of_their_paths(tmp_path: Path) -> None:
    for number, name in enumerate(["b.csv", "a.csv", "sub/a2.csv", "c.csv"], start=1):
        put(tmp_path / "in" / name, one(str(number)))
    listed = take_in(write_plan(tmp_path)).table("deliveries")
    assert listed.select("arrival", "file").rows() == [
        (1, "in/a.csv"),
        (2, "in/b.csv"),
        (3, "in/c.csv"),
        (4, "in/sub/a2.csv"),
    ]


def test_files_of_a_later_run_arrive_later(tmp_path: Path) -> None:
    put(tmp_path / "in/b.csv", one("1"))
    take_in(write_plan(tmp_path))
    put(tmp_path / "in/a.csv", one("2"))
    listed = take_in(write_plan(tmp_path)).table("deliveries")
    assert listed.select("arrival", "file").rows() == [(1, "in/b.csv"), (2, "in/a.csv")]


def test_same_bytes_again_are_recorded_and_ignored(tmp_path: Path) -> None:
    for name in ("a.csv", "b.csv", "late/a.csv"):
        put(tmp_path / "in" / name, one())
    taken = take_in(write_plan(tmp_path))
    assert taken.statuses == {"in/a.csv": "active", "in/b.csv": "repeated", "in/late/a.csv": "repeated"}
    assert taken.table("deliveries")["replaced_by"].to_list() == [None, "in/a.csv", "in/a.csv"]
    assert counted(taken) == Decimal(3)


def test_same_bytes_in_two_feeds_are_two_deliveries(tmp_path: Path) -> None:
    put(tmp_path / "one/a.csv", one())
    put(tmp_path / "two/a.csv", one())
    taken = take_in(write_plan(tmp_path, sections(feed(name="one", files="one/*"), feed(name="two", files="two/*"))))
    assert taken.statuses == {"one/a.csv": "active", "two/a.csv": "active"}


def test_corrected_file_of_the_same_name_supersedes(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", one("3"))
    put(tmp_path / "in/late/a.csv", one("4"))
    put(tmp_path / "in/b.csv", one("5", day="2024-04-05"))
    taken = take_in(write_plan(tmp_path))
    assert taken.statuses == {"in/a.csv": "superseded", "in/b.csv": "active", "in/late/a.csv": "active"}
    assert taken.table("deliveries")["replaced_by"].to_list() == [None if n else "in/late/a.csv" for n in range(3)]
    assert counted(taken) == Decimal(9)


def test_same_name_in_another_feed_supersedes_nothing(tmp_path: Path) -> None:
    put(tmp_path / "one/a.csv", one("3"))
    put(tmp_path / "two/a.csv", one("4"))
    taken = take_in(write_plan(tmp_path, sections(feed(name="one", files="one/*"), feed(name="two", files="two/*"))))
    assert set(taken.statuses.values()) == {"active"}


def test_file_overwritten_in_place_supersedes_its_former_bytes(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    put(tmp_path / "in/a.csv", one("3"))
    take_in(plan)
    put(tmp_path / "in/a.csv", one("4"))
    listed = take_in(plan).table("deliveries")
    assert listed.select("file", "status", "turnover_accepted").rows() == [
        ("in/a.csv", "superseded", Decimal(3)),
        ("in/a.csv", "active", Decimal(4)),
    ]


def test_file_put_back_as_it_was_is_what_counts(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    for turnover in ("3", "4", "3"):
        put(tmp_path / "in/a.csv", one(turnover))
        taken = take_in(plan)
    assert counted(taken) == Decimal(3)


def test_touched_file_with_the_same_bytes_is_no_new_delivery(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    path = put(tmp_path / "in/a.csv", one())
    take_in(plan)
    os.utime(path, ns=(1, 1))
    assert take_in(plan).table("deliveries").select("arrival", "status").rows() == [(1, "active")]


def test_withdrawn_file_no_longer_counts_and_counts_again_once_back(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    path = put(tmp_path / "in/a.csv", one("3"))
    put(tmp_path / "in/b.csv", one("4", outlet="2"))
    take_in(plan)
    path.unlink()
    gone = take_in(plan)
    assert gone.statuses == {"in/a.csv": "withdrawn", "in/b.csv": "active"}
    assert counted(gone) == Decimal(4)
    put(path, one("3"))
    assert counted(take_in(plan)) == Decimal(7)


def test_withdrawn_correction_brings_the_former_file_back(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    put(tmp_path / "in/a.csv", one("3"))
    late = put(tmp_path / "in/late/a.csv", one("4"))
    assert counted(take_in(plan)) == Decimal(4)
    late.unlink()
    taken = take_in(plan)
    assert taken.statuses == {"in/a.csv": "active", "in/late/a.csv": "withdrawn"}
    assert counted(taken) == Decimal(3)


def test_renamed_file_still_counts_once(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    path = put(tmp_path / "in/a.csv", one("3"))
    put(tmp_path / "in/z.csv", one("4", outlet="2"))
    take_in(plan)
    path.rename(tmp_path / "in/b.csv")
    taken = take_in(plan)
    assert taken.statuses["in/a.csv"] == "withdrawn"
    assert taken.statuses["in/b.csv"] == "active"
    assert counted(taken) == Decimal(7)


def test_only_file_may_be_renamed(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    put(tmp_path / "in/a.csv", one("3")).rename(tmp_path / "in/b.csv")
    take_in(plan)
    (tmp_path / "in/b.csv").rename(tmp_path / "in/c.csv")
    assert counted(take_in(plan)) == Decimal(3)


@pytest.mark.parametrize(
    ("names", "active"),
    [
        (["shop_2024-03_v2.csv", "shop_2024-03_v10.csv"], "shop_2024-03_v10.csv"),
        (["shop_2024-03.csv", "shop_2024-03_v1.csv"], "shop_2024-03_v1.csv"),
        (["shop_2024-03_v0.csv", "shop_2024-03.csv"], "shop_2024-03_v0.csv"),
        (["late/shop_2024-03.csv", "shop_2024-03_v1.csv"], "shop_2024-03_v1.csv"),
        (["shop_2024-03_v1.csv", "z/shop_2024-03_v01.csv"], "z/shop_2024-03_v01.csv"),  # equal: the later arrival
        (["shop_2024-03.csv", "z/shop_2024-03.csv"], "z/shop_2024-03.csv"),
    ],
)
def test_highest_version_supersedes_whatever_arrived_last(tmp_path: Path, names: list[str], active: str) -> None:
    for number, name in enumerate(names, start=1):
        put(tmp_path / "in" / name, one(str(number)))
    put(tmp_path / "in/shop_2024-04_v1.csv", one("9", day="2024-04-05"))
    statuses = take_in(write_plan(tmp_path, sections(feed(**VERSIONED)))).statuses
    assert statuses.pop("in/shop_2024-04_v1.csv") == "active"
    assert [name for name, status in statuses.items() if status == "active"] == [f"in/{active}"]
    assert sorted(statuses.values()) == ["active", "superseded"]


def test_older_version_that_arrives_late_does_not_supersede(tmp_path: Path) -> None:
    plan = write_plan(tmp_path, sections(feed(**VERSIONED)))
    put(tmp_path / "in/shop_2024-03_v3.csv", one("3"))
    take_in(plan)
    put(tmp_path / "in/shop_2024-03_v2.csv", one("2"))
    assert take_in(plan).statuses["in/shop_2024-03_v3.csv"] == "active"


def test_changed_rule_of_replacement_settles_files_anew(tmp_path: Path) -> None:
    put(tmp_path / "in/shop_2024-03.csv", one("3"))
    put(tmp_path / "in/shop_2024-03_v1.csv", one("4"))
    assert counted(take_in(write_plan(tmp_path))) == Decimal(7)
    assert counted(take_in(write_plan(tmp_path, sections(feed(**VERSIONED))))) == Decimal(4)


def test_changed_reading_takes_files_in_anew(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(quantity="-1", turnover="-3.00"), line()])
    assert counted(take_in(write_plan(tmp_path))) == Decimal(0)
    assert counted(take_in(write_plan(tmp_path, sections(feed(returns="refuse"))))) == Decimal(3)


def test_second_intake_of_the_same_files_does_nothing(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", one())
    plan = write_plan(tmp_path)
    take_in(plan)
    again = take_in(plan)
    assert all(step.unchanged for step in again.compiled.steps)


def test_two_deliveries_of_the_same_outlet_and_day_are_a_gate_and_both_count(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [line(day=f"2024-03-{day:02d}") for day in (1, 2, 3)])
    put(tmp_path / "in/b.csv", [line(day=f"2024-03-{day:02d}", turnover="4.00") for day in (3, 4)])
    put(tmp_path / "in/c.csv", [line(day="2024-03-03", outlet="2")])
    taken = take_in(write_plan(tmp_path))
    overlaps = [row for row in taken.table("gates").to_dicts() if row["gate"] == "overlap"]
    assert [(row["subject"], row["measured"], row["breached"]) for row in overlaps] == [("b.csv", 1.0, True)]
    assert counted(taken) == Decimal(20)


def test_repeated_and_superseded_files_overlap_with_nothing(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", one("3"))
    put(tmp_path / "in/again.csv", one("3"))
    put(tmp_path / "in/late/a.csv", one("4"))
    gates = take_in(write_plan(tmp_path)).table("gates")
    assert not gates["breached"].any()
    assert "overlap" not in gates["gate"].to_list()


def test_answer_stands_beside_the_gate_it_answers(tmp_path: Path) -> None:
    put(tmp_path / "in/a.csv", [*one(), *one("x")])
    answer = {"gate": "refused-share", "feed": "shop", "on": "a.csv", "by": "desk", "why": "known"}
    limits = {"gates": OPEN_GATES | {"refused_share": 0.1}}
    (gate,) = (
        row
        for row in take_in(write_plan(tmp_path, sections(feed(**limits), answer=[answer]))).table("gates").to_dicts()
        if row["gate"] == "refused-share"
    )
    assert gate["breached"]
    assert (gate["answered_by"], gate["answer"], gate["measured"]) == ("desk", "known", 0.5)


def test_unreadable_file_is_named_and_every_other_file_is_taken_in(tmp_path: Path) -> None:
    for name in ("one", "two"):
        put(tmp_path / name / "bad.csv", "")
        put(tmp_path / name / "good.csv", one())
    plan = write_plan(tmp_path, sections(feed(name="one", files="one/*"), feed(name="two", files="two/*")))
    with pytest.raises(UnreadableDeliveries) as caught:
        take_in(plan)
    assert [(file.feed, file.file) for file in caught.value.files] == [("one", "bad.csv"), ("two", "bad.csv")]
    assert len(list((tmp_path / "work/tables/sales").glob("*.parquet"))) == 2


def test_unreadable_file_that_is_replaced_no_longer_matters(tmp_path: Path) -> None:
    plan = write_plan(tmp_path)
    put(tmp_path / "in/a.csv", "")
    with pytest.raises(UnreadableDeliveries):
        take_in(plan)
    put(tmp_path / "in/a.csv", one())
    assert counted(take_in(plan)) == Decimal(3)


def test_folder_that_the_pattern_matches_is_no_delivery(tmp_path: Path) -> None:
    put(tmp_path / "in/sub/a.csv", one())
    assert take_in(write_plan(tmp_path, sections(feed(files="in/**")))).statuses == {"in/sub/a.csv": "active"}


def test_odd_file_names_are_no_obstacle(tmp_path: Path) -> None:
    names = ["it's.csv", "a [1].csv", "réf 100%.csv", "a*b.csv"]
    for number, name in enumerate(names, start=1):
        put(tmp_path / "in" / name, one(str(number)))
    for number, name in enumerate(["it's.parquet", "p [1].parquet", "p*q.parquet"], start=10):
        put(tmp_path / "in" / name, one(str(number)))
    taken = take_in(write_plan(tmp_path))
    assert set(taken.statuses.values()) == {"active"}
    assert counted(taken) == Decimal(10 + 33)
