"""Stages of the light path one by one, and the ensemble against the closed form of the whole."""

from typing import Any

import numpy as np
import pytest

from solver.ensemble import Bench
from solver.experiment import Experiment, JsonValue, Span, Study, Sweep, Variant, with_changes
from solver.propagation import propagate
from solver.result import PointResult
from solver.study import StudyState, execute
from solver.task import Leg, RoundTask
from solver.theory import FIBRES
from solver.units import effective_length_km
from tests import reference
from tests.checks import check

TIME_STEP_PS = 1.0
TIME = reference.time_axis(512, TIME_STEP_PS)
SPHERE = "rotation of the Poincaré sphere; Gordon and Kogelnik, PNAS 97, 4541 (2000)"


def _stokes(field: np.ndarray) -> np.ndarray:
    """S0 to S3 of fields of shape (…, 2, samples) by Pauli's matrices; shape (4, …, samples)."""
    pauli = np.array(
        [[[1, 0], [0, 1]], [[1, 0], [0, -1]], [[0, 1], [1, 0]], [[0, -1j], [1j, 0]]], dtype=complex
    )
    return np.einsum("...jt,sjk,...kt->s...t", field.conj(), pauli, field).real


def _rotation(axis: np.ndarray, angle: float) -> np.ndarray:
    """Rodrigues' matrix."""
    cross = np.cross(np.eye(3), axis)
    return np.asarray(np.eye(3) + np.sin(angle) * cross + (1.0 - np.cos(angle)) * cross @ cross)


def test_stokes_identities() -> None:
    """S0² = S1² + S2² + S3² at every moment of propagated light; |⟨S⟩| ≤ ⟨S0⟩."""
    field = reference.stirred_light(3, 4, 512, TIME_STEP_PS, 0.03, 0.05)
    line = [reference.Glass(4.0, 17.0, 0.3, 0.05, 2.5, 1.0, 2 / 3, 1.0).span()]
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-6)
    s = _stokes(out.field)
    off = np.abs(s[0] ** 2 - np.sum(s[1:] ** 2, axis=0)) / s[0].max() ** 2
    check("Stokes parameters: S0² = S1² + S2² + S3²", "identity", off.max(), 1e-13)
    mean = s.mean(axis=-1)
    assert np.all(np.linalg.norm(mean[1:], axis=0) < mean[0])


@pytest.mark.parametrize("retardance", [90.0, 180.0, -47.0])
@pytest.mark.parametrize("axes", [0.0, 30.0, -75.0])
def test_a_retarder_turns_the_sphere(retardance: float, axes: float) -> None:
    """Retardance Γ on axes at an angle θ turns S by Γ about (cos 2θ, sin 2θ, 0).

    Component 1 advanced by Γ/2 and component 2 held back, e^{iΓσ/2}, turn it left-handedly.
    """
    field = reference.stirred_light(3, 1, 512, TIME_STEP_PS, 0.03, 0.05)
    span = Span(length_km=2.0, beta2_ps2_per_km=0.0, retardance_deg=retardance, axes_deg=axes)
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-9)
    before, after = _stokes(field[0])[1:], _stokes(out.field[0])[1:]
    twice = 2.0 * np.radians(axes)
    turn = _rotation(np.array([np.cos(twice), np.sin(twice), 0.0]), -np.radians(retardance))
    off = np.abs(after - turn @ before).max() / np.abs(before).max()
    check("retarder on turned axes: Stokes vectors", SPHERE, off, 1e-12)


@pytest.mark.parametrize("loss", [0.0, 0.2, 3.0])
@pytest.mark.parametrize("coupling", ["manakov", "linear_birefringent"])
def test_effective_length(loss: float, coupling: str) -> None:
    """Kerr phases of two continuous waves: γ(c_self P_1 + c_cross P_2)(1 − e^{−αL})/α."""
    length, gamma, powers = 12.0, 1.7, np.array([0.06, 0.1])
    span = Span(
        length_km=length,
        beta2_ps2_per_km=17.0,
        loss_db_per_km=loss,
        gamma_per_w_km=gamma,
        coupling=coupling,  # type: ignore[arg-type]
    )
    field = np.sqrt(powers)[None, :, None] * np.ones((1, 1, 64), dtype=complex)
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[span], tolerance=1e-9)
    alpha = loss * np.log(10.0) / 10.0
    effective = length if loss == 0.0 else (1.0 - np.exp(-alpha * length)) / alpha
    own, other = span.kerr_coefficients()
    expected = gamma * effective * (own * powers + other * powers[::-1])
    found = np.angle(out.field[0, :, 0] * np.exp(-1j * expected))
    source = "Agrawal, Nonlinear Fiber Optics, ch. 4"
    check(
        "effective length: Kerr phase of continuous waves", source, np.abs(found).max(), 1e-7, "rad"
    )
    check(
        "effective length: (1 − e^{−αL})/α",
        source,
        abs(effective_length_km(length, loss) / effective - 1.0),
        1e-12,
    )


