"""Kinds of fibre: within the limits they claim, normal where offered, β2 and β3 as derived."""

import math

import mpmath as mp
import pytest

from solver.catalogue import CLASSES, KINDS, FibreClass, Kind
from solver.experiment import Contradiction, Experiment, Span, with_changes
from solver.units import (
    LIGHT_SPEED_NM_PER_PS,
    beta2_from_dispersion,
    beta3_from_slope,
    slope_from_beta3,
)
from tests.checks import check

BY_KEY = {kind.key: kind for kind in KINDS}
BY_CLASS = {known.key: known for known in CLASSES}
each_kind = pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.key)


def _silica(wavelength_nm: mp.mpf) -> mp.mpf:
    """Refractive index of fused silica (Malitson, J. Opt. Soc. Am. 55, 1205, 1965; from memory)."""
    x = (wavelength_nm / 1000) ** 2
    terms = (("0.6961663", "0.0684043"), ("0.4079426", "0.1162414"), ("0.8974794", "9.896161"))
    return mp.sqrt(1 + sum(mp.mpf(b) * x / (x - mp.mpf(c) ** 2) for b, c in terms))


def _silica_dispersion(wavelength_nm: float) -> mp.mpf:
    """D = −(λ/c) d²n/dλ², ps/(nm·km)."""
    return -wavelength_nm / LIGHT_SPEED_NM_PER_PS * mp.diff(_silica, wavelength_nm, 2) * 1e12


@pytest.mark.parametrize("wavelength_nm", [850.0, 1064.0, 1310.0, 1552.0])
def test_conversion_against_derivatives_of_the_phase(wavelength_nm: float) -> None:
    """β(ω) = n ω/c of silica: β2 and β3 by derivatives in ω, D and S by derivatives in λ."""
    with mp.workdps(40):
        two_pi_c = 2 * mp.pi * mp.mpf(LIGHT_SPEED_NM_PER_PS)
        omega = two_pi_c / wavelength_nm

        def phase(at: mp.mpf) -> mp.mpf:
            """β in 1/km at an angular frequency in rad/ps; 1 km is 10¹² nm."""
            return _silica(two_pi_c / at) * at / LIGHT_SPEED_NM_PER_PS * 1e12

        beta2, beta3 = (float(mp.diff(phase, omega, order)) for order in (2, 3))
        dispersion = float(_silica_dispersion(wavelength_nm))
        slope = float(mp.diff(_silica_dispersion, wavelength_nm))
    source = "derivatives of silica's β(ω) by mpmath (Malitson, J. Opt. Soc. Am. 55, 1965)"
    made = beta2_from_dispersion(dispersion, wavelength_nm)
    check("D to β2", source, abs(made / beta2 - 1.0), 1e-9)
    made = beta3_from_slope(dispersion, slope, wavelength_nm)
    check("D and its slope to β3", source, abs(made / beta3 - 1.0), 1e-9)
    assert slope_from_beta3(dispersion, beta3, wavelength_nm) == pytest.approx(slope, rel=1e-8)


def test_standard_fibre_as_the_textbooks_have_it() -> None:
    """17 ps/(nm·km) and 0.058 ps/(nm²·km): β2 = −21.7 ps²/km, β3 = 0.13 ps³/km (Agrawal)."""
    assert beta2_from_dispersion(17.0, 1550.0) == pytest.approx(-21.7, abs=0.05)
    assert beta3_from_slope(17.0, 0.058, 1550.0) == pytest.approx(0.13, abs=0.005)


@each_kind
def test_every_kind_is_normal_over_its_whole_range(kind: Kind) -> None:
    """At the ends and at its own wavelength, with every figure within the span's bounds."""
    for wavelength_nm in (*kind.range_nm, kind.wavelength_nm):
        span = kind.span(1.0, wavelength_nm)
        assert span.beta2(wavelength_nm) > 0.0
        made = Span(length_km=1.0, **kind.fields(wavelength_nm))
        assert made == span
    assert kind.range_nm[0] <= kind.wavelength_nm <= kind.range_nm[1]
    assert kind.source
    assert kind.title


