"""Parameters of a span of fibre.

Each is defined once, here: the API schema, the page's form, the study file of the command line and
the attributes of the result file are read from these models.
"""

from typing import Literal, Self

from pydantic import model_validator

from solver.quantity import Contradiction, Stage, quantity
from solver.units import beta2_from_dispersion

Coupling = Literal["manakov", "linear_birefringent", "isotropic_circular", "uncoupled", "custom"]

COUPLING_COEFFICIENTS: dict[str, tuple[float, float]] = {
    "manakov": (8 / 9, 8 / 9),
    "linear_birefringent": (1.0, 2 / 3),
    "isotropic_circular": (2 / 3, 4 / 3),
    "uncoupled": (8 / 9, 0.0),
}
"""(self, cross) Kerr coefficients of each named coupling."""


class Span(Stage):
    """One uniform piece of fibre. What is not given is absent."""

    length_km: float = quantity(
        ..., "Length", "Length of the span.", unit="km", low=1e-6, high=10_000.0
    )
    dispersion_ps_per_nm_km: float | None = quantity(
        None,
        "Dispersion D",
        "Chromatic dispersion; negative is normal. Give this or β2.",
        unit="ps/(nm·km)",
        low=-10_000.0,
        high=10_000.0,
    )
    beta2_ps2_per_km: float | None = quantity(
        None,
        "β2",
        "Group-velocity dispersion; positive is normal. Give this or D.",
        unit="ps²/km",
        low=-10_000.0,
        high=10_000.0,
    )
    beta3_ps3_per_km: float = quantity(
        0.0, "β3", "Third-order dispersion.", unit="ps³/km", low=-1000.0, high=1000.0
    )
    beta4_ps4_per_km: float = quantity(
        0.0, "β4", "Fourth-order dispersion.", unit="ps⁴/km", low=-1000.0, high=1000.0
    )
    loss_db_per_km: float = quantity(0.0, "Loss", "Power loss.", unit="dB/km", low=0.0, high=1000.0)
    loss_difference_db_per_km: float = quantity(
        0.0,
        "Loss difference",
        "Loss of component 2 over that of component 1; half of it either way.",
        unit="dB/km",
        low=-100.0,
        high=100.0,
    )
    gain_db_per_km: float = quantity(
        0.0,
        "Distributed gain",
        "Gain along the span, as of a pumped fibre; its own noise is not modelled.",
        unit="dB/km",
        low=0.0,
        high=1000.0,
    )
    joint_loss_db: float = quantity(
        0.0,
        "Joint loss",
        "Loss of the splice or connector at the end of the span.",
        unit="dB",
        low=0.0,
        high=60.0,
    )
    gamma_per_w_km: float = quantity(
        0.0,
        "Nonlinear coefficient γ",
        "Kerr coefficient before the factors of the coupling.",
        unit="1/(W·km)",
        low=0.0,
        high=10_000.0,
    )
    coupling: Coupling = quantity(
        "manakov",
        "Coupling",
        "Self and cross Kerr factors: manakov 8/9, 8/9; linear_birefringent 1, 2/3; "
        "isotropic_circular 2/3, 4/3; uncoupled 8/9, 0; custom as given.",
    )
    self_coefficient: float | None = quantity(
        None,
        "Self factor",
        "Kerr factor of a component's own power.",
        low=0.0,
        high=10.0,
        when={"coupling": ["custom"]},
    )
    cross_coefficient: float | None = quantity(
        None,
        "Cross factor",
        "Kerr factor of the other component's power.",
        low=0.0,
        high=10.0,
        when={"coupling": ["custom"]},
    )
    delay_ps_per_km: float = quantity(
        0.0,
        "Group-delay difference δ",
        "Delay of component 1 behind component 2, per km.",
        unit="ps/km",
        low=-10_000.0,
        high=10_000.0,
    )
    delay_slope_ps2_per_km: float = quantity(
        0.0,
        "Slope of the difference",
        "Change of the group-delay difference with angular frequency: β2 of component 1 less that "
        "of component 2.",
        unit="ps²/km",
        low=-1000.0,
        high=1000.0,
    )
    retardance_deg: float = quantity(
        0.0,
        "Retardance",
        "Phase of component 1 against component 2 over the whole span, at the carrier.",
        unit="°",
        low=-360.0,
        high=360.0,
    )
    axes_deg: float = quantity(
        0.0,
        "Axes",
        "Angle of the span's birefringence axes to those of the launch.",
        unit="°",
        low=-180.0,
        high=180.0,
    )
    pmd_ps_per_sqrt_km: float = quantity(
        0.0,
        "PMD",
        "Polarization-mode dispersion coefficient: mean differential delay over √length.",
        unit="ps/√km",
        low=0.0,
        high=100.0,
    )

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.dispersion_ps_per_nm_km is None and self.beta2_ps2_per_km is None:
            raise Contradiction(
                "dispersion_ps_per_nm_km",
                "give the dispersion: dispersion_ps_per_nm_km or beta2_ps2_per_km",
            )
        if self.dispersion_ps_per_nm_km is not None and self.beta2_ps2_per_km is not None:
            raise Contradiction(
                "beta2_ps2_per_km",
                "dispersion_ps_per_nm_km and beta2_ps2_per_km are both given: keep one of them",
            )
        for name in ("self_coefficient", "cross_coefficient"):
            given = getattr(self, name) is not None
            if self.coupling == "custom" and not given:
                raise Contradiction(name, f"coupling custom needs {name}")
            if self.coupling != "custom" and given:
                raise Contradiction(
                    name, f"{name} applies to coupling custom only: leave it out or choose custom"
                )
        if self.pmd_ps_per_sqrt_km and self.coupling != "manakov":
            raise Contradiction(
                "pmd_ps_per_sqrt_km",
                "random polarization-mode dispersion mixes the components, which only the "
                "manakov coupling allows: choose manakov or set it to 0",
            )
        return self

    def beta2(self, wavelength_nm: float) -> float:
        """β2 in ps²/km, from whichever of D and β2 was given."""
        if self.beta2_ps2_per_km is not None:
            return self.beta2_ps2_per_km
        assert self.dispersion_ps_per_nm_km is not None
        return beta2_from_dispersion(self.dispersion_ps_per_nm_km, wavelength_nm)

    def kerr_coefficients(self) -> tuple[float, float]:
        """(self, cross) factors that multiply γ."""
        if self.self_coefficient is not None and self.cross_coefficient is not None:
            return self.self_coefficient, self.cross_coefficient
        return COUPLING_COEFFICIENTS[self.coupling]
