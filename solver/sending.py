"""Parameters of what is sent into the line: source, shaper, relation, booster, launch.

Each is defined once, here: the API schema, the page's form, the study file of the command line and
the attributes of the result file are read from these models.
"""

import hashlib
import math
from itertools import pairwise
from typing import Literal, Self

from pydantic import model_validator

from solver.quantity import Contradiction, Stage, quantity

SpectrumShape = Literal["gaussian", "super_gaussian", "rectangular", "sech2", "measured"]
RelationKind = Literal["independent", "derivative", "hilbert", "delayed", "partial", "identical"]


class MeasuredSpectrum(Stage):
    """A power spectrum from an analyser: straight lines between points, nothing beyond them."""

    name: str = quantity("", "Name", "What was measured, for people.", max_length=200)
    offset_ghz: tuple[float, ...] = quantity(
        ...,
        "Offsets",
        "Optical frequency offset of each point from the carrier, ascending.",
        unit="GHz",
        min_length=3,
        max_length=4096,
    )
    density: tuple[float, ...] = quantity(
        ...,
        "Densities",
        "Power per frequency at each point, linear, in any unit.",
        min_length=3,
        max_length=4096,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if len(self.offset_ghz) != len(self.density):
            raise Contradiction(
                "density",
                f"{len(self.offset_ghz)} offsets but {len(self.density)} densities: give as many",
            )
        for index, (here, after) in enumerate(pairwise(self.offset_ghz), 1):
            if after <= here:
                raise Contradiction(
                    f"offset_ghz.{index}",
                    f"offsets must ascend, but {after:g} follows {here:g} GHz",
                )
        for index, density in enumerate(self.density):
            if density < 0.0:
                raise Contradiction(
                    f"density.{index}", f"a density cannot be negative, as {density:g} is: use 0"
                )
        if not any(self.density):
            raise Contradiction("density", "the spectrum holds no power")
        return self

    @property
    def label(self) -> str:
        """A line that tells this spectrum from others: name, points, width, a digest."""
        digest = hashlib.sha256(repr((self.offset_ghz, self.density)).encode()).hexdigest()[:6]
        name = self.name or "spectrum"
        return f"{name}: {len(self.density)} points, {self.width_ghz:.4g} GHz ({digest})"

    @property
    def span_ghz(self) -> float:
        """Largest distance of any power from the carrier, GHz."""
        lit = [abs(f) for f, s in zip(self.offset_ghz, self.density, strict=True) if s > 0.0]
        return max(lit)

    @property
    def width_ghz(self) -> float:
        """Full width at half maximum of a Gaussian of the same coherence time, GHz.

        Coherence time ∫S²/(∫S)² (Goodman, Statistical Optics, ch. 5), √(2 ln2/π) over the width
        for a Gaussian.
        """
        power = squared = 0.0
        # Of the highest, since squares of densities in some units leave the range of numbers.
        highest = max(self.density)
        points = zip(self.offset_ghz, (s / highest for s in self.density), strict=True)
        for (f, here), (g, after) in pairwise(points):
            power += (g - f) * (here + after) / 2.0
            squared += (g - f) * (here * here + here * after + after * after) / 3.0
        return math.sqrt(2.0 * math.log(2.0) / math.pi) * power**2 / squared

    def half_band_ghz(self, share: float) -> float:
        """Distance from the carrier within which a share of the power lies, to a point, GHz."""
        offset, density = self.offset_ghz, self.density
        edges = [offset[0], *((f + g) / 2.0 for f, g in pairwise(offset)), offset[-1]]
        held = sorted(
            (abs(f), s * (right - left))
            for f, s, (left, right) in zip(offset, density, pairwise(edges), strict=True)
        )
        wanted = share * sum(power for _, power in held)
        within = 0.0
        for distance, power in held:
            within += power
            if within >= wanted:
                return distance
        return held[-1][0]


class Source(Stage):
    """Thermal-like light: circular complex Gaussian noise under a power spectrum."""

    shape: SpectrumShape = quantity(
        "gaussian", "Spectrum", "Shape of the power spectrum of the source."
    )
    width_ghz: float = quantity(
        24.0,
        "Width",
        "Full width at half maximum of the power spectrum.",
        unit="GHz",
        low=0.1,
        high=5000.0,
        when={"shape": ["gaussian", "super_gaussian", "rectangular", "sech2"]},
    )
    order: int = quantity(
        4,
        "Order",
        "Order m of the super-Gaussian exp(−|f/f0|^2m); 1 is a Gaussian.",
        low=1,
        high=20,
        when={"shape": ["super_gaussian"]},
    )
    wavelength_nm: float = quantity(
        1552.0,
        "Wavelength",
        "Centre wavelength; converts dispersion D into β2.",
        unit="nm",
        low=400.0,
        high=2500.0,
    )
    power_mw: float = quantity(
        1.0,
        "Power",
        "Mean power of both components together before the shaper; matters with a booster only, "
        "whose noise it is held against.",
        unit="mW",
        low=1e-9,
        high=1e5,
    )
    measured: MeasuredSpectrum | None = quantity(
        None,
        "Measured spectrum",
        "The points of a measured spectrum, for the shape measured.",
        when={"shape": ["measured"]},
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if (self.shape == "measured") != (self.measured is not None):
            raise Contradiction(
                "measured",
                "shape measured needs a measured spectrum: import one or choose another shape"
                if self.measured is None
                else "a measured spectrum applies to shape measured only: choose it or remove the "
                "spectrum",
            )
        return self

    @property
    def full_width_ghz(self) -> float:
        """Width that a grid must hold twice over: at half maximum, or of all that is lit."""
        return self.width_ghz if self.measured is None else self.measured.span_ghz

    @property
    def coherence_width_ghz(self) -> float:
        """Full width at half maximum that goes with the coherence time, GHz."""
        return self.width_ghz if self.measured is None else self.measured.width_ghz

    @property
    def widest_notch_ghz(self) -> float:
        """Full width of a band about the carrier outside which enough light is left, GHz."""
        if self.measured is not None:
            return 2.0 * self.measured.half_band_ghz(0.99)
        return 0.9 * self.width_ghz if self.shape == "rectangular" else self.width_ghz


class Shaper(Stage):
    """The spectral shaper that makes component 2 from component 1, as far from ideal as it is."""

    resolution_ghz: float = quantity(
        0.0,
        "Resolution",
        "Full width at half maximum of the Gaussian with which the shaper smooths the amplitude "
        "responses it is asked for; 0 is ideal.",
        unit="GHz",
        low=0.0,
        high=1000.0,
    )
    extinction_db: float | None = quantity(
        None,
        "Extinction",
        "Lowest power transmission it reaches against its highest; empty for none.",
        unit="dB",
        low=-100.0,
        high=-3.0,
    )
    insertion_loss_db: float = quantity(
        0.0,
        "Insertion loss",
        "Loss in the pass-band; lowers the power that reaches the booster.",
        unit="dB",
        low=0.0,
        high=60.0,
    )


class Relation(Stage):
    """How component 2 is made from component 1."""

    kind: RelationKind = quantity(
        "independent",
        "Input relation",
        "Component 2 is an independent draw, or component 1 through the named filter.",
    )
    range_ghz: float | None = quantity(
        None,
        "Range of the slope",
        "Distance from the carrier at which the derivative filter's slope ends and its amplitude "
        "stays; empty for no end.",
        unit="GHz",
        low=0.1,
        high=5000.0,
        when={"kind": ["derivative"]},
    )
    notch_ghz: float = quantity(
        0.0,
        "Notch",
        "Full width of the blocked band around the carrier, where no real shaper makes the "
        "ideal sign step.",
        unit="GHz",
        low=0.0,
        high=1000.0,
        when={"kind": ["hilbert"]},
    )
    delay_ps: float = quantity(
        50.0,
        "Delay",
        "Delay of component 2 against component 1.",
        unit="ps",
        low=-1e5,
        high=1e5,
        when={"kind": ["delayed"]},
    )
    correlation: float = quantity(
        0.5,
        "Shared power",
        "Fraction ρ of component 2's power that repeats component 1; the rest is independent.",
        low=0.0,
        high=1.0,
        when={"kind": ["partial"]},
    )


class Launch(Stage):
    """Powers and imperfections at the fibre input."""

    total_power_mw: float = quantity(
        200.0,
        "Total power",
        "Mean launch power of both components together.",
        unit="mW",
        low=1e-6,
        high=1e5,
    )
    share_1: float = quantity(
        0.5,
        "Share of component 1",
        "Fraction of the total power launched into component 1.",
        low=0.0,
        high=1.0,
    )
    skew_ps: float = quantity(
        0.0,
        "Skew",
        "Extra delay of component 2 at the input, whatever the relation.",
        unit="ps",
        low=-1e5,
        high=1e5,
    )
    crosstalk_db: float | None = quantity(
        None,
        "Crosstalk",
        "Power leaking from each component into the other at the launch; empty for none.",
        unit="dB",
        low=-100.0,
        high=-3.0,
    )
    pdl_db: float = quantity(
        0.0,
        "Polarization-dependent loss",
        "Loss of component 2 over that of component 1 between the stated powers and the fibre.",
        unit="dB",
        low=-30.0,
        high=30.0,
    )


_LEAST_SATURATING_DB = 3.1


class Amplifier(Stage):
    """An optical amplifier; without a noise figure there is none."""

    noise_figure_db: float | None = quantity(
        None,
        "Noise figure",
        "Makes spontaneous emission in both components; empty for no amplifier.",
        unit="dB",
        low=3.0,
        high=30.0,
    )
    gain_db: float = quantity(
        20.0, "Small-signal gain", "Gain without saturation.", unit="dB", low=0.1, high=60.0
    )
    saturation_mw: float | None = quantity(
        None,
        "Saturation power",
        "Output power that takes 3 dB off the gain; empty for none.",
        unit="mW",
        low=1e-3,
        high=1e6,
    )
    bandpass_ghz: float | None = quantity(
        None,
        "Optical band-pass",
        "Full width at half maximum of a Gaussian power transmission after the amplifier; empty "
        "for none. What a booster sends into the fibre has to be limited by one.",
        unit="GHz",
        low=1.0,
        high=10_000.0,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.saturation_mw is not None and self.gain_db < _LEAST_SATURATING_DB:
            raise Contradiction(
                "gain_db",
                "a gain that saturation takes 3 dB off must be larger than that: use "
                f"{_LEAST_SATURATING_DB:g} dB or more, or leave the saturation power empty",
            )
        return self