def test_losses_and_gains_add_in_decibels() -> None:
    """Loss, its difference, distributed gain and joints of two spans, of each component."""
    line = [
        Span(
            length_km=3.0,
            beta2_ps2_per_km=10.0,
            loss_db_per_km=0.3,
            loss_difference_db_per_km=0.4,
            joint_loss_db=0.7,
        ),
        Span(length_km=5.0, beta2_ps2_per_km=-4.0, gain_db_per_km=0.25, joint_loss_db=0.1),
    ]
    field = reference.stirred_light(3, 1, 512, TIME_STEP_PS, 0.03, 0.05)
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-9)
    before, after = (np.sum(np.abs(x[0]) ** 2, axis=1) for x in (field, out.field))
    common = -0.3 * 3.0 - 0.7 + 0.25 * 5.0 - 0.1
    expected = common + np.array([0.6, -0.6])
    off = np.abs(10.0 * np.log10(after / before) - expected).max()
    check("losses and gains of a line of two spans", "decibels add, by definition", off, 1e-9, "dB")


GRID_CHANGES: dict[str, JsonValue] = {
    "ensemble.window_ps": 2048.0,
    "ensemble.samples": 1024,
    "ensemble.max_lag_ps": 80.0,
    "ensemble.distances": 1,
    "line.*.gamma_per_w_km": 0.0,
}
NOISY: dict[str, JsonValue] = {
    "receiver.received_mw": 0.05,
    "receiver.thermal_pa_per_sqrt_hz": 30.0,
    "receiver.shot_noise": "on",
    "receiver.filter": "bessel4",
    "receiver.bandwidth_ghz": 30.0,
}
PATHS: dict[str, dict[str, Any]] = {
    "shaper": {
        "relation.kind": "derivative",
        "relation.range_ghz": 20.0,
        "shaper.resolution_ghz": 20.0,
        "shaper.extinction_db": -6.0,
    },
    "notch, delay and polarization-dependent loss": {
        "relation.kind": "hilbert",
        "relation.notch_ghz": 6.0,
        "launch.pdl_db": 3.0,
        "launch.skew_ps": 12.0,
        "launch.crosstalk_db": -12.0,
    },
    "booster": {
        "relation.kind": "identical",
        "source.power_mw": 1e-4,
        "booster.noise_figure_db": 7.0,
        "booster.gain_db": 30.0,
        "booster.bandpass_ghz": 50.0,
    },
    "line of unlike spans": {
        "relation.kind": "derivative",
        "line": [
            {
                "length_km": 2.0,
                "beta2_ps2_per_km": 12.0,
                "delay_ps_per_km": 4.0,
                "delay_slope_ps2_per_km": 30.0,
                "axes_deg": 35.0,
                "retardance_deg": 70.0,
                "loss_difference_db_per_km": 0.8,
                "joint_loss_db": 0.5,
            },
            {"length_km": 1.0, "beta2_ps2_per_km": -5.0, "pmd_ps_per_sqrt_km": 6.0},
        ],
    },
    "preamplifier": {
        "relation.kind": "derivative",
        "launch.total_power_mw": 1e-3,
        "preamplifier.noise_figure_db": 6.0,
        "preamplifier.bandpass_ghz": 80.0,
    },
    "receiver's noise": {"relation.kind": "derivative", **NOISY},
    "receiver's noise taken off": {
        "relation.kind": "derivative",
        **NOISY,
        "receiver.noise_correction": "on",
    },
    "shot noise": {
        "relation.kind": "derivative",
        **NOISY,
        "receiver.thermal_pa_per_sqrt_hz": 0.0,
        "receiver.received_mw": 2e-4,
    },
    "digitizer": {
        "relation.kind": "hilbert",
        "receiver.digitizer_filter": "butterworth4",
        "receiver.digitizer_bandwidth_ghz": 25.0,
        "receiver.sampling_gsps": 125.0,
        "receiver.effective_bits": 3.5,
        "receiver.extinction_db": -13.0,
    },
    "all together": {
        "relation.kind": "derivative",
        "relation.range_ghz": 30.0,
        "shaper.resolution_ghz": 4.0,
        "launch.crosstalk_db": -15.0,
        "booster.noise_figure_db": 6.0,
        "booster.bandpass_ghz": 60.0,
        "source.power_mw": 1e-3,
        "line.0.pmd_ps_per_sqrt_km": 3.0,
        "line.0.joint_loss_db": 1.0,
        "preamplifier.noise_figure_db": 5.0,
        "preamplifier.bandpass_ghz": 100.0,
        "launch.total_power_mw": 0.01,
        **NOISY,
    },
}


