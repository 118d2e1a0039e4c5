"""Load the published cases and data sets of this folder; citations are in README.md."""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

HERE = Path(__file__).parent

FORMULA_NAMES = {
    "geo_laspeyres": "geometric-laspeyres",
    "geo_paasche": "geometric-paasche",
}


@dataclass(frozen=True, slots=True)
class Case:
    """One published case: where it is from, what goes in, what must come out."""

    id: str
    source: str
    origin: str
    inputs: dict[str, Any]
    expected: NDArray[np.float64]
    tolerance: float
    note: str

    @property
    def citation(self) -> str:
        """Source, origin and note in one line, for test output."""
        return f"{self.id}: {self.source} ({self.origin}) {self.note}".strip()

    @property
    def formula(self) -> str:
        """Tillwright's name of the formula, read from the id (artificial_chained_jevons, ...)."""
        family, *parts = self.id.split("_")
        name = "_".join(parts[1:]) if family == "artificial" else parts[0]
        return FORMULA_NAMES.get(name, name)

    @property
    def linking(self) -> str:
        """How the periods are compared: fixedbase, chained, m2m, chain, direct, fb or ch."""
        family, *parts = self.id.split("_")
        return parts[0] if family == "artificial" else parts[-1]


@dataclass(frozen=True, slots=True)
class Dataset:
    """A published data set as (T, N) arrays, rows periods."""

    prices: NDArray[np.float64]
    quantities: NDArray[np.float64]


def _read(name: str) -> dict[str, Any]:
    content: dict[str, Any] = json.loads((HERE / name).read_text(encoding="utf-8"))
    return content


def cases(prefix: str) -> list[Case]:
    """Cases whose id starts with the prefix, from both files."""
    found = [*_read("values.json")["cases"], *_read("from_memory.json")["cases"]]
    return [
        Case(
            id=raw["id"],
            source=raw["source"],
            origin=raw["origin"],
            inputs=raw["inputs"],
            expected=np.array(raw["expected"], dtype=np.float64),
            tolerance=float(raw["tolerance"]),
            note=raw.get("note", ""),
        )
        for raw in found
        if raw["id"].startswith(prefix)
    ]


def dataset(name: str) -> Dataset:
    """A data set by name; `elementary` is printed items by months, without quantities (ones)."""
    raw = _read("values.json")["datasets"][name]
    prices = np.array(raw["prices"], dtype=np.float64)
    if name == "elementary":
        prices = prices.T
    quantities = np.array(raw["quantities"]) if "quantities" in raw else np.ones(prices.shape)
    return Dataset(prices.copy(), quantities.astype(np.float64))
