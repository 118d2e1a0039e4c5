"""Small deliveries and plans written as files, and what an intake makes of them."""

import csv
import io
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import polars as pl

from tillwright.stages.compiling import Compiled, Request, carry_out
from tillwright.tables import TABLES

Row = Mapping[str, Any]
Table = dict[str, Any]

COLUMNS = {"sold_at": "day", "outlet": "outlet", "item": "item", "quantity": "quantity", "turnover": "turnover"}
GOOD_LINE = {"day": "2024-03-05", "outlet": "1", "item": "A", "quantity": "2", "turnover": "3.00"}
OPEN_GATES = {"refused_share": 1.0, "turnover_swing": 1e9, "missing_outlets": 1000}
HEADINGS = "heading,parent,label\n0,,All items\nM,0,Milk\nS,0,Soft drinks\n"
ASSIGNMENT = "feed,category,item,ea\n,,A,M\n,,B,S\n"
WEIGHTS = "year,heading,weight\n2024,M,60\n2024,S,40\n"


def line(**changes: Any) -> Table:
    """A good line of the feed `shop`, with changes."""
    return GOOD_LINE | changes


def feed(**changes: Any) -> Table:
    """The section of a feed that reads every file below `in/`, with changes."""
    return {"name": "shop", "files": "in/**/*.*", "columns": dict(COLUMNS), "gates": dict(OPEN_GATES)} | changes


def sections(*feeds: Table, **changes: Any) -> Table:
    """All sections of a plan that is valid once `write_plan` has laid its files beside it."""
    return {
        "plan": {"title": "Small", "currency": "crown", "start": "2024-01", "reference": "2024-01"},
        "feed": list(feeds or [feed()]),
        "classification": {"headings": "headings.csv", "assignment": "assignment.csv"},
        "weights": {"file": "weights.csv"},
    } | changes


def write_plan(folder: Path, plan: Table | None = None) -> Path:
    """`plan.toml` with those sections, and the small files it names unless they are there."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, text in {"headings.csv": HEADINGS, "assignment.csv": ASSIGNMENT, "weights.csv": WEIGHTS}.items():
        if not (folder / name).exists():
            (folder / name).write_text(text, encoding="utf-8")
    path = folder / "plan.toml"
    path.write_text("\n".join(f"{key} = {_toml(value)}" for key, value in (plan or sections()).items()), "utf-8")
    return path


def _toml(value: Any) -> str:
    """A value as TOML: tables and lists inline."""
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{json.dumps(key)} = {_toml(member)}" for key, member in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(_toml, value)) + "]"
    return json.dumps(value, ensure_ascii=False) if isinstance(value, str | bool) else repr(value)


def csv_text(rows: Sequence[Row], delimiter: str = ",", newline: str = "\n") -> str:
    """Rows as CSV with a header, quoted where needed."""
    buffer = io.StringIO()
    writer = csv.DictWriter(buffer, list(rows[0]), delimiter=delimiter, lineterminator=newline)
    writer.writeheader()
    writer.writerows(rows)
    return buffer.getvalue()


def put(path: Path, content: str | bytes | Sequence[Row] | pl.DataFrame, encoding: str = "utf-8") -> Path:
    """A delivery: text or bytes as they stand, a frame as Parquet, rows as CSV or Parquet by the path's ending."""
    path.parent.mkdir(parents=True, exist_ok=True)
    if isinstance(content, bytes):
        path.write_bytes(content)
    elif isinstance(content, str):
        path.write_bytes(content.encode(encoding))
    elif isinstance(content, pl.DataFrame):
        content.write_parquet(path)
    elif path.suffix == ".parquet":
        pl.DataFrame(list(content), infer_schema_length=None).write_parquet(path)
    else:
        path.write_bytes(csv_text(content).encode(encoding))
    return path


@dataclass(frozen=True, slots=True)
class Taken:
    """An intake that has ended."""

    compiled: Compiled

    def table(self, name: str) -> pl.DataFrame:
        """A table; of one kept by delivery, the parts of every delivery that has one."""
        workspace = self.compiled.context.workspace
        if not TABLES[name].by_delivery:
            return workspace.read(name)
        names = workspace.read("deliveries")["delivery"].unique(maintain_order=True).to_list()
        parts = [path for path in workspace.parts(name, names) if path.exists()]
        return pl.concat([pl.read_parquet(path, glob=False) for path in parts])

    @property
    def rules(self) -> dict[int, str]:
        """The rule of every refused line, by line number."""
        refused = self.table("refused")
        return dict(zip(refused["line"], refused["rule"], strict=True))

    @property
    def statuses(self) -> dict[str, str]:
        """The status of every file; of one that was overwritten, that of the bytes that came last."""
        listed = self.table("deliveries").sort("feed", "arrival")
        return dict(zip(listed["file"], listed["status"], strict=True))

    @property
    def periods(self) -> dict[str, str]:
        """The period of every accepted item, ISO; for deliveries that sell each item once."""
        sales = self.table("sales")
        return dict(zip(sales["item"], sales["period"].cast(pl.String), strict=True))


def take_in(plan: Path, through: str | None = None) -> Taken:
    """Run the intake of a plan into `work/` beside it."""
    return Taken(carry_out(Request(plan, scope="intake", through=through)))


def take_in_rows(folder: Path, rows: Sequence[Row], name: str = "a.csv", **feed_changes: Any) -> Taken:
    """The intake of one delivery with those rows."""
    put(folder / "in" / name, rows)
    return take_in(write_plan(folder, sections(feed(**feed_changes))))
