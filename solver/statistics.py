"""Mergeable accumulators and their error bars.

One realization is one independent sample. What is averaged linearly keeps sums and sums of
squares; what enters a ratio or a product of averages keeps sums over blocks of realizations,
for the jackknife. Both take constant memory however many realizations come, and give the same
bits whenever the realizations are added in the same order.
"""

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from solver.experiment import Ensemble
from solver.grid import Grid, Real

Arrays = Mapping[str, np.ndarray]

MOST_BLOCKS = 128
"""Blocks kept for the jackknife; neighbours are merged in pairs when there would be more."""
FEWEST_CONTROLLED = 8
"""Blocks from which on a control is worth the degrees of freedom it costs."""
CONTRAST_BINS = 50
DURATION_BINS = 50
MOST_LAGS = 400
MOST_FREQUENCIES = 1024


CORRELATIONS = ("auto1", "auto2", "sum", "cross")
SPECTRA = ("input1", "input2", "output1", "output2")
ESTIMATES: dict[str, str] = {
    "distance": "1",
    **dict.fromkeys(CORRELATIONS, "1"),
    "moment_cross": "1",
    **dict.fromkeys(SPECTRA, "W/GHz"),
    "contrast": "1",
    "durations": "1/ps",
    "walls_per_ns": "1/ns",
    "mean_duration_ps": "ps",
    "powers": "W",
}
"""Names of all estimates and their units.

distance: C12(0) at each recorded distance; auto1, auto2, sum, cross: normalized intensity
covariances against signed lag; moment_cross: ⟨I1 I2⟩/(⟨I1⟩⟨I2⟩) at lag 0; input and output
spectra; contrast, durations: probability densities; powers: launched 1, 2, arriving 1, 2.
"""
TINY = float(np.finfo(np.float64).tiny)
"""Stands for zero under a division whose numerator is zero too."""


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


