"""Lines to panel on 20 million generated lines, against a bare scan-and-sum of the same columns.

Run: python -m tests.bench.intake [LINES]
"""

from __future__ import annotations

import functools
import sys
import tempfile
from pathlib import Path

import duckdb

from tests.bench.measure import interleave, peak_memory, show
from tillwright.queries import Resources, connect
from tillwright.stages.context import Context
from tillwright.stages.identity import define_products, list_items
from tillwright.stages.intake import Delivery, check_gates, settle, take_in
from tillwright.stages.panel import make_panel
from tillwright.stages.successions import find_successions
from tillwright.store.deliveries import hash_file
from tillwright.store.references import open_plan
from tillwright.store.workspace import Workspace

ROUNDS = 5
PLAN = """
[plan]
title = "Benchmark"
currency = "crown"
start = "2024-03"
[[feed]]
name = "till"
files = "{name}"
announced = '(?P<period>\\d{{4}}-\\d{{2}})'
limits = {{ unit_price = [0.01, 500.0] }}
gates = {{ refused_share = 1.0 }}
[feed.columns]
sold_at = "day"
outlet = "outlet"
item = "item"
quantity = "quantity"
turnover = "turnover"
category = "{category}"
[classification]
headings = "headings.csv"
assignment = "assignment.csv"
[weights]
source = "turnover"
"""
LINES = """
select
    date '2024-03-01' + cast(floor(random() * 31) as integer) as day,
    cast(floor(random() * 100) as integer) as outlet,
    {item} as item,
    cast(1 + floor(random() * random() * 4) as decimal(9, 3)) * {sign} as quantity,
    cast(0.5 + random() * 20 as decimal(9, 2)) as turnover
from range({lines})
"""
CODE = "cast(1000000 + floor(power(random(), 2) * 40000) as bigint)"


def main(lines: int) -> None:
    """Print the ratios for three kinds of file: clean, with 0.4 % refused lines, with codes as text."""
    with tempfile.TemporaryDirectory() as folder:
        root = Path(folder)
        (root / "headings.csv").write_text("heading,parent,label\n0,,All\n01,0,Everything\n")
        for name, item, sign in (
            ("clean", CODE, "1"),
            ("refusing", CODE, "case when random() < 0.004 then -1 else 1 end"),
            ("text", f"cast({CODE} as varchar)", "1"),
        ):
            _one(root / f"{name}-2024-03.parquet", LINES.format(item=item, sign=sign, lines=lines), lines)


def _one(path: Path, select: str, lines: int) -> None:
    duckdb.execute(f"copy ({select}) to '{path}' (compression zstd)")
    items = duckdb.execute(f"select distinct item from '{path}'").fetchall()
    assignment = "item,ea\n" + "".join(f"{item},01\n" for (item,) in items)
    (path.parent / "assignment.csv").write_text(assignment)
    plan = path.with_suffix(".toml")
    plan.write_text(PLAN.format(name=path.name, category="item").replace('category = "item"\n', ""))
    seconds = interleave(
        {
            "scan": functools.partial(scan, path),
            "plain group-by": functools.partial(group, path),
            "to sales": functools.partial(sales, plan),
            "to panel": functools.partial(panel, plan),
        },
        ROUNDS,
    )
    rows = [(f"{name} / scan", f"{value / seconds['scan']:.2f}") for name, value in seconds.items() if name != "scan"]
    rows.append(("scan", f"{seconds['scan']:.3f} s"))
    rows.append(("peak memory, scan", f"{peak_memory(functools.partial(scan, path))} MB"))
    rows.append(("peak memory, to panel", f"{peak_memory(functools.partial(panel, plan))} MB"))
    show(f"{path.stem}: {lines:,} lines", rows)
    path.unlink()


def scan(path: Path) -> None:
    """Read the same columns and sum them, no more."""
    connection = connect(Resources())
    connection.execute(
        f"select count(*), max(day), sum(outlet), max(item), sum(quantity), sum(turnover) from read_parquet('{path}')"
    ).fetchall()


def group(path: Path) -> None:
    """Exact sums by month and item without any rule: what no intake can do without."""
    connection = connect(Resources())
    connection.execute(
        "create temp table sums as "
        "select date_trunc('month', day) as period, item, sum(quantity), sum(turnover), count(*) "
        f"from read_parquet('{path}') group by 1, 2"
    )


def sales(plan_file: Path) -> None:
    """Lines to exact sums, refused lines and outlet days, written."""
    with tempfile.TemporaryDirectory() as folder:
        _take(plan_file, Path(folder))


def panel(plan_file: Path) -> None:
    """Lines to unit values, every table on the way written."""
    with tempfile.TemporaryDirectory() as folder:
        context, delivery = _take(plan_file, Path(folder))
        settle(context, [delivery])
        check_gates(context)
        list_items(context)
        find_successions(context, [])
        define_products(context)
        make_panel(context)


def _take(plan_file: Path, work: Path) -> tuple[Context, Delivery]:
    plan, references = open_plan(plan_file)
    context = Context(plan, references, Workspace(work), Resources(spill=work / "spill"))
    feed = plan.feed[0]
    path = plan.delivery_files(feed)[0]
    delivery = Delivery(feed, path, path.name, _hash(path), 1, path.stat().st_size, present=True)
    take_in(context, context.connect(), delivery)
    return context, delivery


@functools.cache
def _hash(path: Path) -> str:
    return hash_file(path)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20_000_000)
