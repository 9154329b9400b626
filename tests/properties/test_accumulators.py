"""Accumulators give the same answer however the realizations arrive."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from solver.statistics import MOST_BLOCKS, Blocks, Estimate, Means, sums_and_squares

some = settings(max_examples=30, deadline=None, derandomize=True, database=None)
CUTS = st.lists(st.integers(0, 400), max_size=6)


def _parts(rows: np.ndarray, cuts: list[int]) -> list[np.ndarray]:
    return np.split(rows, sorted(min(cut, len(rows)) for cut in cuts))


def _rows(seed: int, count: int) -> np.ndarray:
    return np.random.default_rng(seed).gamma(2.0, size=(count, 3))


def _ratio(means: np.ndarray) -> np.ndarray:
    return np.asarray((means[..., 0] / means[..., 1])[..., None])


def _same(a: Estimate, b: Estimate) -> bool:
    return all(x.tobytes() == y.tobytes() for x, y in zip(a, b, strict=True))


@some
@given(st.integers(0, 99), st.integers(1, 400), CUTS)
def test_blocks_do_not_see_how_rows_were_split(seed: int, count: int, cuts: list[int]) -> None:
    """To the bit, in bounded memory, with every row counted once."""
    rows = _rows(seed, count)
    whole, split = Blocks(3), Blocks(3)
    whole.add(rows)
    for part in _parts(rows, cuts):
        split.add(part)
    assert whole.realizations == split.realizations == count
    assert len(split.counts) <= MOST_BLOCKS
    assert _same(whole.estimate(_ratio), split.estimate(_ratio))
    np.testing.assert_allclose(whole.sums.sum(axis=0), rows.sum(axis=0), rtol=1e-12)


@some
@given(st.integers(0, 99), st.integers(1, 300), st.integers(1, 300))
def test_blocks_go_on_from_their_arrays(seed: int, count: int, more: int) -> None:
    """Stored and taken up again: as if nothing had happened, and the original is not shared."""
    rows = _rows(seed, count + more)
    whole, first = Blocks(3), Blocks(3)
    whole.add(rows)
    first.add(rows[:count])
    again = Blocks.from_arrays({k: v.copy() for k, v in first.arrays().items()})
    again.add(rows[count:])
    assert _same(whole.estimate(_ratio), again.estimate(_ratio))
    copied = Blocks.from_arrays(first.arrays())
    copied.add(rows[count:])
    assert first.realizations == count
    np.testing.assert_allclose(first.sums.sum(axis=0), rows[:count].sum(axis=0), rtol=1e-12)


@some
@given(st.integers(0, 99), st.integers(2, 300), CUTS)
def test_means_do_not_see_how_rows_were_split(seed: int, count: int, cuts: list[int]) -> None:
    """Equal to numpy's mean and standard error, however they were merged, stored or split."""
    rows = _rows(seed, count)
    means = Means(3)
    for part in _parts(rows, cuts):
        means.add(len(part), sums_and_squares(part))
        means = Means.from_arrays(means.arrays())
    value, error = means.estimate()
    np.testing.assert_allclose(value, rows.mean(axis=0), rtol=1e-11)
    expected = rows.std(axis=0, ddof=1) / np.sqrt(count)
    np.testing.assert_allclose(error, expected, rtol=1e-6)


@some
@given(st.integers(0, 99), st.integers(3, 300), st.floats(-5.0, 5.0), st.floats(0.1, 9.0))
def test_error_bars_scale_as_errors_do(seed: int, count: int, shift: float, scale: float) -> None:
    """Shift leaves the error of a mean alone, scale multiplies it."""
    rows = _rows(seed, count)
    plain, moved = Blocks(3), Blocks(3)
    plain.add(rows)
    moved.add(shift + scale * rows)
    a, b = (blocks.estimate(lambda means: means) for blocks in (plain, moved))
    np.testing.assert_allclose(b.value, shift + scale * a.value, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(b.standard_error, scale * a.standard_error, rtol=1e-7)
