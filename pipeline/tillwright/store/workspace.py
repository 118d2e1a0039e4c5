"""The workspace of a plan: where tables lie, and how they get there whole or not at all."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq

from tillwright.errors import DataError
from tillwright.tables import TABLES, conform

_ROW_GROUP = 1 << 20


@dataclass(frozen=True, slots=True)
class Workspace:
    """A folder with `tables/`, `ledger.duckdb` and, while a compile runs, `spill/`."""

    root: Path

    @property
    def tables(self) -> Path:
        """Folder of all tables."""
        return self.root / "tables"

    @property
    def headings_csv(self) -> Path:
        """The headings once more, rounded, for people."""
        return self.tables / "headings.csv"

    @property
    def ledger(self) -> Path:
        """File of the ledger."""
        return self.root / "ledger.duckdb"

    @property
    def spill(self) -> Path:
        """Folder where DuckDB spills what does not fit into memory."""
        return self.root / "spill"

    @property
    def orchestration(self) -> Path:
        """Folder of Prefect's own state."""
        return self.root / "prefect"

    def path(self, name: str, delivery: str | None = None) -> Path:
        """File of a table, or of one delivery's part of it."""
        if TABLES[name].by_delivery:
            if delivery is None:
                raise ValueError(f"table {name} is kept by delivery")
            return self.tables / name / f"{delivery}.parquet"
        return self.tables / f"{name}.parquet"

    def parts(self, name: str, deliveries: Sequence[str]) -> list[Path]:
        """Files of a table's parts, in the order given."""
        return [self.path(name, delivery) for delivery in deliveries]

    def write(self, name: str, frame: pl.DataFrame, delivery: str | None = None) -> Path:
        """Write a table, or one delivery's part of it, checked against its declaration."""
        path = self.path(name, delivery)
        write_parquet(conform(name, frame), path)
        return path

    def sweep(self) -> None:
        """Remove what a killed compile left half written; call it only while holding the ledger."""
        for partial in self.tables.rglob(".*.part"):
            partial.unlink(missing_ok=True)

    def read(self, name: str) -> pl.DataFrame:
        """A table as a frame."""
        return pl.read_parquet(self.path(name), glob=False)


def write_parquet(frame: pl.DataFrame, path: Path) -> None:
    """Write a frame as Parquet, the same bytes for the same rows."""
    table = frame.rechunk().to_arrow(compat_level=pl.CompatLevel.oldest()).combine_chunks()
    with _replacing(path) as partial:
        pq.write_table(table, partial, compression="zstd", row_group_size=_ROW_GROUP, store_schema=False)


def write_frame(frame: pl.DataFrame, path: Path) -> None:
    """Write a frame as .parquet, .csv or .json by the path's ending."""
    writers: dict[str, Callable[[Path], object]] = {
        ".parquet": lambda partial: pq.write_table(_arrow(frame), partial, compression="zstd"),
        ".csv": frame.write_csv,
        ".json": frame.write_json,
    }
    with _replacing(path) as partial:
        writers[path.suffix.lower()](partial)


def _arrow(frame: pl.DataFrame) -> pa.Table:
    return frame.rechunk().to_arrow(compat_level=pl.CompatLevel.oldest())


@contextlib.contextmanager
def _replacing(path: Path) -> Iterator[Path]:
    """A path to write to, put in place of `path` by one rename once all is written."""
    partial = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        yield partial
        partial.replace(path)
    except OSError as error:
        raise DataError(
            f"{path} cannot be written ({error.strerror or error}). What was there before is unchanged. "
            "Make room or give a folder that can be written, and run again."
        ) from None
    finally:
        with contextlib.suppress(OSError):
            partial.unlink(missing_ok=True)
