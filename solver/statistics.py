"""Every estimate of a point of a study, from its accumulators, with its standard error."""

from collections.abc import Callable, Iterator, Mapping

import numpy as np

from solver.accumulators import (
    FEWEST_CONTROLLED,
    MOST_BLOCKS,
    Arrays,
    Blocks,
    Control,
    Estimate,
    Means,
    sums_and_squares,
)
from solver.grid import Real
from solver.layout import (
    CONTRAST_BINS,
    DURATION_BINS,
    IDEAL,
    INTENSITY_BINS,
    SPHERE_BINS,
    Layout,
)
from solver.widths import half_maximum_width

__all__ = [
    "ALONG",
    "CONTRAST_BINS",
    "CORRELATIONS",
    "DURATION_BINS",
    "ESTIMATES",
    "FEWEST_CONTROLLED",
    "IDEAL",
    "INTENSITIES",
    "MOST_BLOCKS",
    "ORDER",
    "SPECTRA",
    "TINY",
    "Arrays",
    "Blocks",
    "Control",
    "Estimate",
    "Estimators",
    "Layout",
    "Means",
    "central",
    "last_central",
    "launch_control",
    "sums_and_squares",
]

CORRELATIONS = ("auto1", "auto2", "sum", "cross")
SPECTRA = ("input1", "input2", "output1", "output2")
ALONG = ("power1", "power2", "second_moment1", "second_moment2")
INTENSITIES = ("intensity1", "intensity2", "intensity_sum")
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
    "power1": "W",
    "power2": "W",
    "second_moment1": "1",
    "second_moment2": "1",
    "walls_along": "1/ns",
    "duration_along": "ps",
    "wall_width_ps": "ps",
    "contrast_correlation": "1",
    "stokes": "1/sr",
    "stokes_means": "1",
    "polarization_degree": "1",
    "local_polarization_degree": "1",
    **dict.fromkeys(INTENSITIES, "1"),
    "quadratures": "1",
    "spectral_rms_ghz": "GHz",
    "spectral_fwhm_ghz": "GHz",
    "coherence_time_ps": "ps",
}
"""Names of all estimates and their units.

distance: C12(0) at each recorded distance; auto1, auto2, sum, cross: normalized intensity
covariances against signed lag; moment_cross: ⟨I1 I2⟩/(⟨I1⟩⟨I2⟩) at lag 0; input and output
spectra; contrast, durations: probability densities; powers: launched 1, 2, arriving 1, 2.

Against distance: power1, power2; second_moment1, second_moment2: ⟨I²⟩/⟨I⟩²; walls_along,
duration_along: walls per ns and mean time between them, counted on the grid that the light is
on there, so that a coarse one misses walls close together.

At the end of the line: wall_width_ps: mean of 2/|dC/dt| over the walls, none of them
taken to be wider than the longest duration kept; contrast_correlation:
normalized autocovariance of the contrast against signed lag; stokes: density on the Poincaré
sphere, shape (bins of S3/S0, bins of azimuth), every moment weighing alike (weighing by power
instead would favour bright moments); stokes_means: ⟨S1⟩, ⟨S2⟩, ⟨S3⟩ over ⟨S0⟩, and
polarization_degree: their length, each first of the launch and then at the demultiplexer;
what chance alone adds to its square is taken off;
local_polarization_degree: mean of the same over running means as long as the wall smoothing;
intensity1, intensity2, intensity_sum: densities over the mean; quadratures: density of real
and imaginary parts of both fields over their expected standard deviation.

Of the four spectra in turn: spectral_rms_ghz and spectral_fwhm_ghz as an analyser shows them,
coherence_time_ps: τc = ∫S²df/(∫S df)² (Goodman, Statistical Optics, ch. 5) of the light itself.
"""
ORDER = {
    "distance": "distance_km",
    **dict.fromkeys((*ALONG, "walls_along", "duration_along"), "distance_km"),
    **dict.fromkeys((*CORRELATIONS, "contrast_correlation"), "lag_ps"),
    **dict.fromkeys(SPECTRA, "offset_ghz"),
    "contrast": "contrast",
    "durations": "duration_ps",
    **dict.fromkeys(INTENSITIES, "relative_intensity"),
    "quadratures": "quadrature",
    "stokes": "sphere_s3, sphere_azimuth_deg",
    "powers": "launched 1, launched 2, arriving 1, arriving 2",
    "stokes_means": "launched, received; S1/S0, S2/S0, S3/S0",
    "polarization_degree": "launched, received",
    **dict.fromkeys(
        ("spectral_rms_ghz", "spectral_fwhm_ghz", "coherence_time_ps"), ", ".join(SPECTRA)
    ),
}
"""Axis or order of the values of every estimate that has more than one."""
TINY = float(np.finfo(np.float64).tiny)
"""Stands for zero under a division whose numerator is zero too."""
SCARCE = 1e-60
"""Stands for no walls under a division whose quotient is not used then."""


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
        self._at = layout.in_blocks

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
        if name in SPECTRA:
            return self._part("spectra", SPECTRA.index(name), self.layout.frequency_bins)
        if name in INTENSITIES:
            return self._part("intensities", INTENSITIES.index(name), INTENSITY_BINS)
        if name in ALONG:
            return self._ratio(lambda means: self._along(means)[ALONG.index(name)])
        match name:
            case "distance":
                return self._blocks.estimate(
                    lambda means: central(self._moments(means)), launch_control(self._launched)
                )
            case "powers" | "contrast" | "quadratures":
                return self._part(name)
            case "stokes":
                value, error = self._part(name)
                return Estimate(value.reshape(SPHERE_BINS), error.reshape(SPHERE_BINS))
            case "stokes_means":
                value, error = self._ratio(self._stokes)
                return Estimate(value.reshape(2, 3), error.reshape(2, 3))
            case "walls_per_ns" | "mean_duration_ps":
                return self._rate("walls", per_ns=name == "walls_per_ns")
            case "walls_along" | "duration_along":
                return self._rate("walls_along", per_ns=name == "walls_along")
            case "wall_width_ps":
                return self._wall_width()
            case "polarization_degree":
                return self._polarization_degree()
            case "spectral_fwhm_ghz":
                return self._half_maximum_widths()
            case _:
                return self._ratio(
                    {
                        "moment_cross": self._moment_cross,
                        "durations": self._durations,
                        "contrast_correlation": self._contrast_correlation,
                        "local_polarization_degree": self._local_polarization,
                        "spectral_rms_ghz": self._rms_widths,
                        "coherence_time_ps": self._coherence_times,
                    }[name]
                )

    def _ratio(self, function: Callable[[Real], Real]) -> Estimate:
        return self._blocks.estimate(function)

    def _part(self, name: str, index: int = 0, length: int | None = None) -> Estimate:
        place = self.layout.in_means[name]
        if length is not None:
            place = slice(place.start + index * length, place.start + (index + 1) * length)
        value, error = self._linear
        return Estimate(value[place], error[place])

    def _moments(self, means: Real) -> Real:
        return means[..., self._at["moments"]].reshape(*means.shape[:-1], self.layout.distances, 5)

    def _along(self, means: Real) -> list[Real]:
        """The quantities of ``ALONG``."""
        m1, m2, m11, m22, _ = np.moveaxis(self._moments(means), -1, 0)
        return [m1, m2, m11 / np.maximum(m1**2, TINY), m22 / np.maximum(m2**2, TINY)]

    def _moment_cross(self, means: Real) -> Real:
        last = self._moments(means)[..., -1, :]
        product = np.maximum(last[..., 0] * last[..., 1], TINY)
        return np.asarray(last[..., 4] / product)[..., None]

    def _correlations(self) -> dict[str, Estimate]:
        n = self.layout.lags

        def curves(means: Real) -> Real:
            last = self._moments(means)[..., -1, :]
            m1, m2 = last[..., 0:1], last[..., 1:2]
            raw = means[..., self._at["correlations"]]
            half1, half2 = raw[..., : n + 1] - m1**2, raw[..., n + 1 : 2 * n + 2] - m2**2
            cross = raw[..., 2 * n + 2 :] - m1 * m2
            auto1, auto2 = _mirrored(half1), _mirrored(half2)
            total = auto1 + auto2 + cross + cross[..., ::-1]
            v1, v2 = np.maximum(half1[..., :1], TINY), np.maximum(half2[..., :1], TINY)
            v_total = np.maximum(total[..., n : n + 1], TINY)
            parts = [auto1 / v1, auto2 / v2, total / v_total, cross / np.sqrt(v1 * v2)]
            return np.concatenate(parts, axis=-1)

        value, error = (np.split(array, 4) for array in self._blocks.estimate(curves))
        return {name: Estimate(v, e) for name, v, e in zip(CORRELATIONS, value, error, strict=True)}

    def _rate(self, name: str, *, per_ns: bool) -> Estimate:
        """Walls per ns, or the mean time between them; infinite where there is none."""
        at, window_ps = self._at[name], self.layout.grid.window_ps
        if per_ns:
            return self._ratio(lambda means: means[..., at] * (1e3 / window_ps))
        seen = np.count_nonzero(self._blocks.sums[:, at], axis=0)
        value, error = self._ratio(lambda means: window_ps / np.maximum(means[..., at], SCARCE))
        return Estimate(np.where(seen > 0, value, np.inf), np.where(seen > 1, error, np.nan))

    def _durations(self, means: Real) -> Real:
        width = self.layout.longest_duration_ps / DURATION_BINS
        count = np.maximum(means[..., self._at["walls"]], TINY)
        return np.asarray(means[..., self._at["durations"]] / (count * width))

    def _wall_width(self) -> Estimate:
        """Nothing where there is no wall."""
        at, sums = self._at["walls"], self._at["wall_widths"]
        seen = np.count_nonzero(self._blocks.sums[:, at])
        value, error = self._ratio(
            lambda means: means[..., sums] / np.maximum(means[..., at], TINY)
        )
        return Estimate(value if seen else value * np.nan, error if seen > 1 else error * np.nan)

    def _contrast_correlation(self, means: Real) -> Real:
        found = means[..., self._at["contrast"]]
        half = found[..., 1:] - found[..., :1] ** 2
        return np.asarray(_mirrored(half) / np.maximum(half[..., :1], TINY))

    def _stokes(self, means: Real) -> Real:
        found = means[..., self._at["stokes"]].reshape(*means.shape[:-1], 2, 4)
        normalized = found[..., 1:] / np.maximum(found[..., :1], TINY)
        return np.asarray(normalized.reshape(*means.shape[:-1], 6))

    def _polarization_degree(self) -> Estimate:
        """Length of the mean Stokes vector, what chance adds to its square taken off.

        The square of a length estimated from parts s_i ± e_i exceeds that of the length by Σe_i²
        on average, and has the variance (2·s·e)² + 2Σe_i⁴ for normal errors, s the length itself.
        Its bars hold the truth in 65 to 71 % of all cases, near zero in 80 % (measured).
        """

        def parts_and_length(means: Real) -> Real:
            stokes = self._stokes(means)
            parts = stokes.reshape(*means.shape[:-1], 2, 3)
            length = np.sqrt(np.sum(parts**2, axis=-1))
            return np.concatenate([stokes, length], axis=-1)

        value, error = self._ratio(parts_and_length)
        length, chance = value[6:], np.sum(error[:6].reshape(2, 3) ** 2, axis=1)
        if not np.isfinite(chance).all():
            return Estimate(length, error[6:])
        squared = np.maximum(length**2 - chance, 0.0)
        fourth = 2.0 * np.sum(error[:6].reshape(2, 3) ** 4, axis=1)
        degree = np.sqrt(squared)
        spread = np.sqrt((2.0 * degree * error[6:]) ** 2 + fourth)
        return Estimate(degree, spread / np.maximum(2.0 * degree, np.sqrt(spread) + TINY))

    def _local_polarization(self, means: Real) -> Real:
        return means[..., self._at["local_polarization"]]

    def _lines(self, means: Real) -> list[Real]:
        """Σp, Σfp, Σf²p and Σp_k p_{k+1} of the four spectra."""
        return list(
            np.moveaxis(means[..., self._at["lines"]].reshape(*means.shape[:-1], 4, 4), -1, 0)
        )

    def _rms_widths(self, means: Real) -> Real:
        total, first, second, _ = self._lines(means)
        total = np.maximum(total, TINY)
        added = (self.layout.analyser_ghz or 0.0) ** 2 / (8.0 * np.log(2.0))
        return np.asarray(np.sqrt(np.maximum(second / total - (first / total) ** 2, 0.0) + added))

    def _coherence_times(self, means: Real) -> Real:
        # Neighbouring lines of noise are independent, so their product has the mean S².
        total, _, _, pairs = self._lines(means)
        return np.asarray(self.layout.grid.window_ps * pairs / np.maximum(total**2, TINY))

    def _half_maximum_widths(self) -> Estimate:
        spacing_ghz = 1e3 / self.layout.grid.window_ps
        spacing_ghz *= self.layout.grid.samples / self.layout.frequency_bins
        found = [
            half_maximum_width(
                self[name],
                spacing_ghz,
                1e3 / time_ps if time_ps > 0.0 else 0.0,
                self.layout.analyser_ghz or 0.0,
            )
            for name, time_ps in zip(SPECTRA, self["coherence_time_ps"].value, strict=True)
        ]
        return Estimate(*(np.concatenate(part) for part in zip(*found, strict=True)))


def _mirrored(half: Real) -> Real:
    """An even curve on signed lags from that on lags ≥ 0."""
    return np.concatenate([half[..., :0:-1], half], axis=-1)
