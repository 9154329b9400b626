"""Exact waves of the normally dispersive Manakov equation: dark pairs and dark–bright pairs.

With κ = γc, β = β2 > 0 and X = η(t − vz) the equation ∂A/∂z = −i(β/2)∂²A/∂t² + iκ(|A_1|² + |A_2|²)A
has these solutions (own derivation by substitution; waves of this kind are due to Sheppard and
Kivshar, Phys. Rev. E 55, 4773, 1997, and Radhakrishnan and Lakshmanan, J. Phys. A 28, 2683,
1995, from memory). A test puts each into the equation before it is used.
"""

from collections.abc import Callable

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import ellipj, ellipk

from solver.propagation import propagate
from tests import reference
from tests.checks import check
from tests.reference import Glass

TIME_STEP_PS = 1.0
SAMPLES = 1024
WINDOW_PS = SAMPLES * TIME_STEP_PS
TIME = reference.time_axis(SAMPLES, TIME_STEP_PS)
GLASS = Glass(40.0, beta2=20.0, gamma=1.8)
BETA, KAPPA = GLASS.beta2, GLASS.gamma * GLASS.own
SOURCE = "exact solution, own derivation; Sheppard and Kivshar 1997, from memory"
Wave = Callable[[float], np.ndarray]


def _twisted(eta: float, velocity: float, turns: int) -> tuple[float, float]:
    """(ω, φ): a carrier on which one grey soliton closes on itself around the window.

    c tanh X + is with (c, s) = (cos φ, sin φ) turns by 2φ − π from end to end, and tan φ =
    (ω − v/β)/η.
    """

    def angle(omega: float) -> float:
        return float(np.arctan((omega - velocity / BETA) / eta))

    def excess(omega: float) -> float:
        return -omega * WINDOW_PS + 2.0 * angle(omega) - np.pi - 2.0 * np.pi * turns

    omega = brentq(excess, -1.0, 1.0, xtol=1e-16)
    return omega, angle(omega)


def dark_pair(eta: float, velocity: float, turns: tuple[int, int], first_w: float) -> Wave:
    """Two dark solitons of unlike greyness, one in each component, on carriers of their own.

    A_j = a_j (cos φ_j tanh X + i sin φ_j) e^{−iω_j t + iν_j z}, ν_j = βω_j²/2 + κ(a_1² + a_2²),
    βη² = κ Σ a_j² cos²φ_j, tan φ_j = (ω_j − v/β)/η.
    """
    twists = [_twisted(eta, velocity, n) for n in turns]
    (omega1, phi1), (omega2, phi2) = twists
    second_w = (BETA * eta**2 / KAPPA - first_w * np.cos(phi1) ** 2) / np.cos(phi2) ** 2
    assert second_w > 0.0
    whole = first_w + second_w

    def field(z: float) -> np.ndarray:
        x = eta * _around(TIME - velocity * z)
        rows = []
        for power, omega, phi in zip(
            (first_w, second_w), (omega1, omega2), (phi1, phi2), strict=True
        ):
            turn = (BETA * omega**2 / 2 + KAPPA * whole - omega * velocity) * z
            carrier = np.exp(1j * (turn - omega * x / eta))
            rows.append(np.sqrt(power) * (np.cos(phi) * np.tanh(x) + 1j * np.sin(phi)) * carrier)
        return np.array(rows)

    return field


