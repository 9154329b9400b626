"""The paired difference of two variants against plain statistics of paired samples."""

import numpy as np
import pytest

from solver.experiment import Ensemble
from solver.pairing import difference
from solver.statistics import Blocks, Layout

LAYOUT = Layout.of(
    Ensemble(window_ps=1024.0, samples=256, distances=1, max_lag_ps=8.0, max_realizations=4096)
)


UNLIT = (0.0, 0.0)
"""Expectations at a launch that :func:`_blocks` leaves without light: it controls nothing."""


def _blocks(covariance: np.ndarray, launched: np.ndarray | None = None) -> Blocks:
    """Realizations whose moments make C12(0), at both ends, the mean of the values given."""
    rows = np.zeros((len(covariance), LAYOUT.block_features))
    # ⟨I²⟩ = 1 with ⟨I⟩ = 0, so that C12(0) is the mean of ⟨I1 I2⟩
    rows[:, 7:9], rows[:, 9] = 1.0, covariance
    if launched is not None:
        rows[:, 2:4], rows[:, 4] = 1.0, launched
    blocks = Blocks(LAYOUT.block_features)
    blocks.add(rows)
    return blocks


@pytest.mark.parametrize("count", [8, 100])
def test_it_is_the_paired_mean_and_its_standard_error(count: int) -> None:
    """Student's paired difference of means, one realization to a group: exact."""
    stream = np.random.default_rng(3)
    shared = stream.standard_normal(count)
    own = 0.1 + 0.05 * shared + 0.01 * stream.standard_normal(count)
    other = 0.05 * shared
    found = difference(LAYOUT, _blocks(own), _blocks(other), UNLIT)
    assert found is not None
    assert found.realizations == count
    np.testing.assert_allclose(found.value, np.mean(own - other), rtol=1e-9)
    expected = np.std(own - other, ddof=1) / np.sqrt(count)
    np.testing.assert_allclose(found.standard_error, expected, rtol=1e-9)
    alone = (np.var(own, ddof=1) + np.var(other, ddof=1)) / count
    np.testing.assert_allclose(found.gain, alone / expected**2, rtol=1e-9)


def test_only_what_both_have_counts_and_groups_are_made_alike() -> None:
    """300 realizations stand in blocks of four, 90 in blocks of one: 22 common groups of four."""
    values = np.random.default_rng(5).standard_normal(300)
    long, short = _blocks(0.1 * values), _blocks(0.1 * values[:90] + 0.2)
    assert (long.capacity, short.capacity) == (4, 1)
    found = difference(LAYOUT, short, long, UNLIT)
    assert found is not None
    assert found.realizations == 88
    np.testing.assert_allclose(found.value, 0.2, rtol=1e-9)
    assert found.standard_error < 1e-9


def test_one_group_has_no_error_and_so_no_difference() -> None:
    assert difference(LAYOUT, _blocks(np.zeros(1)), _blocks(np.zeros(5)), UNLIT) is None


def test_the_launch_of_both_controls_their_difference() -> None:
    """The paired regression on both launches, by least squares; and what it saves."""
    stream = np.random.default_rng(7)
    launches = 0.05 * stream.standard_normal((2, 60)) + np.array([[0.2], [0.0]])
    shared, alone = 0.01 * stream.standard_normal((2, 60))
    own = 0.1 + 0.9 * launches[0] + shared + alone
    other = 0.05 + 0.4 * launches[1] + shared
    expected = (0.2, 0.0)
    found = difference(LAYOUT, _blocks(own, launches[0]), _blocks(other, launches[1]), expected)
    plain = difference(LAYOUT, _blocks(own), _blocks(other), UNLIT)
    assert found is not None
    assert plain is not None
    table = np.stack([np.ones(60), launches[0] - 0.2, launches[1]], axis=1)
    level, *_ = np.linalg.lstsq(table, own - other, rcond=None)[0]
    np.testing.assert_allclose(found.value, level, rtol=1e-9)
    assert abs(found.value - (0.1 + 0.18 - 0.05)) < 4.0 * found.standard_error
    assert found.standard_error == pytest.approx(np.std(alone) / np.sqrt(60), rel=0.2)
    assert found.standard_error < 0.3 * plain.standard_error
