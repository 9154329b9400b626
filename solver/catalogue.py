"""Kinds of fibre as data: what to put into a span, from where to where, and on whose word.

Figures of a kind are typical ones, to plan with; a fibre on the shelf has a data sheet. Limits
of the ITU-T Recommendations are quoted from memory. A positive D is anomalous dispersion, in
which orthogonal waves do not segregate: :data:`CLASSES` says where each class has which sign.
"""

from dataclasses import dataclass
from typing import Any, Literal

from solver.quantity import Contradiction
from solver.span import Coupling, Span
from solver.units import beta3_from_slope

Sign = Literal["normal", "either", "anomalous"]


@dataclass(frozen=True)
class Limits:
    """Between two wavelengths, straight lines between which a class allows D, ps/(nm·km)."""

    from_nm: float
    to_nm: float
    lowest: tuple[float, float]
    highest: tuple[float, float]

    def at(self, wavelength_nm: float) -> tuple[float, float]:
        """(lowest, highest) D at a wavelength, ps/(nm·km)."""
        part = (wavelength_nm - self.from_nm) / (self.to_nm - self.from_nm)
        low, high = (
            (1.0 - part) * ends[0] + part * ends[1] for ends in (self.lowest, self.highest)
        )
        return low, high


@dataclass(frozen=True)
class FibreClass:
    """What a Recommendation says of the sign of the dispersion.

    Every fibre of the class is normal below ``normal_below_nm`` and anomalous above
    ``anomalous_above_nm``; None where the class leaves the sign to the maker.
    """

    key: str
    title: str
    source: str
    normal_below_nm: float | None
    anomalous_above_nm: float | None
    limits: tuple[Limits, ...] = ()

    def sign_at(self, wavelength_nm: float) -> Sign:
        """What the dispersion is at a wavelength."""
        if self.normal_below_nm is not None and wavelength_nm < self.normal_below_nm:
            return "normal"
        if self.anomalous_above_nm is not None and wavelength_nm > self.anomalous_above_nm:
            return "anomalous"
        return "either"

    def limits_at(self, wavelength_nm: float) -> tuple[float, float] | None:
        """(lowest, highest) D allowed, ps/(nm·km); None where the class sets no limits."""
        for limits in self.limits:
            if limits.from_nm <= wavelength_nm <= limits.to_nm:
                return limits.at(wavelength_nm)
        return None

    def advice(self, wavelength_nm: float) -> str:
        """A sentence on the sign of the dispersion at a wavelength, and where it is normal."""
        sign = self.sign_at(wavelength_nm)
        here = f"{self.key} at {wavelength_nm:g} nm: "
        if sign == "normal":
            return f"{here}normal"
        below = self.normal_below_nm
        elsewhere = f"; surely normal below {below:g} nm" if below is not None else ""
        if sign == "either":
            return f"{here}of either sign, see the data sheet{elsewhere}"
        return f"{here}anomalous{elsewhere}"


def _level(from_nm: float, to_nm: float, largest: float) -> tuple[Limits, ...]:
    return (Limits(from_nm, to_nm, (-largest, -largest), (largest, largest)),)


def _curves(
    lowest: tuple[float, float, float], highest: tuple[float, float, float]
) -> tuple[Limits, ...]:
    """Limits given at 1460, 1550 and 1625 nm."""
    return (
        Limits(1460.0, 1550.0, lowest[:2], highest[:2]),
        Limits(1550.0, 1625.0, lowest[1:], highest[1:]),
    )


CLASSES: tuple[FibreClass, ...] = (
    FibreClass(
        "G.652", "Standard single-mode",
        "ITU-T G.652: zero dispersion between 1300 and 1324 nm",
        1300.0, 1324.0,
    ),
    FibreClass(
        "G.653.A", "Dispersion-shifted",
        "ITU-T G.653, table 1: |D| up to 3.5 ps/(nm·km) from 1525 to 1575 nm, zero between 1500 "
        "and 1600 nm, slope there up to 0.085 ps/(nm²·km)",
        1500.0, 1600.0, _level(1525.0, 1575.0, 3.5),
    ),
    FibreClass(
        "G.654", "Cut-off shifted",
        "ITU-T G.654: zero dispersion near 1300 nm",
        1250.0, 1350.0,
    ),
    FibreClass(
        "G.655.A", "Non-zero dispersion-shifted",
        "ITU-T G.655 (2003), table 1: |D| from 0.1 to 6 ps/(nm·km) from 1530 to 1565 nm, of "
        "either sign",
        None, None, _level(1530.0, 1565.0, 6.0),
    ),
    FibreClass(
        "G.655.B", "Non-zero dispersion-shifted",
        "ITU-T G.655 (2003), table 2: |D| from 1 to 10 ps/(nm·km) from 1530 to 1565 nm, of "
        "either sign",
        None, None, _level(1530.0, 1565.0, 10.0),
    ),
    FibreClass(
        "G.655.C", "Non-zero dispersion-shifted",
        "ITU-T G.655 (2009), table 1: |D| from 1 to 10 ps/(nm·km) from 1530 to 1565 nm, of "
        "either sign",
        None, None, _level(1530.0, 1565.0, 10.0),
    ),
    FibreClass(
        "G.655.D", "Non-zero dispersion-shifted, small positive dispersion",
        "ITU-T G.655 (2009), table 2: D from 2.80 to 6.20 ps/(nm·km) at 1550 nm",
        None, 1514.0, _curves((-4.20, 2.80, 5.77), (3.29, 6.20, 11.26)),
    ),
    FibreClass(
        "G.655.E", "Non-zero dispersion-shifted, medium positive dispersion",
        "ITU-T G.655 (2009), table 3: D from 6.06 to 9.31 ps/(nm·km) at 1550 nm",
        None, 1460.0, _curves((0.64, 6.06, 9.36), (4.66, 9.31, 13.43)),
    ),
    FibreClass(
        "G.656", "Wideband non-zero dispersion",
        "ITU-T G.656: D positive from 1460 to 1625 nm, from 3.60 to 9.28 ps/(nm·km) at 1550 nm",
        None, 1460.0, _curves((1.00, 3.60, 4.58), (4.60, 9.28, 14.00)),
    ),
    FibreClass(
        "G.657", "Bend-insensitive",
        "ITU-T G.657: zero dispersion between 1250 and 1350 nm, category A as G.652",
        1250.0, 1350.0,
    ),
)  # fmt: skip

