"""Which formulas, splices and series the kernel tests run over."""

import itertools
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tillwright.choices import BILATERAL_FORMULAS
from tillwright.kernels import geks
from tillwright.kernels.windows import Windows

Splice = Literal["movement", "window", "half", "mean"]
Onto = Literal["recalculated", "published"]
Form = Literal["chained", "direct"]

SPLICES: tuple[Splice, ...] = ("movement", "window", "half", "mean")
ONTO: tuple[Onto, ...] = ("recalculated", "published")
FORMS: tuple[Form, ...] = ("chained", "direct")
VARIANTS: list[tuple[Splice, Onto]] = list(itertools.product(SPLICES, ONTO))


def on_offer(*names: str) -> list[str]:
    """Those of the names that the kernels offer now."""
    return [name for name in names if name in BILATERAL_FORMULAS]


def all_but(*names: str) -> list[str]:
    """Every formula on offer except the named ones."""
    return [name for name in BILATERAL_FORMULAS if name not in names]


# GEKS needs time reversal: only then is the log matrix of pairs antisymmetric, and the geometric
# mean over all links the least-squares fit.
GEKS_FORMULAS = on_offer("jevons", "dutot", "fisher", "tornqvist", "walsh")


def rolling_geks(log_pairs: NDArray[np.float64], window: int) -> NDArray[np.float64]:
    """(K, W) log GEKS levels of every window of that many periods."""
    return geks.window_levels(log_pairs, Windows.rolling(len(log_pairs), window))