@each_kind
def test_beta2_of_a_kind_follows_its_slope(kind: Kind) -> None:
    """β3 of the span is dβ2/dω of the kind's D over wavelength, by differences."""
    centre_nm = kind.wavelength_nm
    step_nm = 0.01

    def omega(wavelength_nm: float) -> float:
        return 2.0 * math.pi * LIGHT_SPEED_NM_PER_PS / wavelength_nm

    ends = [centre_nm - step_nm, centre_nm + step_nm]
    beta2 = [beta2_from_dispersion(kind.dispersion_at(nm), nm) for nm in ends]
    numeric = (beta2[1] - beta2[0]) / (omega(ends[1]) - omega(ends[0]))
    assert kind.span(1.0).beta3_ps3_per_km == pytest.approx(numeric, rel=1e-5, abs=1e-6)


@each_kind
def test_outside_its_range_the_nearest_wavelength_is_offered(kind: Kind) -> None:
    low, high = kind.range_nm
    for wavelength_nm, nearest in ((low - 50.0, low), (high + 50.0, high)):
        with pytest.raises(Contradiction, match=f"use {nearest:g} nm") as caught:
            kind.span(1.0, wavelength_nm)
        assert caught.value.where == "source.wavelength_nm"


@pytest.mark.parametrize(
    ("key", "of_class", "smallest", "pmd"),
    [
        ("g653-normal", "G.653.A", 0.0, 0.5),
        ("g655a-negative", "G.655.A", 0.1, 0.5),
        ("g655c-negative", "G.655.C", 1.0, 0.2),
    ],
)
def test_presets_keep_the_limits_of_their_class(
    key: str, of_class: str, smallest: float, pmd: float
) -> None:
    """ITU-T limits, from memory: D over the band, 0.35 dB/km, the link's PMD coefficient."""
    kind, known = BY_KEY[key], BY_CLASS[of_class]
    low_nm, high_nm = kind.range_nm
    for step in range(11):
        wavelength_nm = low_nm + (high_nm - low_nm) * step / 10
        limits = known.limits_at(wavelength_nm)
        assert limits is not None
        dispersion = kind.dispersion_at(wavelength_nm)
        assert limits[0] <= dispersion <= -smallest
        largest = dispersion / limits[0]
        check(
            f"largest −D of {of_class} as listed, over that allowed",
            f"ITU-T {of_class[:5]}, from memory",
            largest,
            1.0,
        )
    assert kind.loss_db_per_km <= 0.35
    assert kind.pmd_ps_per_sqrt_km <= pmd
    if of_class == "G.653.A":
        assert kind.slope_ps_per_nm2_km <= 0.085
    if of_class == "G.655.C":
        assert abs(kind.dispersion_at(high_nm) - kind.dispersion_at(low_nm)) <= 5.0


@pytest.mark.parametrize(
    ("key", "wavelength_nm", "low", "high"),
    [
        ("G.655.D", 1550.0, 2.80, 6.20),
        ("G.655.D", 1505.0, -0.70, 4.745),
        ("G.655.E", 1550.0, 6.06, 9.31),
        ("G.656", 1550.0, 3.60, 9.28),
        ("G.656", 1460.0, 1.00, 4.60),
        ("G.656", 1625.0, 4.58, 14.00),
    ],
)
def test_limits_of_the_classes(key: str, wavelength_nm: float, low: float, high: float) -> None:
    """Tables of ITU-T G.655 (2009) and G.656 (2010); D and E at 1550 nm as announced in 2006."""
    limits = BY_CLASS[key].limits_at(wavelength_nm)
    assert limits is not None
    deviation = max(abs(limits[0] - low), abs(limits[1] - high))
    source = "ITU-T G.655 (2009) tables 2 and 3, G.656 (2010), from memory"
    check("limits of D of the ITU-T classes", source, deviation, 1e-9, "ps/(nm·km)")