MEMORY = "limits quoted from memory"
PRACTICE = "common practice"


@dataclass(frozen=True)
class Kind:
    """One kind of fibre: typical figures at one wavelength, good between two others.

    sources: where the figures come from, by parameter of the span.
    """

    key: str
    title: str
    group: str
    wavelength_nm: float
    range_nm: tuple[float, float]
    dispersion_ps_per_nm_km: float
    slope_ps_per_nm2_km: float
    loss_db_per_km: float
    gamma_per_w_km: float
    sources: dict[str, str]
    note: str = ""
    pmd_ps_per_sqrt_km: float = 0.0
    coupling: Coupling = "manakov"
    delay_ps_per_km: float = 0.0

    def dispersion_at(self, wavelength_nm: float) -> float:
        """D at a wavelength, ps/(nm·km), by its slope."""
        away_nm = wavelength_nm - self.wavelength_nm
        return self.dispersion_ps_per_nm_km + self.slope_ps_per_nm2_km * away_nm

    def fields(self, wavelength_nm: float | None = None) -> dict[str, Any]:
        """Parameters of a span of this kind, its length apart, for a carrier.

        Raises Contradiction where the kind's figures do not hold or are not normal, with the
        nearest wavelength at which they are.
        """
        carrier_nm = self.wavelength_nm if wavelength_nm is None else wavelength_nm
        low, high = self.range_nm
        if not low <= carrier_nm <= high:
            raise Contradiction(
                "source.wavelength_nm",
                f"the figures of {self.title} hold from {low:g} to {high:g} nm, not at "
                f"{carrier_nm:g} nm: use {min(max(carrier_nm, low), high):g} nm, or another kind",
            )
        dispersion = self.dispersion_at(carrier_nm)
        given: dict[str, Any] = {
            "dispersion_ps_per_nm_km": round(dispersion, 6),
            "beta3_ps3_per_km": round(
                beta3_from_slope(dispersion, self.slope_ps_per_nm2_km, carrier_nm), 6
            ),
            "loss_db_per_km": self.loss_db_per_km,
            "gamma_per_w_km": self.gamma_per_w_km,
            "coupling": self.coupling,
            "pmd_ps_per_sqrt_km": self.pmd_ps_per_sqrt_km,
            "delay_ps_per_km": self.delay_ps_per_km,
        }
        return given

    def span(self, length_km: float, wavelength_nm: float | None = None) -> Span:
        """A span of this kind for a carrier; raises as :meth:`fields` does."""
        return Span(length_km=length_km, **self.fields(wavelength_nm))

    @property
    def source(self) -> str:
        """Where the figures come from, in one line."""
        told: dict[str, list[str]] = {}
        for name, source in self.sources.items():
            told.setdefault(source, []).append(name)
        return "; ".join(f"{', '.join(names)}: {source}" for source, names in told.items())


_KERR = "2πn2/(λA), n2 = 2.6·10⁻²⁰ m²/W, effective area"
_SILICA = "silica (Malitson, J. Opt. Soc. Am. 55, 1965) and a small part of the waveguide"

