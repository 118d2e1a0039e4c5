"""Write the sample: `python -m tests.sample.generate OUTDIR [TRUTHDIR]`."""

import gzip
import io
import json
import shutil
import sys
from pathlib import Path

import polars as pl
from pyarrow import parquet

if not __package__:
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tests.sample import masters, monthly, planted, surroundings, tills, weekly
from tests.sample.assortment import Item, assortment
from tests.sample.behaviour import Behaviour, behaviour
from tests.sample.deliveries import MARKS, Delivery
from tests.sample.market import FEEDS, Market, read_market

HERE = Path(__file__).resolve().parent


def write_sample(out: Path, truth: Path) -> None:
    """Write the sample below `out`, and the truth it was made from into the folder `truth`."""
    market = read_market()
    items = {feed: assortment(market, market.chain(feed)) for feed in FEEDS}
    seen = {feed: behaviour(items[feed]) for feed in FEEDS}
    files = deliveries(market, seen)
    listed = masters.item_masters(market, items)
    for delivery in files:
        _write_delivery(out / delivery.path, delivery)
    _write_surroundings(out, market, items, listed)
    shutil.copyfile(HERE / "plan_template.toml", out / "plan.toml")
    _write_truth(truth, planted.facts(files, seen, listed), market)


def deliveries(market: Market, seen: dict[str, Behaviour]) -> list[Delivery]:
    """Return every file of the three chains."""
    return [
        *weekly.weekly_deliveries(seen["brindlow"], market.chain("brindlow")),
        *tills.till_deliveries(seen["kestrin"], market.chain("kestrin")),
        *monthly.monthly_deliveries(seen["ombray"]),
    ]


def _write_delivery(path: Path, delivery: Delivery) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    if delivery.feed == "ombray":
        path.write_bytes(_zipped(monthly.csv_bytes(delivery.frame)))
        return
    frame = delivery.frame.drop(MARKS)
    delta = {"kestrin": ["sold_utc", "till_line"], "brindlow": []}[delivery.feed]
    _write_parquet(path, tills.exact(frame) if delivery.feed == "kestrin" else frame, delta)


def _write_surroundings(out: Path, market: Market, items: dict[str, tuple[Item, ...]], listed: masters.Masters) -> None:
    tables = {
        "items/brindlow_items.csv": listed.tables["brindlow"],
        "items/ombray_items.csv": listed.tables["ombray"],
        "classification/headings.csv": surroundings.headings(market),
        "classification/assignment.csv": masters.assignment(market, items, listed),
        "weights/survey_weights.csv": surroundings.weights(market),
        "outside/rents.csv": surroundings.rents(),
    }
    for name, table in tables.items():
        path = out / name
        path.parent.mkdir(parents=True, exist_ok=True)
        table.write_csv(path)
    _write_parquet(out / "items/kestrin_items.parquet", listed.tables["kestrin"], [])


def _write_truth(truth: Path, facts: planted.Facts, market: Market) -> None:
    truth.mkdir(parents=True, exist_ok=True)
    surroundings.truth(market).write_csv(truth / "truth.csv")
    text = json.dumps(facts, indent=1, ensure_ascii=False) + "\n"
    (truth / "planted.json").write_text(text, encoding="utf-8")
    (truth / "truth_notes.md").write_text(planted.notes(facts), encoding="utf-8")


def _write_parquet(path: Path, frame: pl.DataFrame, delta: list[str]) -> None:
    parquet.write_table(
        frame.to_arrow(compat_level=pl.CompatLevel.oldest()),
        path,
        compression="zstd",
        compression_level=15,
        use_dictionary=[name for name in frame.columns if name not in delta],
        column_encoding=dict.fromkeys(delta, "DELTA_BINARY_PACKED") or None,
        store_schema=False,
        store_decimal_as_integer=True,
    )


def _zipped(content: bytes) -> bytes:
    buffer = io.BytesIO()
    with gzip.GzipFile(filename="", mode="wb", compresslevel=9, fileobj=buffer, mtime=0) as stream:
        stream.write(content)
    return buffer.getvalue()


if __name__ == "__main__":
    folders = [Path(argument) for argument in sys.argv[1:]]
    if not 1 <= len(folders) <= 2:
        sys.exit("usage: python -m tests.sample.generate OUTDIR [TRUTHDIR]")
    write_sample(folders[0], folders[1] if len(folders) == 2 else HERE)
