"""The receiver at work: what it sees of realizations, its noise drawn.

The noise of a realization is its own, the same at every distance at which the field is looked
at and for every variant; the receiver is set up for the light at the end of the line.
"""

from functools import cached_property

import numpy as np
from scipy import fft

from solver.amplifier import bandpass
from solver.experiment import Experiment, Receiver
from solver.features import domain_features, moments
from solver.grid import Field, Grid, Real
from solver.kernels import field_walls, intensity_moments, spectral_moments
from solver.layout import Layout
from solver.receiver import (
    amplitude_transfer,
    demultiplexed,
    demultiplexing,
    is_filtered,
    is_noisy,
    noise_of,
    noise_variance,
    noisy,
)
from solver.source import DIODES, PREAMPLIFIER, draw, stream
from solver.theory import emission_w_per_thz_at_input, received_powers_w
from solver.transforms import COMPLEX, resampled

THERMAL = -1
"""Stands for the spectra of what the diodes draw."""


class Sight:
    """A batch of fields at one place, and what all who look at it have to do once.

    field: √W, (realizations, 2, samples), any time step of the window; samples: of its own time
    step or of the one asked for, whichever is finer, it is looked at on.
    """

    def __init__(self, field: Field, asked: Grid) -> None:
        self.field = field
        samples = max(asked.samples, field.shape[2])
        self.grid = Grid(samples, asked.window_ps / samples)
        self._spectra: dict[float | None, np.ndarray] = {}

    @cached_property
    def resampled(self) -> Field:
        """The fields on the grid they are looked at on."""
        return resampled(self.field, self.grid.samples)

    @cached_property
    def spectrum(self) -> Field:
        """Their spectra."""
        return np.asarray(fft.fft(self.resampled, norm="forward"))

    def power_spectrum(self, receiver: Receiver) -> np.ndarray:
        """Spectra of the powers on the diodes of a receiver, W, frequencies ≥ 0."""
        extinction = receiver.extinction_db
        if extinction not in self._spectra:
            power = demultiplexed(self.resampled, receiver)
            self._spectra[extinction] = np.asarray(fft.rfft(power, norm="forward"))
        return self._spectra[extinction]