@dataclass(frozen=True)
class Layout:
    """Axes of the estimators of an experiment, and where each stands in the feature vectors.

    The axes belong to the grid that was asked for; a point computed on a finer time step of
    the same window reports on the same axes.
    """

    grid: Grid
    distances: int
    lag_stride: int
    lags: int
    frequency_bins: int
    wall_smoothing_ps: float
    longest_duration_ps: float

    @classmethod
    def of(cls, ensemble: Ensemble) -> "Layout":
        """The layout that an ensemble's grid and lag range ask for."""
        steps = max(1, round(ensemble.max_lag_ps / ensemble.time_step_ps))
        stride = -(-steps // MOST_LAGS)
        return cls(
            grid=Grid(ensemble.samples, ensemble.time_step_ps),
            distances=ensemble.distances + 1,
            lag_stride=stride,
            lags=steps // stride,
            frequency_bins=min(MOST_FREQUENCIES, ensemble.samples),
            wall_smoothing_ps=ensemble.wall_smoothing_ps,
            longest_duration_ps=ensemble.max_lag_ps,
        )

    @property
    def lag_ps(self) -> Real:
        """Signed lags, ps; shape (2·lags + 1,)."""
        return np.arange(-self.lags, self.lags + 1) * self.lag_stride * self.grid.time_step_ps

    @property
    def offset_ghz(self) -> Real:
        """Centres of the frequency bins, optical offset from the carrier, GHz."""
        return np.asarray(self.grid.offset_ghz.reshape(self.frequency_bins, -1).mean(axis=1))

    @property
    def contrast(self) -> Real:
        """Centres of the contrast bins."""
        return (np.arange(CONTRAST_BINS) + 0.5) * 2.0 / CONTRAST_BINS - 1.0

    @property
    def duration_ps(self) -> Real:
        """Centres of the duration bins, ps."""
        return (np.arange(DURATION_BINS) + 0.5) * self.longest_duration_ps / DURATION_BINS

    @property
    def block_features(self) -> int:
        """Length of a realization's vector in :class:`Blocks`."""
        return 5 * self.distances + 4 * self.lags + 3 + 1 + DURATION_BINS

    @property
    def mean_features(self) -> int:
        """Length of a realization's vector in :class:`Means`."""
        return 4 + CONTRAST_BINS + 4 * self.frequency_bins


def central(means: Real) -> Real:
    """C12(0), covariance normalization, from means of I1, I2, I1², I2², I1·I2 (last axis)."""
    m1, m2, m11, m22, m12 = np.moveaxis(means, -1, 0)
    variance = np.maximum((m11 - m1**2) * (m22 - m2**2), TINY)
    return np.asarray((m12 - m1 * m2) / np.sqrt(variance))


def launch_control(launched: float) -> Control:
    """C12(0) of the same realizations at the launch, for features that begin with its moments.

    launched: its expectation, exact by the Gaussian moment theorem.
    """
    return Control(lambda means: central(means[..., :5])[..., None], np.array([launched]))


def last_central(layout: Layout, blocks: Blocks, launched: float) -> Estimate:
    """C12(0) at the end of the line; shape (1,)."""
    last = slice(5 * (layout.distances - 1), 5 * layout.distances)
    return blocks.estimate(
        lambda means: central(means[..., last])[..., None], launch_control(launched)
    )


class Estimators(Mapping[str, Estimate]):
    """Every estimate of one point of a study by name, worked out when it is first asked for.

    launched: expectation of C12(0) at the launch, against which that along the line is controlled.
    A snapshot: accumulators that go on growing do not change it. The names and their units
    are those of :data:`ESTIMATES`.
    """

    def __init__(self, layout: Layout, blocks: Blocks, means: Means, launched: float) -> None:
        self.layout = layout
        self._launched = launched
        self._blocks = Blocks.from_arrays(blocks.arrays())
        self._linear = means.estimate()
        self._known: dict[str, Estimate] = {}
        self._walls_at = layout.block_features - DURATION_BINS - 1

    def __iter__(self) -> Iterator[str]:
        return iter(ESTIMATES)

    def __len__(self) -> int:
        return len(ESTIMATES)

    def __getitem__(self, name: str) -> Estimate:
        if name not in ESTIMATES:
            raise KeyError(name)
        if name not in self._known:
            if name in CORRELATIONS:
                self._known |= self._correlations()
            else:
                self._known[name] = self._work_out(name)
        return self._known[name]

    def _work_out(self, name: str) -> Estimate:
        match name:
            case "distance":
                return self._blocks.estimate(
                    lambda means: central(self._moments(means)), launch_control(self._launched)
                )
            case "moment_cross":
                return self._blocks.estimate(self._moment_cross)
            case "walls_per_ns":
                window_ns = self.layout.grid.window_ps / 1e3
                at = self._walls_at
                return self._blocks.estimate(lambda means: means[..., at : at + 1] / window_ns)
            case "mean_duration_ps":
                return self._mean_duration()
            case "durations":
                return self._blocks.estimate(self._durations)
            case "powers":
                return self._slice(0, 4)
            case "contrast":
                return self._slice(4, CONTRAST_BINS)
            case _:
                bins = self.layout.frequency_bins
                return self._slice(4 + CONTRAST_BINS + SPECTRA.index(name) * bins, bins)

    def _slice(self, start: int, length: int) -> Estimate:
        value, error = self._linear
        return Estimate(value[start : start + length], error[start : start + length])

    def _moments(self, means: Real) -> Real:
        d = self.layout.distances
        return means[..., : 5 * d].reshape(*means.shape[:-1], d, 5)

    def _moment_cross(self, means: Real) -> Real:
        last = self._moments(means)[..., -1, :]
        product = np.maximum(last[..., 0] * last[..., 1], TINY)
        return np.asarray(last[..., 4] / product)[..., None]

    def _correlations(self) -> dict[str, Estimate]:
        n = self.layout.lags
        start = 5 * self.layout.distances

        def curves(means: Real) -> Real:
            last = self._moments(means)[..., -1, :]
            m1, m2 = last[..., 0:1], last[..., 1:2]
            raw = means[..., start : start + 4 * n + 3]
            half1, half2 = raw[..., : n + 1] - m1**2, raw[..., n + 1 : 2 * n + 2] - m2**2
            cross = raw[..., 2 * n + 2 :] - m1 * m2
            auto1 = np.concatenate([half1[..., :0:-1], half1], axis=-1)
            auto2 = np.concatenate([half2[..., :0:-1], half2], axis=-1)
            total = auto1 + auto2 + cross + cross[..., ::-1]
            v1, v2 = np.maximum(half1[..., :1], TINY), np.maximum(half2[..., :1], TINY)
            v_total = np.maximum(total[..., n : n + 1], TINY)
            parts = [auto1 / v1, auto2 / v2, total / v_total, cross / np.sqrt(v1 * v2)]
            return np.concatenate(parts, axis=-1)

        value, error = (np.split(array, 4) for array in self._blocks.estimate(curves))
        return {name: Estimate(v, e) for name, v, e in zip(CORRELATIONS, value, error, strict=True)}

    def _mean_duration(self) -> Estimate:
        at, window = self._walls_at, self.layout.grid.window_ps
        if not self._blocks.sums[:, at].any():
            return Estimate(np.array([np.inf]), np.array([np.nan]))
        return self._blocks.estimate(lambda m: window / np.maximum(m[..., at : at + 1], TINY))

    def _durations(self, means: Real) -> Real:
        width = self.layout.longest_duration_ps / DURATION_BINS
        count = np.maximum(means[..., self._walls_at : self._walls_at + 1], TINY)
        return np.asarray(means[..., self._walls_at + 1 :] / (count * width))
