"""Time and frequency axes, and the one Fourier convention of the project.

spectrum = fft(field): a field e^{+iωt} sits at +ω, and ∂/∂t becomes +iω. The equations are
written for an optical carrier e^{−iω0 t}, so a baseband ω is an optical frequency *below* the
carrier by ω/2π; :attr:`Grid.offset_ghz` is the axis to put under a plotted spectrum.
"""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

Real = npt.NDArray[np.floating[Any]]
Complex = npt.NDArray[np.complex128]
Field = npt.NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class Grid:
    """A periodic time window of ``samples`` points, ``time_step_ps`` apart."""

    samples: int
    time_step_ps: float

    @property
    def window_ps(self) -> float:
        """Length of the window, ps."""
        return self.samples * self.time_step_ps

    @cached_property
    def time_ps(self) -> Real:
        """Time of each sample, ps; shape (samples,)."""
        return np.arange(self.samples) * self.time_step_ps

    @cached_property
    def frequency_thz(self) -> Real:
        """Baseband frequency in FFT order, THz; shape (samples,)."""
        return np.fft.fftfreq(self.samples, self.time_step_ps)

    @cached_property
    def omega(self) -> Real:
        """Baseband angular frequency in FFT order, rad/ps; shape (samples,)."""
        return 2.0 * np.pi * self.frequency_thz

    @cached_property
    def offset_ghz(self) -> Real:
        """Optical frequency offset from the carrier, ascending, GHz; shape (samples,)."""
        return np.sort(-1e3 * self.frequency_thz)

    def by_offset(self, spectrum: Real) -> Real:
        """A power spectrum in FFT order, last axis, rearranged onto :attr:`offset_ghz`."""
        half = self.samples // 2
        return np.concatenate([spectrum[..., half - 1 :: -1], spectrum[..., : half - 1 : -1]], -1)
