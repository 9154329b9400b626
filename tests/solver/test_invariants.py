"""What the equations keep: energy of each component, momentum, Hamiltonian, rotations."""

import numpy as np
import pytest

from solver.experiment import COUPLING_COEFFICIENTS
from solver.propagation import propagate
from tests import reference
from tests.checks import check
from tests.reference import Glass

TIME_STEP_PS = 1.0
COUPLINGS = [*COUPLING_COEFFICIENTS.values(), (1.0, 3.0)]
NAMES = [*COUPLING_COEFFICIENTS, "custom"]


def _light(power_w: float = 0.05) -> np.ndarray:
    return reference.stirred_light(21, 2, 1024, TIME_STEP_PS, 0.015, power_w)


@pytest.mark.parametrize(("own", "other"), COUPLINGS, ids=NAMES)
def test_lossless_line(own: float, other: float) -> None:
    """Energy of each component to rounding; Hamiltonian and momentum to the tolerance.

    The drift of the Hamiltonian is measured against its Kerr part, since its linear part could
    make it look small.
    """
    glass = Glass(5.0, 17.0, 0.5, 0.0, 2.5, own, other, 1.0)
    field = _light()
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[glass.span()], tolerance=1e-8)
    assert out.outcome.kind == "completed"
    before, after = (np.sum(np.abs(x) ** 2, axis=2) for x in (field, out.field))
    source = "Agrawal, Nonlinear Fiber Optics: coupled Schrödinger equations' invariants"
    energy_drift = np.abs(after / before - 1.0).max()
    check("lossless line: energy of each component", source, energy_drift, 1e-11)
    unlit = Glass(**{**vars(glass), "gamma": 0.0})
    for a, b in zip(field, out.field, strict=True):
        start = reference.hamiltonian(a, TIME_STEP_PS, glass)
        kerr = start - reference.hamiltonian(a, TIME_STEP_PS, unlit)
        drift = reference.hamiltonian(b, TIME_STEP_PS, glass) - start
        check("lossless line: Hamiltonian, of its Kerr part", source, abs(drift / kerr), 1e-7)
        width = reference.rms_width(
            np.abs(np.fft.fft(a[0])) ** 2, reference.angular_frequency(1024, TIME_STEP_PS)
        )
        energy = np.sum(np.abs(a) ** 2) * TIME_STEP_PS
        change = reference.momentum(b, TIME_STEP_PS) - reference.momentum(a, TIME_STEP_PS)
        relative = abs(change) / (energy * width)
        check("lossless line: momentum, of energy × rms width", source, relative, 1e-8)


def test_hamiltonian_drift_follows_the_tolerance() -> None:
    """A looser tolerance lets it drift more: the invariant is really watched."""
    glass = Glass(5.0, 17.0, gamma=2.5)
    field = _light()
    drifts = []
    for tolerance in (1e-2, 1e-6):
        out = propagate(field, time_step_ps=TIME_STEP_PS, line=[glass.span()], tolerance=tolerance)
        start, end = (
            reference.hamiltonian(x, TIME_STEP_PS, glass) for x in (field[0], out.field[0])
        )
        drifts.append(abs(end / start - 1.0))
    assert 1e-9 < drifts[0] < 1e-2
    assert drifts[1] < 1e-2 * drifts[0]


@pytest.mark.parametrize("precision", ["single", "double"])
def test_loss_takes_what_it_should(precision: str) -> None:
    """Each component's energy falls as e^{−αL}, whatever the Kerr term does."""
    field = _light()
    line = [Glass(5.0, 17.0, alpha=0.06, gamma=2.5).span(), Glass(2.0, -3.0, alpha=0.2).span()]
    out = propagate(
        field,
        time_step_ps=TIME_STEP_PS,
        line=line,
        tolerance=1e-2,
        precision=precision,  # type: ignore[arg-type]
    )
    before, after = (np.sum(np.abs(x) ** 2, axis=2, dtype=np.float64) for x in (field, out.field))
    rounding = 3e-5 if precision == "single" else 1e-12
    check(
        f"lossy line, {precision} precision: energy of each component",
        "e^{−αL}",
        np.abs(after / before / np.exp(-0.06 * 5.0 - 0.2 * 2.0) - 1.0).max(),
        rounding,
    )


def test_manakov_is_blind_to_the_choice_of_axes() -> None:
    """A rotation of the Poincaré sphere commutes with propagation (SU(2) invariance)."""
    theta, phi, chi = 0.8, 0.3, 1.9
    turn = np.array(
        [
            [np.cos(theta) * np.exp(1j * phi), np.sin(theta) * np.exp(1j * chi)],
            [-np.sin(theta) * np.exp(-1j * chi), np.cos(theta) * np.exp(-1j * phi)],
        ]
    )
    glass = Glass(5.0, 17.0, 0.4, 0.05, 2.5)
    field = _light()
    turned = np.einsum("jk,rkt->rjt", turn, field)
    straight, after = (
        propagate(x, time_step_ps=TIME_STEP_PS, line=[glass.span()], tolerance=1e-4).field
        for x in (field, turned)
    )
    # The very same steps, so the difference is rounding, far below the tolerance.
    check(
        "Manakov: a rotation of the Poincaré sphere before or after the fibre",
        "SU(2) invariance; Manakov, Sov. Phys. JETP 38, 248 (1974)",
        reference.relative_l2(np.einsum("jk,rkt->rjt", turn, straight), after),
        1e-11,
    )
    other = Glass(**{**vars(glass), "other": 2 / 3})
    straight, after = (
        propagate(x, time_step_ps=TIME_STEP_PS, line=[other.span()], tolerance=1e-4).field
        for x in (field, turned)
    )
    assert reference.relative_l2(np.einsum("jk,rkt->rjt", turn, straight), after) > 0.05


def test_reversing_the_fibre_gives_the_launch_back() -> None:
    """Conjugation turns z around in a lossless fibre of even dispersion."""
    glass = Glass(5.0, 17.0, gamma=2.5, own=1.0, other=2 / 3)
    field = _light()
    there = propagate(field, time_step_ps=TIME_STEP_PS, line=[glass.span()], tolerance=1e-8)
    back = propagate(
        there.field.conj(), time_step_ps=TIME_STEP_PS, line=[glass.span()], tolerance=1e-8
    )
    assert reference.relative_l2(back.field.conj(), field) < 3e-8