@pytest.mark.parametrize("path", PATHS)
def test_the_ensemble_follows_the_closed_form(path: str) -> None:
    """With the Kerr term off every correlation at every lag agrees within its standard error.

    By the path a worker takes: light, march, preamplifier, receiver, features, error bars.
    """
    _compare(path, _point(PATHS[path], 256))


def test_drawn_fibres_follow_the_mean_over_them() -> None:
    """As many realizations as the closed form has fibres, so that both have the very same."""
    changes = {
        "relation.kind": "derivative",
        "launch.share_1": 0.7,
        "line.0.pmd_ps_per_sqrt_km": 6.0,
        "ensemble.fibres": "drawn",
        "preamplifier.noise_figure_db": 6.0,
        "preamplifier.bandpass_ghz": 100.0,
        "launch.total_power_mw": 0.01,
        "receiver.filter": "gaussian",
    }
    point = _point(changes, FIBRES)
    _compare("a fibre for each realization", point)
    frozen = _point({**changes, "ensemble.fibres": "frozen"}, FIBRES)
    assert point.linear is not None
    assert frozen.linear is not None
    error = point.estimates["cross"].standard_error
    assert np.abs((point.linear.cross - frozen.linear.cross) / error).max() > 5.0


def _compare(path: str, point: PointResult) -> None:
    """Correlations of a point against the linear regime's, in standard errors."""
    linear = point.linear
    assert linear is not None
    for name in ("auto1", "auto2", "sum", "cross"):
        value, error = point.estimates[name]
        expected = getattr(linear, name)
        sure = error > 1e-6
        pull = (value - expected)[sure] / error[sure]
        check(
            f"light path, {path}: correlations at every lag",
            "Gaussian moment theorem; Goodman, Statistical Optics",
            np.abs(pull).max(),
            4.5,
            "σ",
        )
        np.testing.assert_allclose(value[~sure], expected[~sure], atol=1e-5)


def _point(changes: dict[str, Any], realizations: int, first_in: bool = True) -> PointResult:
    """The point of a study of one, carried out; tasks of a round in order or last first."""
    numbers = {
        "ensemble.min_realizations": realizations,
        "ensemble.max_realizations": realizations,
    }
    experiment = with_changes(Experiment(), {**GRID_CHANGES, **changes, **numbers})
    power = experiment.launch.total_power_mw
    study = Study(
        experiment=experiment,
        sweep=Sweep(points=1, start=power, stop=2.0 * power),
        variants=(Variant(name="only"),),
    )
    state = StudyState(study)
    waiting = [task for task in state.ready() if isinstance(task, RoundTask)]
    while waiting:
        task = waiting.pop(0 if first_in else -1)
        waiting += state.absorb(task, execute(task))  # type: ignore[arg-type]
    point = state.point(0, 0)
    assert point is not None
    assert point.outcome == "completed"
    return point


def test_drawn_fibres_give_the_same_bits_in_any_order() -> None:
    """With the Kerr effect, whatever order the tasks are carried out in."""
    changes = {
        "line.*.gamma_per_w_km": 2.5,
        "line.0.pmd_ps_per_sqrt_km": 2.0,
        "ensemble.fibres": "drawn",
    }
    one, other = (_point(changes, 80, first_in) for first_in in (True, False))
    for name, estimate in one.estimates.items():
        np.testing.assert_array_equal(estimate.value, other.estimates[name].value, err_msg=name)


def test_drawn_fibres_with_the_kerr_effect() -> None:
    """A bench of drawn fibres: realizations do not depend on the batch they travel in."""
    experiment = with_changes(
        Experiment(),
        {
            **GRID_CHANGES,
            "line.*.gamma_per_w_km": 2.5,
            "line.0.pmd_ps_per_sqrt_km": 2.0,
            "ensemble.fibres": "drawn",
            "ensemble.precision": "double",
        },
    )
    bench = Bench(experiment)
    whole = bench.passage.fields(range(6))
    schedule = (Leg(whole.shape[2], 64),)
    together = bench.follow(whole, range(6), schedule)
    apart = bench.follow(whole[3:5], range(3, 5), schedule)
    np.testing.assert_allclose(apart.moments[0], together.moments[0][3:5], rtol=1e-9)
    wrong = bench.follow(whole[3:5], range(2), schedule)
    shift = wrong.moments[0][:, -1] / apart.moments[0][:, -1] - 1.0
    assert np.abs(shift).max() > 1e-3
