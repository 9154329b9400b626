"""Mergeable accumulators and their error bars.

One realization is one independent sample. What is averaged linearly keeps sums and sums of
squares; what enters a ratio or a product of averages keeps sums over blocks of realizations,
for the jackknife. Both take constant memory however many realizations come, and give the same
bits whenever the realizations are added in the same order.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from solver.grid import Real

Arrays = Mapping[str, np.ndarray]

MOST_BLOCKS = 128
"""Blocks kept for the jackknife; neighbours are merged in pairs when there would be more."""
FEWEST_CONTROLLED = 8
"""Blocks from which on a control is worth the degrees of freedom it costs."""


class Estimate(NamedTuple):
    """Values and their standard errors, arrays of one shape."""

    value: Real
    standard_error: Real


@dataclass(frozen=True)
class Control:
    """Quantities whose expectation is known: a function of the feature means, shape (..., n),
    and what it tends to, shape (n,)."""

    function: Callable[[Real], Real]
    expected: Real


class Blocks:
    """Sums of feature vectors over blocks of consecutive realizations."""

    def __init__(self, features: int) -> None:
        self.sums = np.zeros((0, features))
        self.counts = np.zeros(0, dtype=np.int64)
        self.capacity = 1

    @property
    def realizations(self) -> int:
        """Realizations added so far."""
        return int(self.counts.sum())

    def add(self, rows: Real) -> None:
        """Add the features of further realizations, shape (realizations, features), in order."""
        for row in rows:
            if len(self.counts) and self.counts[-1] < self.capacity:
                self.sums[-1] += row
                self.counts[-1] += 1
                continue
            if len(self.counts) == MOST_BLOCKS:
                self.sums = self.sums[0::2] + self.sums[1::2]
                self.counts = self.counts[0::2] + self.counts[1::2]
                self.capacity *= 2
            self.sums = np.concatenate([self.sums, row[None]])
            self.counts = np.append(self.counts, 1)

    def estimate(
        self, function: Callable[[Real], Real], control: "Control | None" = None
    ) -> Estimate:
        """A function of the feature means and its standard error.

        ``function`` maps means of shape (..., features) to values of shape (..., n). The error
        is the delete-a-group jackknife for groups of unequal size (Busing, Meijer and
        van der Leeden, Statistics and Computing 9, 3, 1999, eqs 5 and 6); nan below two blocks.

        With a control, what chance did to quantities whose expectation is known is taken out of
        the values: the regression on control variates (Lavenberg and Welch, Management Science
        27, 322, 1981), done on the pseudo-values. The jackknife then leaves groups out of the
        regression too, by their leverages (Miller, Ann. Statist. 2, 880, 1974).
        """
        total, n = self.sums.sum(axis=0), self.counts.sum()
        value = function(total / n)
        groups = len(self.counts)
        if groups < 2:
            return Estimate(value, np.full_like(value, np.nan))
        left_out = (total - self.sums) / (n - self.counts)[:, None]
        deviations = self._deviations(value, function(left_out))
        if control is not None and groups >= FEWEST_CONTROLLED:
            known = control.function(total / n)
            regressors = self._deviations(known, control.function(left_out))
            # Controls that chance leaves alone, or that go together, have no say of their own.
            inverse = np.linalg.pinv(regressors.T @ regressors, rcond=1e-9, hermitian=True)
            factors = inverse @ regressors.T @ deviations
            missed = control.expected - known
            value = value + missed @ factors
            leverage = np.sum(regressors @ inverse * regressors, axis=1)
            reach = regressors @ inverse @ missed * groups / np.sqrt(groups - 1)
            weight = (1.0 + reach) / np.maximum(1.0 - leverage * groups / (groups - 1), 1e-3)
            deviations = (deviations - regressors @ factors) * weight[:, None]
        return Estimate(value, np.sqrt(np.mean(deviations**2, axis=0)))

    def _deviations(self, value: Real, left_out: Real) -> Real:
        """Pseudo-values less their centre, scaled so that their mean square is the variance."""
        h = (self.counts.sum() / self.counts)[:, None]
        pseudo = h * value - (h - 1.0) * left_out
        centre = len(h) * value - np.sum((1.0 - 1.0 / h) * left_out, axis=0)
        return np.asarray((pseudo - centre) / np.sqrt(h - 1.0))

    def arrays(self) -> dict[str, np.ndarray]:
        """Everything needed to go on later; copies, which later realizations do not change."""
        capacity = np.array(self.capacity)
        return {"sums": self.sums.copy(), "counts": self.counts.copy(), "capacity": capacity}

    @classmethod
    def from_arrays(cls, arrays: Arrays) -> "Blocks":
        """Inverse of :meth:`arrays`."""
        made = cls(arrays["sums"].shape[1])
        made.sums, made.counts = np.array(arrays["sums"]), np.array(arrays["counts"])
        made.capacity = int(arrays["capacity"])
        return made


class Means:
    """Count, sum and sum of squares of feature vectors that are averaged linearly."""

    def __init__(self, features: int) -> None:
        self.count = 0
        self.sums = np.zeros((2, features))

    def add(self, count: int, sums: Real) -> None:
        """Add the sums and sums of squares, shape (2, features), of ``count`` realizations."""
        self.count += count
        self.sums += sums

    def estimate(self) -> Estimate:
        """Means and their standard errors; nan below two realizations."""
        mean = self.sums[0] / self.count
        if self.count < 2:
            return Estimate(mean, np.full_like(mean, np.nan))
        variance = np.maximum(self.sums[1] / self.count - mean**2, 0.0)
        return Estimate(mean, np.sqrt(variance / (self.count - 1)))

    def arrays(self) -> dict[str, np.ndarray]:
        """Everything needed to go on later; copies, which later realizations do not change."""
        return {"count": np.array(self.count), "sums": self.sums.copy()}

    @classmethod
    def from_arrays(cls, arrays: Arrays) -> "Means":
        """Inverse of :meth:`arrays`."""
        made = cls(arrays["sums"].shape[1])
        made.add(int(arrays["count"]), arrays["sums"])
        return made


def sums_and_squares(rows: Real) -> Real:
    """Sums and sums of squares over realizations, for :meth:`Means.add`."""
    return np.stack([rows.sum(axis=0), (rows**2).sum(axis=0)])
