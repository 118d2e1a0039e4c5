"""Floating-point errors raise in every kernel test."""

from collections.abc import Iterator

import numpy as np
import pytest


@pytest.fixture(autouse=True)
def floating_point_errors_raise() -> Iterator[None]:
    """Division by zero, overflow, underflow and invalid operations are errors."""
    with np.errstate(all="raise"):
        yield