def test_classes_say_where_they_are_normal() -> None:
    """At 1550 nm: standard and wideband fibre never, G.653 and G.655.A to C perhaps."""
    at_1550 = {known.key: known.sign_at(1550.0) for known in CLASSES}
    assert {key for key, sign in at_1550.items() if sign == "either"} == {
        "G.653.A", "G.655.A", "G.655.B", "G.655.C",
    }  # fmt: skip
    assert set(at_1550.values()) == {"either", "anomalous"}
    standard = BY_CLASS["G.652"]
    assert [standard.sign_at(nm) for nm in (1280.0, 1310.0, 1330.0)] == [
        "normal", "either", "anomalous",
    ]  # fmt: skip
    assert "surely normal below 1300 nm" in standard.advice(1552.0)
    assert "see the data sheet" in BY_CLASS["G.655.C"].advice(1552.0)


@pytest.mark.parametrize("known", CLASSES, ids=lambda known: known.key)
def test_signs_agree_with_limits(known: FibreClass) -> None:
    """Where the lowest D allowed is positive the class is anomalous, and only there."""
    for wavelength_nm in range(1461, 1625, 4):
        limits = known.limits_at(wavelength_nm)
        if limits is None:
            continue
        expected = "anomalous" if limits[0] > 0.0 else "normal" if limits[1] < 0.0 else "either"
        assert known.sign_at(wavelength_nm) == expected


@pytest.mark.parametrize("key", ["spun", "high-birefringence"])
def test_at_1064_nm_it_is_silica(key: str) -> None:
    """The waveguide's part is a few ps/(nm·km) at most."""
    kind = BY_KEY[key]
    for wavelength_nm in (*kind.range_nm, 1064.0):
        silica = float(_silica_dispersion(wavelength_nm))
        away = abs(kind.dispersion_at(wavelength_nm) - silica)
        source = "material dispersion of silica (Malitson, J. Opt. Soc. Am. 55, 1965)"
        check("D of fibres listed at 1064 nm", source, away, 5.0, "ps/(nm·km)")


@pytest.mark.parametrize(
    ("key", "area_um2"),
    [
        ("g653-normal", 50.0),
        ("g655a-negative", 55.0),
        ("g655c-negative", 55.0),
        ("nzdsf-negative", 52.0),
        ("dispersion-compensating", 20.0),
        ("spun", 30.0),
        ("high-birefringence", 30.0),
    ],
)
def test_gamma_from_the_effective_area(key: str, area_um2: float) -> None:
    """γ = 2πn2/(λA) with n2 = 2.6·10⁻²⁰ m²/W (Agrawal, Nonlinear Fiber Optics)."""
    kind = BY_KEY[key]
    gamma = 2.0 * math.pi * 2.6e-20 / (kind.wavelength_nm * 1e-9 * area_um2 * 1e-12) * 1e3
    source = "2πn2/(λA) (Agrawal, Nonlinear Fiber Optics)"
    check("γ of the fibres listed", source, abs(kind.gamma_per_w_km / gamma - 1.0), 0.03)


def test_delay_of_a_birefringence() -> None:
    """δ = B/c, 1334 ps/km for 4·10⁻⁴; beat lengths λ/B of 2.7 and 3.9 mm."""
    for key in ("high-birefringence", "high-birefringence-nonlinear"):
        kind = BY_KEY[key]
        assert kind.delay_ps_per_km == pytest.approx(4e-4 / LIGHT_SPEED_NM_PER_PS * 1e12, rel=1e-3)
        assert f"{kind.wavelength_nm * 1e-6 / 4e-4:.1f} mm" in kind.sources["δ"]


@each_kind
def test_every_kind_makes_an_experiment(kind: Kind) -> None:
    """Put into a line, one kilometre of it is a valid experiment."""
    line = [kind.span(1.0).model_dump()]
    made = with_changes(Experiment(), {"line": line, "source.wavelength_nm": kind.wavelength_nm})
    assert made.line[0] == kind.span(1.0)
