"""Exact nonlinear waves: bright vector solitons, their collision, and domain walls."""

from collections.abc import Callable

import numpy as np
import pytest

from solver.propagation import propagate
from tests import reference
from tests.checks import check
from tests.reference import Glass

TIME_STEP_PS = 1.0
TIME = reference.time_axis(1024, TIME_STEP_PS)
ANOMALOUS = Glass(40.0, beta2=-20.0, gamma=1.8)
WALLS = Glass(30.0, beta2=15.0, gamma=2.0, own=1.0, other=3.0)
WIDTHS = (0.12 + 0.06j, 0.10 - 0.06j)


def _residual(solution: Callable[[float], np.ndarray], z_km: float, glass: Glass) -> float:
    """How badly a claimed solution misses ∂A/∂z = right side, relative to the right side."""
    h = 1e-3
    ahead, behind, ahead2, behind2 = (solution(z_km + s * h) for s in (1, -1, 2, -2))
    slope = (8.0 * (ahead - behind) - (ahead2 - behind2)) / (12.0 * h)
    right = reference.right_side(solution(z_km), TIME_STEP_PS, glass)
    return reference.relative_l2(slope, right)


def _pair(polarization: np.ndarray) -> Callable[[float], np.ndarray]:
    """Solitons that would both be centred at t = 0, z = 0, were the other not there."""
    mu = ANOMALOUS.gamma * ANOMALOUS.own / abs(ANOMALOUS.beta2)
    unit = np.array([2.0 * k.real / np.sqrt(mu) for k in WIDTHS])
    rows = polarization / np.linalg.norm(polarization, axis=1, keepdims=True)
    rows = rows * unit[:, None]
    return lambda z: reference.manakov_pair(TIME, z, ANOMALOUS, WIDTHS, rows)


POLARIZATIONS = {
    "parallel": np.array([[1.0, 0.5j], [1.0, 0.5j]]),
    "orthogonal": np.array([[1.0, 0.0], [0.0, 1.0]], dtype=complex),
    "oblique": np.array([[1.0, 0.3], [0.6, 1.0j]]),
}


@pytest.mark.parametrize("angle", [0.0, 0.4, np.pi / 4, 1.2])
def test_vector_soliton_keeps_its_shape(angle: float) -> None:
    """Manakov 1974: any polarization, any relative phase; only a common phase turns."""
    profile = reference.manakov_soliton(TIME, 0.0, ANOMALOUS, 25.0)
    vector = np.array([np.cos(angle), np.sin(angle) * np.exp(0.7j)])
    field = (vector[:, None] * profile)[None]
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[ANOMALOUS.span()], tolerance=1e-8)
    assert out.outcome.kind == "completed"
    exact = vector[:, None] * reference.manakov_soliton(TIME, 40.0, ANOMALOUS, 25.0)
    check(
        "Manakov, anomalous dispersion: bright vector soliton after 40 km",
        "Manakov, Sov. Phys. JETP 38, 248 (1974)",
        reference.relative_l2(out.field[0], exact),
        2e-8,
    )


@pytest.mark.parametrize("kind", POLARIZATIONS)
def test_soliton_collision(kind: str) -> None:
    """The exact two-soliton solution before, within and after the collision.

    Radhakrishnan, Lakshmanan and Hietarinta 1997; put into the equation first.
    """
    glass = Glass(200.0, ANOMALOUS.beta2, gamma=ANOMALOUS.gamma)
    exact = _pair(POLARIZATIONS[kind])
    for z in (-150.0, 0.0, 90.0):
        assert _residual(exact, z, glass) < 1e-8
    out = propagate(
        exact(-100.0)[None],
        time_step_ps=TIME_STEP_PS,
        line=[glass.span()],
        tolerance=1e-7,
        snapshots_km=[50.0, 100.0, 150.0, 200.0],
    )
    assert out.outcome.kind == "completed"
    assert out.snapshots is not None
    for z, field in zip(out.z_km, out.snapshots, strict=True):
        check(
            "Manakov, anomalous dispersion: collision of two vector solitons",
            "Radhakrishnan, Lakshmanan and Hietarinta, Phys. Rev. E 56, 2213 (1997), from memory",
            reference.relative_l2(field[0], exact(z - 100.0)),
            2e-7,
        )


def test_collision_exchanges_energy() -> None:
    """Parallel and orthogonal solitons keep their polarization; oblique ones trade energy."""
    left, right = TIME < 0.0, TIME >= 0.0
    for kind, polarization in POLARIZATIONS.items():
        exact = _pair(polarization)
        before, after = np.abs(exact(-100.0)) ** 2, np.abs(exact(100.0)) ** 2
        share = []
        for power, side in ((before, left), (after, right)):
            parts = power[:, side].sum(axis=1)
            share.append(parts[0] / parts.sum())
        moved = abs(share[1] - share[0])
        if kind == "oblique":
            assert moved > 0.02
        else:
            assert moved < 1e-3
        np.testing.assert_allclose(before.sum(axis=1), after.sum(axis=1), rtol=1e-9)


def test_domain_walls_are_stationary() -> None:
    """Walls between polarization domains at cross/self = 3, in normal dispersion.

    The closed form is put into the equation, then carried 12 nonlinear lengths.
    """
    amplitude, gap = np.sqrt(0.2), 512.0

    def exact(z_km: float) -> np.ndarray:
        return reference.domain_walls(TIME, z_km, WALLS, amplitude, gap)

    assert _residual(exact, 3.0, WALLS) < 1e-9
    out = propagate(
        exact(0.0)[None], time_step_ps=TIME_STEP_PS, line=[WALLS.span()], tolerance=1e-8
    )
    assert out.outcome.kind == "completed"
    check(
        "polarization domain walls, cross/self 3, normal dispersion: field after 30 km",
        "exact solution, own derivation; Haelterman and Sheppard, Phys. Rev. E 49, 3389 (1994)",
        reference.relative_l2(out.field[0], exact(30.0)),
        3e-8,
    )
    contrast = np.diff(np.abs(out.field[0]) ** 2, axis=0)
    assert np.count_nonzero(np.diff(np.sign(contrast[0]))) == 2
