"""Axes of the estimators, and where each quantity stands in a realization's feature vectors."""

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from solver.experiment import Ensemble, Receiver
from solver.grid import Grid, Real

CONTRAST_BINS = 50
DURATION_BINS = 50
SPHERE_BINS = (24, 48)
"""Bins of S3/S0 and of the azimuth: all of one area, 4π/1152 sr."""
INTENSITY_BINS = 60
LARGEST_INTENSITY = 8.0
"""Top of the histograms of intensity, in units of the mean; what is brighter is left out."""
QUADRATURE_BINS = 60
LARGEST_QUADRATURE = 4.0
"""Ends of the histogram of field quadratures, in standard deviations."""
MOST_LAGS = 400
MOST_FREQUENCIES = 1024

IDEAL = Receiver()
"""A receiver without any imperfection."""


def _placed(lengths: Mapping[str, int]) -> dict[str, slice]:
    places, start = {}, 0
    for name, length in lengths.items():
        places[name] = slice(start, start + length)
        start += length
    return places


@dataclass(frozen=True)
class Layout:
    """Axes of the estimators of an experiment, and where each stands in the feature vectors.

    The axes belong to the grid that was asked for; a point computed on a finer time step of
    the same window reports on the same axes. detected: the digitizer's samples.
    """

    grid: Grid
    detected: Grid
    distances: int
    lag_stride: int
    lags: int
    frequency_bins: int
    wall_smoothing_ps: float
    longest_duration_ps: float
    analyser_ghz: float | None = None

    @classmethod
    def of(cls, ensemble: Ensemble, receiver: Receiver = IDEAL) -> "Layout":
        """The layout that an ensemble's grid and lag range and a receiver ask for."""
        grid = Grid(ensemble.samples, ensemble.time_step_ps)
        step = receiver.decimation(grid.time_step_ps)
        detected = Grid(ensemble.samples // step, ensemble.time_step_ps * step)
        steps = max(1, round(ensemble.max_lag_ps / detected.time_step_ps))
        stride = -(-steps // MOST_LAGS)
        return cls(
            grid=grid,
            detected=detected,
            distances=ensemble.distances + 1,
            lag_stride=stride,
            lags=steps // stride,
            frequency_bins=min(MOST_FREQUENCIES, ensemble.samples),
            wall_smoothing_ps=ensemble.wall_smoothing_ps,
            longest_duration_ps=ensemble.max_lag_ps,
            analyser_ghz=receiver.analyser_ghz,
        )

    @property
    def lag_ps(self) -> Real:
        """Signed lags, ps; shape (2·lags + 1,)."""
        return np.arange(-self.lags, self.lags + 1) * self.lag_stride * self.detected.time_step_ps

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
    def sphere_s3(self) -> Real:
        """Centres of the sphere's bins in S3/S0."""
        return (np.arange(SPHERE_BINS[0]) + 0.5) * 2.0 / SPHERE_BINS[0] - 1.0

    @property
    def sphere_azimuth_deg(self) -> Real:
        """Centres of the sphere's bins in azimuth, the angle of (S1, S2)."""
        return (np.arange(SPHERE_BINS[1]) + 0.5) * 360.0 / SPHERE_BINS[1] - 180.0

    @property
    def relative_intensity(self) -> Real:
        """Centres of the bins of intensity over its mean."""
        return (np.arange(INTENSITY_BINS) + 0.5) * LARGEST_INTENSITY / INTENSITY_BINS

    @property
    def quadrature(self) -> Real:
        """Centres of the bins of field quadratures over their standard deviation."""
        return ((np.arange(QUADRATURE_BINS) + 0.5) * 2.0 / QUADRATURE_BINS - 1.0) * (
            LARGEST_QUADRATURE
        )

    @cached_property
    def in_blocks(self) -> dict[str, slice]:
        """Where each quantity stands in a realization's vector in ``Blocks``.

        moments: of I1, I2, I1², I2², I1·I2 at each distance; correlations: auto 1 and 2 at lags
        ≥ 0, cross at signed lags; walls, wall_widths (sum, ps) and durations (counts) at the end;
        walls_along: at each distance; contrast: its mean, then its autocorrelation at lags ≥ 0;
        stokes: means of S0 to S3, launched and received; local_polarization: mean degree over the
        wall smoothing, received; lines: for each spectrum Σp, Σfp, Σf²p
        and Σp_k p_{k+1} over its lines.
        """
        return _placed(
            {
                "moments": 5 * self.distances,
                "correlations": 4 * self.lags + 3,
                "walls": 1,
                "wall_widths": 1,
                "durations": DURATION_BINS,
                "walls_along": self.distances,
                "contrast": self.lags + 2,
                "stokes": 8,
                "local_polarization": 1,
                "lines": 16,
            }
        )

    @cached_property
    def in_means(self) -> dict[str, slice]:
        """Where each quantity stands in a realization's vector in ``Means``."""
        return _placed(
            {
                "powers": 4,
                "contrast": CONTRAST_BINS,
                "spectra": 4 * self.frequency_bins,
                "stokes": SPHERE_BINS[0] * SPHERE_BINS[1],
                "intensities": 3 * INTENSITY_BINS,
                "quadratures": QUADRATURE_BINS,
            }
        )

    @property
    def block_features(self) -> int:
        """Length of a realization's vector in ``Blocks``."""
        return int(self.in_blocks["lines"].stop)

    @property
    def mean_features(self) -> int:
        """Length of a realization's vector in ``Means``."""
        return int(self.in_means["quadratures"].stop)
