"""The difference between two variants that saw the same light.

All variants draw the same noise, realization by realization, so what chance does to one it does
to the other, and much of it cancels in their difference (common random numbers; Law, Simulation
Modeling and Analysis, ch. 11). The jackknife leaves the same realizations out of both.
"""

from dataclasses import dataclass

import numpy as np

from solver.grid import Real
from solver.statistics import TINY, Blocks, Control, Layout, central


@dataclass(frozen=True)
class Difference:
    """C12(0) of a variant minus that of the first, over the realizations both have.

    gain: how many times the realizations unpaired variants would need for the same error.
    """

    value: float
    standard_error: float
    realizations: int
    gain: float


def _grouped(blocks: Blocks, capacity: int) -> Real:
    """Sums over whole groups of ``capacity`` realizations, a multiple of the blocks' own."""
    ratio = capacity // blocks.capacity
    whole = int(np.count_nonzero(blocks.counts == blocks.capacity)) // ratio
    return np.asarray(blocks.sums[: whole * ratio].reshape(whole, ratio, -1).sum(axis=1))


def difference(
    layout: Layout, blocks: Blocks, first: Blocks, launched: tuple[float, float]
) -> Difference | None:
    """Paired difference at the end of the line; None below two groups that both have.

    launched: expectations of C12(0) at the launch of the variant and of the first, controls of
    both ends as in :func:`solver.statistics.last_central`.
    """
    ends = np.r_[0:5, 5 * (layout.distances - 1) : 5 * layout.distances]
    capacity = max(blocks.capacity, first.capacity)
    own, other = _grouped(blocks, capacity)[:, ends], _grouped(first, capacity)[:, ends]
    groups = min(len(own), len(other))
    if groups < 2:
        return None
    paired = Blocks(20)
    paired.sums = np.concatenate([own[:groups], other[:groups]], axis=1)
    paired.counts = np.full(groups, capacity)
    paired.capacity = capacity

    def at_launch(means: Real) -> Real:
        return np.stack([central(means[..., :5]), central(means[..., 10:15])], axis=-1)

    def values(means: Real) -> Real:
        ours, theirs = central(means[..., 5:10]), central(means[..., 15:])
        return np.stack([ours - theirs, ours, theirs], axis=-1)

    value, error = paired.estimate(values, Control(at_launch, np.array(launched)))
    gain = (error[1] ** 2 + error[2] ** 2) / max(error[0] ** 2, TINY)
    return Difference(float(value[0]), float(error[0]), groups * capacity, float(gain))