class Detection:
    """Preamplifier and receiver of an experiment."""

    def __init__(self, experiment: Experiment) -> None:
        self.experiment = experiment
        self.receiver = experiment.receiver
        ensemble = experiment.ensemble
        self.asked = Grid(ensemble.samples, ensemble.time_step_ps)
        self.layout = Layout.of(ensemble, self.receiver)
        self.received_w = received_powers_w(experiment, self.asked)
        self.mean_w = demultiplexing(self.receiver) @ self.received_w
        self._emission_w_per_thz = emission_w_per_thz_at_input(experiment, self.asked)
        receiver = self.receiver
        self._draws_current = receiver.shot_noise == "on" or receiver.thermal_pa_per_sqrt_hz > 0.0
        self._optical = self._emission_w_per_thz > 0.0 or bool(experiment.preamplifier.bandpass_ghz)
        self._plain = not (
            self._optical
            or is_noisy(receiver)
            or is_filtered(receiver)
            or receiver.sampling_gsps is not None
        )
        # What is linear in the powers is worked out from their spectra, which others need too.
        self._linear = not (
            self._plain
            or receiver.shot_noise == "on"
            or receiver.effective_bits is not None
            or receiver.decimation(self.asked.time_step_ps) > 1
        )
        self._passed: dict[int, tuple[np.ndarray, Real]] = {}
        self._drawn: dict[tuple[range, int, int], np.ndarray] = {}

    @property
    def reads_phases(self) -> bool:
        """Whether what is detected depends on the phases of a field, not on its powers only."""
        return self._optical

    def sight(self, field: Field) -> Sight:
        """Fields, for every receiver of the same window and samples to look at."""
        return Sight(field, self.asked)

    def moments(self, sight: Sight, realizations: range) -> Real:
        """Time means of I1, I2, I1², I2², I1·I2 as detected, shape (realizations, 5).

        Without noise or filter they are taken on whatever grid the field is on, since time means
        of unfiltered intensities are unbiased on any that holds it.
        """
        if self._plain and self.receiver.extinction_db is None:
            return np.asarray(intensity_moments(sight.field))
        if self._linear:
            return self._spectral_moments(sight, self._spectrum(sight, realizations))
        return self._moments(self._seen(sight, realizations))

    def along(self, sight: Sight, realizations: range) -> tuple[Real, Real]:
        """The same moments, and the number of walls, shape (realizations,).

        Walls are counted on whatever grid the intensities are on.
        """
        if self._plain and self.receiver.extinction_db is None:
            field = sight.field
            step_ps = self.asked.window_ps / field.shape[2]
            width = max(1, round(self.layout.wall_smoothing_ps / step_ps))
            return np.asarray(intensity_moments(field)), np.asarray(field_walls(field, width))
        if self._linear:
            spectrum = self._spectrum(sight, realizations)
            found = self._spectral_moments(sight, spectrum)
            amplitude = self._transfer(sight.grid)[0].astype(spectrum.dtype)
            seen = np.asarray(fft.irfft(spectrum * amplitude, sight.grid.samples, norm="forward"))
        else:
            seen = self._seen(sight, realizations)
            found = self._moments(seen)
        grid = Grid(seen.shape[2], self.asked.window_ps / seen.shape[2])
        return found, domain_features(seen, grid, self.layout)[0][:, 0]

    def _spectrum(self, sight: Sight, realizations: range) -> np.ndarray:
        """Spectra of the diodes' currents before the low-pass, W at the demultiplexer."""
        if self._optical:
            power = demultiplexed(self._received(sight, realizations), self.receiver)
            spectrum = np.asarray(fft.rfft(power, norm="forward"))
        else:
            spectrum = sight.power_spectrum(self.receiver)
        if self._draws_current:
            noise = noise_of(self.receiver, self.mean_w, sight.grid)
            drawn = self._kept(realizations, sight.grid, THERMAL)
            spectrum = spectrum + drawn.real.dtype.type(np.sqrt(noise.thermal_w2)) * drawn
        return spectrum

    def _spectral_moments(self, sight: Sight, spectrum: np.ndarray) -> Real:
        """Moments behind the low-pass from spectra before it (Parseval)."""
        found = np.asarray(spectral_moments(spectrum, self._transfer(sight.grid)[1]))
        found[:, 2:4] -= self.known_noise_w2[:, 0]
        return found

    def _transfer(self, grid: Grid) -> tuple[np.ndarray, Real]:
        """Amplitude transfer at frequencies ≥ 0; power transfer, that of ±f together."""
        if grid.samples not in self._passed:
            frequency_ghz = np.fft.rfftfreq(grid.samples, grid.time_step_ps) * 1e3
            amplitude = amplitude_transfer(self.receiver, frequency_ghz)
            both = 2.0 * np.abs(amplitude) ** 2
            both[[0, -1]] *= 0.5  # these two stand for themselves alone
            self._passed[grid.samples] = amplitude, both
        return self._passed[grid.samples]

    def _seen(self, sight: Sight, realizations: range) -> Real:
        if self._plain:
            return demultiplexed(sight.field, self.receiver)
        return self.detected(self._received(sight, realizations), realizations)

    def _moments(self, seen: Real) -> Real:
        found = moments(seen)
        found[:, 2:4] -= self.known_noise_w2[:, 0]
        return found

    def detected(self, received: Field, realizations: range) -> Real:
        """Detected intensities, W at the demultiplexer, one for each sample of the digitizer.

        received: what :meth:`received` makes of the field at the end of the line.
        """
        grid = Grid(received.shape[2], self.asked.window_ps / received.shape[2])
        power = demultiplexed(received, self.receiver)
        if self._plain:
            return power
        noise = noise_of(self.receiver, self.mean_w, grid)
        draws = None
        if self._draws_current:
            draws = self._kept(realizations, grid, DIODES).astype(power.dtype)
        seen = noisy(power, self.receiver, noise, grid, draws)
        return seen[..., :: self.receiver.decimation(grid.time_step_ps)]

    def received(self, field: Field, realizations: range) -> Field:
        """Fields at the demultiplexer, √W, on the time step asked for or a finer one."""
        return self._received(self.sight(field), realizations)

    def _received(self, sight: Sight, realizations: range) -> Field:
        if not self._optical:
            return sight.resampled
        spectrum = sight.spectrum
        if self._emission_w_per_thz:
            emitted = np.sqrt(self._emission_w_per_thz / sight.grid.window_ps)
            spectrum = spectrum + emitted * self._kept(realizations, sight.grid, PREAMPLIFIER)
        passed = bandpass(self.experiment.preamplifier, sight.grid)
        return np.asarray(fft.ifft(spectrum * passed, norm="forward"))

    @cached_property
    def known_noise_w2(self) -> Real:
        """Autocovariance of the receiver's noise that is to be taken off, W².

        Shape (2, samples of the digitizer), lags in FFT order; zero without noise correction.
        """
        step = self.receiver.decimation(self.asked.time_step_ps)
        if self.receiver.noise_correction == "off":
            return np.zeros((2, self.asked.samples // step))
        noise = noise_of(self.receiver, self.mean_w, self.asked)
        return noise_variance(self.receiver, noise, self.mean_w, self.asked)[:, ::step]

    def _kept(self, realizations: range, grid: Grid, what: int) -> np.ndarray:
        """Draws of a batch, which is looked at again at every distance."""
        key = realizations, grid.samples, what
        if key not in self._drawn:
            if len(self._drawn) > 2:
                self._drawn.clear()
            seed = self.experiment.ensemble.seed
            if what == PREAMPLIFIER:
                self._drawn[key] = draw(seed, realizations, grid, what)
            elif what == THERMAL:
                drawn = self._kept(realizations, grid, DIODES)
                precision = COMPLEX[self.experiment.ensemble.precision]
                self._drawn[key] = fft.rfft(drawn, norm="forward").astype(precision)
            else:
                self._drawn[key] = np.stack(
                    [
                        stream(seed, index, what).standard_normal((2, grid.samples))
                        for index in realizations
                    ]
                )
        return self._drawn[key]