KINDS: tuple[Kind, ...] = (
    Kind(
        "g653-normal", "G.653.A, zero dispersion at 1575 nm", "ITU-T classes, where normal",
        1550.0, (1525.0, 1570.0), -1.75, 0.07, 0.22, 2.1,
        {
            "D, slope": "ITU-T G.653 allows zero dispersion between 1500 and 1600 nm, "
            f"0.085 ps/(nm²·km) at most; {MEMORY}",
            "loss": f"{PRACTICE}; ITU-T G.653 allows 0.35 dB/km",
            "γ": f"{_KERR} 50 µm²",
            "PMD": f"{PRACTICE}; ITU-T G.653.A allows 0.5 ps/√km",
        },
        "Dispersion is so small that its slope matters; a fibre of this class whose zero lies "
        "below the carrier is anomalous.",
        pmd_ps_per_sqrt_km=0.1,
    ),
    Kind(
        "g655a-negative", "G.655.A, negative dispersion", "ITU-T classes, where normal",
        1550.0, (1530.0, 1565.0), -2.5, 0.07, 0.22, 1.9,
        {
            "D": f"ITU-T G.655 (2003), table 1: 0.1 to 6 ps/(nm·km) of either sign; {MEMORY}",
            "slope": PRACTICE,
            "loss": f"{PRACTICE}; ITU-T G.655 allows 0.35 dB/km",
            "γ": f"{_KERR} 55 µm²",
            "PMD": f"{PRACTICE}; ITU-T G.655.A allows 0.5 ps/√km",
        },
        pmd_ps_per_sqrt_km=0.1,
    ),
    Kind(
        "g655c-negative", "G.655.C, negative dispersion", "ITU-T classes, where normal",
        1550.0, (1530.0, 1565.0), -5.0, 0.06, 0.22, 1.9,
        {
            "D": f"ITU-T G.655 (2009), table 1: 1 to 10 ps/(nm·km) of either sign; {MEMORY}",
            "slope": PRACTICE,
            "loss": f"{PRACTICE}; ITU-T G.655 allows 0.35 dB/km",
            "γ": f"{_KERR} 55 µm²",
            "PMD": f"{PRACTICE}; ITU-T G.655.C allows 0.20 ps/√km",
        },
        "Classes G.655.D, G.655.E and G.656 are anomalous at 1550 nm.",
        pmd_ps_per_sqrt_km=0.05,
    ),
    Kind(
        "nzdsf-negative", "Non-zero dispersion-shifted, negative dispersion", "Generic kinds",
        1550.0, (1500.0, 1600.0), -7.0, 0.1, 0.21, 2.0,
        {"D, slope, loss, PMD": PRACTICE, "γ": f"{_KERR} 52 µm²"},
        pmd_ps_per_sqrt_km=0.05,
    ),
    Kind(
        "dispersion-compensating", "Dispersion-compensating", "Generic kinds",
        1550.0, (1525.0, 1570.0), -100.0, -0.33, 0.5, 5.3,
        {
            "D, loss, PMD": PRACTICE,
            "slope": f"{PRACTICE}: that of standard fibre over its dispersion, about 0.0034 /nm",
            "γ": f"{_KERR} 20 µm²",
        },
        pmd_ps_per_sqrt_km=0.1,
    ),
    Kind(
        "highly-nonlinear-normal", "Highly nonlinear, normal", "Generic kinds",
        1550.0, (1500.0, 1580.0), -1.0, 0.018, 0.8, 10.5,
        {"D, slope, loss, γ, PMD": PRACTICE},
        "Ask for the dispersion of the reel: it varies along the fibre by as much as it is.",
        pmd_ps_per_sqrt_km=0.05,
    ),
    Kind(
        "spun", "Spun, low birefringence, 1064 nm", "Generic kinds",
        1064.0, (1000.0, 1150.0), -30.0, 0.18, 0.9, 5.1,
        {
            "D, slope": _SILICA,
            "loss": PRACTICE,
            "γ": f"{_KERR} 30 µm²",
            "coupling": "circular components of an isotropic fibre (Agrawal, Nonlinear Fiber "
            "Optics)",
        },
        "Set the source to 1064 nm. Lay it out straight: bends and twists bring birefringence "
        "back.",
        coupling="isotropic_circular",
    ),
    Kind(
        "high-birefringence", "High birefringence, 1064 nm", "Generic kinds",
        1064.0, (1000.0, 1150.0), -31.0, 0.18, 0.9, 5.1,
        {
            "D, slope": _SILICA,
            "loss": PRACTICE,
            "γ": f"{_KERR} 30 µm²",
            "δ": f"{PRACTICE}: birefringence 4·10⁻⁴, a beat length of 2.7 mm",
            "coupling": "linear components along the axes (Agrawal, Nonlinear Fiber Optics)",
        },
        "Set the source to 1064 nm. At 1550 nm most such fibres are anomalous.",
        coupling="linear_birefringent",
        delay_ps_per_km=1334.0,
    ),
    Kind(
        "high-birefringence-nonlinear", "High birefringence, highly nonlinear, normal",
        "Generic kinds",
        1550.0, (1500.0, 1580.0), -1.5, 0.02, 0.9, 10.5,
        {
            "D, slope, loss, γ": PRACTICE,
            "δ": f"{PRACTICE}: birefringence 4·10⁻⁴, a beat length of 3.9 mm",
            "coupling": "linear components along the axes (Agrawal, Nonlinear Fiber Optics)",
        },
        coupling="linear_birefringent",
        delay_ps_per_km=1334.0,
    ),
)  # fmt: skip
