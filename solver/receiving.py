"""Parameters of the receiver, and of the ensemble that is computed.

Each is defined once, here: the API schema, the page's form, the study file of the command line and
the attributes of the result file are read from these models.
"""

import math
from typing import Literal, Self

from pydantic import model_validator

from solver.quantity import Contradiction, Stage, quantity

Fibres = Literal["frozen", "drawn"]
Precision = Literal["single", "double"]
GridChoice = Literal["given", "automatic"]
FilterShape = Literal["none", "gaussian", "bessel4", "butterworth4"]


class Receiver(Stage):
    """Polarization demultiplexer and square-law detection."""

    extinction_db: float | None = quantity(
        None,
        "Demultiplexer extinction",
        "Power of the unwanted component in each arm; empty for ideal.",
        unit="dB",
        low=-100.0,
        high=-3.0,
    )
    filter: FilterShape = quantity(
        "none",
        "Electrical low-pass",
        "Response of photodiode and digitizer together; none for an ideal receiver.",
    )
    bandwidth_ghz: float = quantity(
        33.0,
        "Bandwidth",
        "Frequency at which the electrical power transfer |H|² is one half.",
        unit="GHz",
        low=0.01,
        high=1000.0,
        when={"filter": ["gaussian", "bessel4", "butterworth4"]},
    )
    digitizer_filter: FilterShape = quantity(
        "none", "Digitizer low-pass", "Response of the digitizer's input, after the photodiode's."
    )
    digitizer_bandwidth_ghz: float = quantity(
        33.0,
        "Digitizer bandwidth",
        "Frequency at which its power transfer |H|² is one half.",
        unit="GHz",
        low=0.01,
        high=1000.0,
        when={"digitizer_filter": ["gaussian", "bessel4", "butterworth4"]},
    )
    responsivity_a_per_w: float = quantity(
        0.8, "Responsivity", "Photocurrent per optical power.", unit="A/W", low=1e-3, high=10.0
    )
    shot_noise: Literal["off", "on"] = quantity(
        "off", "Shot noise", "Shot noise of the photocurrent, before the low-pass."
    )
    thermal_pa_per_sqrt_hz: float = quantity(
        0.0,
        "Thermal noise",
        "Input-referred noise current density of the diode's amplifier, one-sided.",
        unit="pA/√Hz",
        low=0.0,
        high=1e6,
    )
    received_mw: float | None = quantity(
        None,
        "Power on the diodes",
        "Mean power on both photodiodes together, set by an attenuator before them; empty for "
        "what arrives. Fixes how large the receiver's noise is against the signal.",
        unit="mW",
        low=1e-6,
        high=1e3,
    )
    sampling_gsps: float | None = quantity(
        None,
        "Sampling rate",
        "Samples per ns of the digitizer, the nearest power of two of time steps apart; empty for "
        "every time step.",
        unit="GS/s",
        low=0.01,
        high=10_000.0,
    )
    effective_bits: float | None = quantity(
        None,
        "Effective bits",
        "Effective number of bits over a full scale of eight times the mean power; "
        "empty for no quantization.",
        low=1.0,
        high=24.0,
    )
    noise_correction: Literal["off", "on"] = quantity(
        "off",
        "Noise correction",
        "Take the known variance of the receiver's noise off the variances of the intensities.",
    )
    analyser_ghz: float | None = quantity(
        None,
        "Analyser resolution",
        "Resolution bandwidth of the optical spectrum analyser, full width at half maximum; empty "
        "for the grid's own.",
        unit="GHz",
        low=0.01,
        high=1000.0,
    )

    def decimation(self, time_step_ps: float) -> int:
        """Time steps from one sample of the digitizer to the next, a power of two."""
        if self.sampling_gsps is None:
            return 1
        return 1 << max(0, round(math.log2(1e3 / self.sampling_gsps / time_step_ps)))


class Ensemble(Stage):
    """Grid, draws and estimators."""

    grid: GridChoice = quantity(
        "given",
        "Grid",
        "Window and samples as given, or chosen for the whole study from its power, source, "
        "dispersion, delays and receiver.",
    )
    window_ps: float = quantity(
        8192.0, "Window", "Periodic time window.", unit="ps", low=1.0, high=1e7
    )
    samples: int = quantity(
        4096,
        "Samples",
        "Samples in the window, a power of two.",
        low=256,
        high=2**22,
    )
    standard_error_target: float = quantity(
        0.01,
        "Standard error target",
        "Realizations are added to each point until the standard error of C12(0) is this small.",
        low=1e-5,
        high=0.5,
    )
    min_realizations: int = quantity(
        16,
        "Fewest realizations",
        "Realizations before the target is looked at.",
        low=4,
        high=100_000,
    )
    max_realizations: int = quantity(
        256,
        "Most realizations",
        "Cap for each point; a point that stops here says so.",
        low=4,
        high=1_000_000,
    )
    seed: int = quantity(20, "Seed", "Fixes every random draw.", low=0, high=2**53 - 1)
    precision: Precision = quantity(
        "single", "Precision", "Arithmetic of the ensemble; single is enough for statistics."
    )
    field_tolerance: float = quantity(
        0.05,
        "Field tolerance",
        "Relative L2 error of the field allowed in the ensemble. Steps are also short enough to "
        "keep the bias of C12(0) under a tenth of the standard error target.",
        low=1e-9,
        high=0.3,
    )
    fibres: Fibres = quantity(
        "frozen",
        "Fibres",
        "With polarization-mode dispersion: one frozen fibre for all realizations, or another one "
        "drawn for each. The closed form then is the mean over up to 64 of them.",
    )
    distances: int = quantity(
        16,
        "Distances",
        "Equal parts of the line at whose ends C12(0) is recorded.",
        low=1,
        high=128,
    )
    max_lag_ps: float = quantity(
        400.0, "Longest lag", "Correlations are kept up to this lag.", unit="ps", low=1.0, high=1e5
    )
    wall_smoothing_ps: float = quantity(
        8.0,
        "Wall smoothing",
        "Width of the running mean of S0 and S1 before walls are counted as sign changes.",
        unit="ps",
        low=0.0,
        high=1e4,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.samples & (self.samples - 1):
            near = 2 ** round(math.log2(self.samples))
            raise Contradiction("samples", f"samples must be a power of two: {near} is the nearest")
        if self.max_realizations < self.min_realizations:
            raise Contradiction(
                "max_realizations",
                f"max_realizations must be at least min_realizations, {self.min_realizations}",
            )
        if self.grid == "given" and self.max_lag_ps > self.window_ps / 2:
            raise Contradiction(
                "max_lag_ps",
                f"max_lag_ps must be at most half the window, {self.window_ps / 2:g} ps",
            )
        if self.precision == "single" and self.field_tolerance < 1e-3:
            raise Contradiction(
                "field_tolerance",
                "single precision cannot resolve a field tolerance below 1e-3: "
                "choose double or loosen the tolerance",
            )
        return self

    @property
    def time_step_ps(self) -> float:
        """Time between samples, ps."""
        return self.window_ps / self.samples
