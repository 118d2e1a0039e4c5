"""Axioms of the splices (definitions: DESIGN section 7; sources in twins.py)."""

import hypothesis.extra.numpy as hnp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.kernels import tolerances
from tests.kernels.panels import PROPERTY, floats
from tests.kernels.variants import ONTO, SPLICES, VARIANTS, Onto, Splice
from tillwright.kernels import splicing

Array = NDArray[np.float64]

each_splice = pytest.mark.parametrize("splice", SPLICES)
each_variant = pytest.mark.parametrize(("splice", "onto"), VARIANTS)


def close(found: Array, expected: Array) -> None:
    """Levels equal to a relative AXIOM."""
    np.testing.assert_allclose(found, expected, rtol=tolerances.AXIOM, atol=0)


@st.composite
def windows(draw: st.DrawFn, *, rows: int | None = None) -> Array:
    """Log levels (K, W) of windows that disagree, each row starting at 0."""
    size = rows or draw(st.integers(1, 6)), draw(st.integers(2, 7))
    levels = draw(hnp.arrays(np.float64, size, elements=floats(-3.0, 3.0)))
    return np.asarray(levels - levels[:, :1])


@st.composite
def agreeing_windows(draw: st.DrawFn) -> tuple[Array, Array]:
    """Log levels (T,) from 1e-12 to 1e12 and the windows (K, W) cut out of them."""
    periods = draw(st.integers(3, 9))
    width = draw(st.integers(2, periods))
    level = draw(hnp.arrays(np.float64, periods, elements=floats(-27.6, 27.6)))
    level -= level[0]
    rows = [level[k : k + width] - level[k] for k in range(periods - width + 1)]
    return level, np.array(rows)


@each_variant
@PROPERTY
@given(case=agreeing_windows())
def test_windows_that_agree_give_their_common_level(splice: Splice, onto: Onto, case: tuple[Array, Array]) -> None:
    level, levels = case
    close(splicing.splice(levels, splice=splice, onto=onto), np.exp(level))


@each_splice
@PROPERTY
@given(levels=windows(rows=2))
def test_published_and_recalculated_coincide_at_the_first_splice(splice: Splice, levels: Array) -> None:
    close(
        splicing.splice(levels, splice=splice, onto="published"),
        splicing.splice(levels, splice=splice, onto="recalculated"),
    )


@PROPERTY
@given(levels=windows())
def test_movement_splice_is_the_same_onto_either_series(levels: Array) -> None:
    published = splicing.splice(levels, splice="movement", onto="published")
    close(published, splicing.splice(levels, splice="movement", onto="recalculated"))
    last = levels[1:, -1] - levels[1:, -2]
    close(published[levels.shape[1] :] / published[levels.shape[1] - 1 : -1], np.exp(last))


@each_variant
@PROPERTY
@given(levels=windows(rows=4), shifts=st.tuples(*[floats(-5.0, 5.0)] * 3))
def test_only_ratios_inside_a_window_matter(
    splice: Splice, onto: Onto, levels: Array, shifts: tuple[float, ...]
) -> None:
    shifted = levels.copy()
    shifted[1:] += np.array(shifts)[:, None]
    close(
        splicing.splice(shifted, splice=splice, onto=onto),
        splicing.splice(levels, splice=splice, onto=onto),
    )


@PROPERTY
@given(levels=windows())
def test_window_splice_onto_published_keeps_the_long_movement(levels: Array) -> None:
    # Krsinich (2016) onto the published series: the movement over a whole window is the window's.
    width = levels.shape[1]
    found = splicing.splice(levels, splice="window", onto="published")
    for k, row in enumerate(levels):
        close(found[k + width - 1] / found[k], np.exp(row[-1] - row[0]))


@pytest.mark.parametrize("onto", ONTO)
@PROPERTY
@given(levels=windows(rows=2))
def test_mean_splice_is_the_mean_of_all_single_links(onto: Onto, levels: Array) -> None:
    # Diewert and Fox (2017): at the first splice, geometric mean over the W-1 common periods.
    width = levels.shape[1]
    old, new = levels[0], levels[1]
    links = [old[s] + new[-1] - new[s - 1] for s in range(1, width)]
    found = splicing.splice(levels, splice="mean", onto=onto)
    close(found[-1], np.exp(np.mean(links)))


def test_splices_differ_when_windows_disagree() -> None:
    levels = np.array([[0.0, 0.13, 0.57, 0.21], [0.0, 0.31, 0.22, 0.46], [0.0, -0.17, 0.35, 0.12]])
    last = {(splice, onto): float(splicing.splice(levels, splice=splice, onto=onto)[-1]) for splice, onto in VARIANTS}
    kinds = len(last) - 1  # movement is one series, not two
    assert len({round(value, 9) for value in last.values()}) == kinds