def dark_bright(eta: float, bins: int, turns: int, bright_w: float) -> Wave:
    """A bright soliton carried by a dark one, though the dispersion is normal.

    A_1 = a(cos φ tanh X + i sin φ)e^{−iω_1 t + iν_1 z}, A_2 = b sech X e^{−iω_2 t + iν_2 z},
    βη² = κ(a² cos²φ − b²), v = βω_2, ν_1 = βω_1²/2 + κa², ν_2 = β(ω_2² − η²)/2 + κa².
    """
    omega2 = 2.0 * np.pi * bins / WINDOW_PS
    velocity = BETA * omega2
    omega1, phi = _twisted(eta, velocity, turns)
    dark_w = (BETA * eta**2 / KAPPA + bright_w) / np.cos(phi) ** 2

    def field(z: float) -> np.ndarray:
        t = _around(TIME - velocity * z)
        x = eta * t
        turn1 = (BETA * omega1**2 / 2 + KAPPA * dark_w - omega1 * velocity) * z
        turn2 = (BETA * (omega2**2 - eta**2) / 2 + KAPPA * dark_w - omega2 * velocity) * z
        dark = np.cos(phi) * np.tanh(x) + 1j * np.sin(phi)
        return np.array(
            [
                np.sqrt(dark_w) * dark * np.exp(1j * (turn1 - omega1 * t)),
                np.sqrt(bright_w) / np.cosh(x) * np.exp(1j * (turn2 - omega2 * t)),
            ]
        )

    return field


def periodic_pair(modulus: float, periods: int, second_w: float) -> Wave:
    """A train of polarization domains: A_1 = a sn(ηt), A_2 = b cn(ηt), βη²m = κ(a² − b²).

    Their phases grow as κb² + βη²(1 + m)/2 and κb² + βη²/2. Jacobi functions of parameter m.
    """
    eta = 4.0 * ellipk(modulus) * periods / WINDOW_PS
    first_w = second_w + BETA * eta**2 * modulus / KAPPA
    sn, cn, _, _ = ellipj(eta * TIME, modulus)
    rates = KAPPA * second_w + 0.5 * BETA * eta**2 * np.array([1.0 + modulus, 1.0])
    profile = np.stack([np.sqrt(first_w) * sn, np.sqrt(second_w) * cn])
    return lambda z: np.asarray(profile * np.exp(1j * rates * z)[:, None])


def _around(time_ps: np.ndarray) -> np.ndarray:
    return (time_ps + WINDOW_PS / 2) % WINDOW_PS - WINDOW_PS / 2


CASES: dict[str, Wave] = {
    "dark pair": dark_pair(0.06, 0.0, (3, -4), 0.025),
    "moving dark pair": dark_pair(0.05, 0.5, (0, 6), 0.02),
    "dark–bright pair": dark_bright(0.06, 0, 0, 0.02),
    "moving dark–bright pair": dark_bright(0.05, -4, 1, 0.04),
    "periodic pair": periodic_pair(0.7, 3, 0.02),
    "periodic pair near walls": periodic_pair(0.999, 2, 0.01),
}


@pytest.mark.parametrize("case", CASES)
def test_exact_wave(case: str) -> None:
    """Put into the equation, then carried 40 km, moved or not."""
    wave = CASES[case]
    z, h = 7.0, 1e-3
    slope = (8.0 * (wave(z + h) - wave(z - h)) - (wave(z + 2 * h) - wave(z - 2 * h))) / (12.0 * h)
    assert reference.relative_l2(slope, reference.right_side(wave(z), TIME_STEP_PS, GLASS)) < 1e-8
    out = propagate(
        wave(0.0)[None],
        time_step_ps=TIME_STEP_PS,
        line=[GLASS.span()],
        tolerance=1e-8,
        snapshots_km=[15.0, 40.0],
    )
    assert out.outcome.kind == "completed"
    assert out.snapshots is not None
    for z_km, field in zip(out.z_km, out.snapshots, strict=True):
        kind = case.removeprefix("moving ").removesuffix(" near walls")
        check(
            f"Manakov, normal dispersion: {kind}, field after 40 km",
            SOURCE,
            reference.relative_l2(field[0], wave(z_km)),
            2e-8,
        )


def test_a_bright_pulse_alone_spreads() -> None:
    """The control: without its dark partner the bright soliton of the pair disperses."""
    field = CASES["dark–bright pair"](0.0)[None].copy()
    field[0, 0] = 0.0
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[GLASS.span()], tolerance=1e-4)
    widths = [reference.rms_width(np.abs(x[0, 1]) ** 2, TIME) for x in (field, out.field)]
    assert widths[1] > 1.5 * widths[0]
