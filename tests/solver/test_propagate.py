"""The contract of ``propagate``: accuracy against independent integration, outcomes, arguments."""

from typing import Any

import numpy as np
import pytest

from solver.experiment import COUPLING_COEFFICIENTS, Precision, Span
from solver.propagation import propagate
from tests import reference
from tests.checks import check
from tests.reference import Glass

TIME_STEP_PS = 1.0


def _light(samples: int = 256, power_w: float = 0.05, realizations: int = 1) -> np.ndarray:
    return reference.stirred_light(11, realizations, samples, TIME_STEP_PS, 0.015, power_w)


def _line(own: float, other: float) -> list[Glass]:
    """Three unlike spans with every term of the equation in them."""
    return [
        Glass(2.0, 18.0, 0.4, 0.05, 2.5, own, other, 1.5),
        Glass(1.0, -6.0, -0.8, 0.0, 1.2, own, other, -3.0),
        Glass(1.5, 9.0, 0.0, 0.11, 4.0, own, other, 0.0),
    ]


@pytest.mark.parametrize(
    ("own", "other"),
    [*COUPLING_COEFFICIENTS.values(), (1.0, 3.0)],
    ids=[*COUPLING_COEFFICIENTS, "custom"],
)
def test_agrees_with_an_independent_integrator(own: float, other: float) -> None:
    """scipy's DOP853 in the interaction picture, written from the equation: 1e-8."""
    field = _light()
    line = _line(own, other)
    exact = reference.integrate(field[0], TIME_STEP_PS, line, rtol=1e-11)
    out = propagate(
        field, time_step_ps=TIME_STEP_PS, line=[glass.span() for glass in line], tolerance=5e-9
    )
    assert out.outcome.kind == "completed"
    check(
        "propagate, three unlike spans, every coupling: field",
        "DOP853 of scipy in the interaction picture",
        reference.relative_l2(out.field[0], exact),
        1e-8,
    )


def test_the_integrator_solves_the_equation() -> None:
    """The oracle against the plain split step and against the terms of the equation."""
    line = _line(1.0, 2 / 3)
    field = _light()[0]
    exact = reference.integrate(field, TIME_STEP_PS, line[:1], rtol=1e-10)
    errors = [
        reference.relative_l2(
            reference.split_step(field[None], TIME_STEP_PS, line[:1], n)[0], exact
        )
        for n in (50, 100, 200)
    ]
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.02)
    assert errors[1] / errors[2] == pytest.approx(4.0, rel=0.02)
    short = Glass(1e-4, 18.0, 0.4, 0.05, 2.5, 1.0, 2 / 3, 1.5)
    moved = reference.integrate(field, TIME_STEP_PS, [short], rtol=1e-12)
    middle = reference.integrate(
        field, TIME_STEP_PS, [Glass(5e-5, 18.0, 0.4, 0.05, 2.5, 1.0, 2 / 3, 1.5)], rtol=1e-12
    )
    slope = reference.right_side(middle, TIME_STEP_PS, short)
    assert reference.relative_l2((moved - field) / 1e-4, slope) < 1e-6


@pytest.mark.parametrize(
    ("tolerance", "precision"),
    [
        (1e-2, "single"),
        (1e-3, "single"),
        (1e-2, "double"),
        (1e-3, "double"),
        (1e-4, "double"),
        (1e-5, "double"),
        (1e-6, "double"),
        (1e-7, "double"),
        (1e-8, "double"),
    ],
)
@pytest.mark.parametrize("power_w", [0.005, 0.1])
def test_tolerance_is_met(tolerance: float, precision: Precision, power_w: float) -> None:
    """For every realization, against a run at a far tighter tolerance; and not by gross waste."""
    field = _light(1024, power_w, 3)
    line = [
        Span(
            length_km=6.0,
            dispersion_ps_per_nm_km=-13.0,
            loss_db_per_km=0.24,
            gamma_per_w_km=2.5,
            delay_ps_per_km=0.5,
        )
    ]
    exact = propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-10)
    out = propagate(
        field, time_step_ps=TIME_STEP_PS, line=line, tolerance=tolerance, precision=precision
    )
    assert exact.outcome.kind == out.outcome.kind == "completed"
    errors = [reference.relative_l2(a, b) for a, b in zip(out.field, exact.field, strict=True)]
    assert max(errors) <= tolerance
    assert out.error <= tolerance
    assert max(errors) > 1e-4 * tolerance or out.steps < 20


def test_tolerance_is_met_where_only_loss_and_kerr_meet() -> None:
    """A lossy line without dispersion still has to be stepped."""
    glass = Glass(20.0, alpha=0.07, gamma=2.0)
    field = np.exp(-(reference.time_axis(1024, 1.0) ** 2) / 5000.0) * np.ones((1, 2, 1))
    effective = -np.expm1(-0.07 * 20.0) / 0.07
    exact = reference.kerr_rotation(field, *(2 * [2.0 * 8 / 9 * effective])) * np.exp(-0.7)
    for tolerance in (1e-2, 1e-5, 1e-9):
        out = propagate(field, time_step_ps=1.0, line=[glass.span()], tolerance=tolerance)
        assert out.outcome.kind == "completed"
        check(
            "propagate, loss and Kerr effect alone: field, of the tolerance asked",
            "Kerr phase over the effective length; Agrawal, Nonlinear Fiber Optics, ch. 4",
            reference.relative_l2(out.field, exact) / tolerance,
            1.0,
        )


def test_an_error_is_measured_however_many_snapshots_cut_the_line() -> None:
    """With one step between snapshots two runs would be the same, and measure nothing."""
    field = _light(1024, 0.05)
    line = [Glass(5.0, 18.0, gamma=2.5).span()]
    exact = propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-10)
    for count in (3, 40, 120):
        out = propagate(
            field,
            time_step_ps=TIME_STEP_PS,
            line=line,
            tolerance=1e-2,
            snapshots_km=[5.0 * i / count for i in range(count + 1)],
        )
        assert out.outcome.kind == "completed"
        assert 0.0 < out.error <= 1e-2
        measured = reference.relative_l2(out.field, exact.field)
        assert measured == pytest.approx(out.error, rel=0.5)


def test_single_precision_agrees_with_double() -> None:
    """Rounding leaves a field error near 1e-4 and moves nothing else."""
    field = _light(1024, 0.1, 2)
    line = [Glass(6.0, 17.0, alpha=0.05, gamma=2.5).span()]
    fields = [
        propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-3, precision=p).field
        for p in ("single", "double")
    ]
    assert fields[0].dtype == np.complex64
    assert fields[1].dtype == np.complex128
    assert reference.relative_l2(fields[0], fields[1]) < 2e-4


def test_snapshots_are_the_field_there() -> None:
    """Each equals a run of its own that ends there; ends included, phases too."""
    field = _light(512, 0.1, 6)
    line = _line(8 / 9, 8 / 9)
    spans = [glass.span() for glass in line]
    at = [0.0, 1.3, 2.0, 2.5, 4.5]
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=spans, tolerance=1e-8, snapshots_km=at)
    assert out.snapshots is not None
    assert out.snapshots.shape == (5, 6, 2, 512)
    np.testing.assert_array_equal(out.z_km, at)
    np.testing.assert_array_equal(out.snapshots[0], field)
    np.testing.assert_array_equal(out.snapshots[-1], out.field)
    cut = {
        1.3: [Glass(**{**vars(line[0]), "length_km": 1.3})],
        2.0: line[:1],
        2.5: [line[0], Glass(**{**vars(line[1]), "length_km": 0.5})],
    }
    for z, part in cut.items():
        alone = propagate(
            field, time_step_ps=TIME_STEP_PS, line=[g.span() for g in part], tolerance=1e-8
        )
        assert reference.relative_l2(out.snapshots[at.index(z)], alone.field) < 3e-8
    bare = propagate(field, time_step_ps=TIME_STEP_PS, line=spans, tolerance=1e-8)
    assert bare.snapshots is None
    np.testing.assert_array_equal(bare.z_km, [4.5])


def test_the_input_is_left_alone_and_batches_do_not_matter() -> None:
    """A realization propagates alike whoever its neighbours are, to the tolerance."""
    field = _light(256, 0.1, 9)
    before = field.copy()
    line = [Glass(3.0, 17.0, gamma=2.5).span()]
    together = propagate(field, time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-7).field
    np.testing.assert_array_equal(field, before)
    for row in (0, 8):
        alone = propagate(
            field[row : row + 1], time_step_ps=TIME_STEP_PS, line=line, tolerance=1e-7
        ).field
        assert reference.relative_l2(alone[0], together[row]) < 2e-7


def test_darkness_and_glass_without_effect() -> None:
    """No light stays no light; a line that does nothing gives the field back."""
    dark = np.zeros((2, 2, 64), dtype=complex)
    active = Glass(3.0, 17.0, alpha=0.1, gamma=2.5).span()
    out = propagate(dark, time_step_ps=TIME_STEP_PS, line=[active])
    assert out.outcome.kind == "completed"
    assert not out.field.any()
    field = _light()
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[Glass(3.0).span()])
    assert reference.relative_l2(out.field, field) < 1e-14


def _outcome(field: np.ndarray, **changes: Any) -> tuple[str, str, float | None]:
    span = {"length_km": 5.0, "beta2_ps2_per_km": 17.0, "gamma_per_w_km": 2.5}
    span |= {k: changes.pop(k) for k in list(changes) if k in Span.model_fields}
    out = propagate(field, time_step_ps=TIME_STEP_PS, line=[Span(**span)], **changes)
    return out.outcome.kind, out.outcome.advice, out.outcome.z_km


def test_outcome_under_resolved() -> None:
    """An input that fills its band is refused at the launch, with the time step to use."""
    stream = np.random.default_rng(1)
    white = stream.standard_normal((1, 2, 256)) + 0j
    kind, advice, z_km = _outcome(white, tolerance=1e-2)
    assert kind == "under_resolved"
    assert z_km == 0.0
    assert "use a time step of 0.5 ps or less" in advice


def test_outcome_aliased() -> None:
    """A spectrum that grows into the edges is stopped there, with the samples to use."""
    kind, advice, z_km = _outcome(_light(256, 20.0), tolerance=1e-2)
    assert kind == "aliased"
    assert z_km is not None
    assert 0.0 < z_km <= 5.0
    assert "use at least 512 samples" in advice
    finer = reference.stirred_light(11, 1, 256, TIME_STEP_PS, 0.015, 0.1)
    assert _outcome(finer, tolerance=1e-2)[0] == "completed"


def test_outcome_non_finite() -> None:
    """Powers past what the arithmetic holds are named, not returned as a curve."""
    field = 1e19 * _light(256, 1.0)
    kind, advice, _ = _outcome(field, tolerance=1e-2, precision="single")
    assert kind == "non_finite"
    assert "power" in advice


def test_outcome_tolerance_not_met() -> None:
    """Single precision cannot give ten digits, and says so instead of going on for ever."""
    kind, advice, _ = _outcome(_light(1024, 0.05), tolerance=1e-7, precision="single")
    assert kind == "tolerance_not_met"
    assert "double precision" in advice


def test_outcome_too_many_steps() -> None:
    """A line that would take for ever is given up before it is begun."""
    kind, advice, _ = _outcome(_light(), gamma_per_w_km=9e3, length_km=9e3, tolerance=1e-6)
    assert kind == "tolerance_not_met"
    assert "shorten the line" in advice


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"tolerance": 0.0}, "tolerance must lie between"),
        ({"tolerance": np.nan}, "tolerance must lie between"),
        ({"time_step_ps": 0.0}, "time_step_ps must be positive"),
        ({"time_step_ps": np.inf}, "time_step_ps must be positive"),
        ({"precision": "half"}, "precision must be 'single' or 'double'"),
        ({"line": []}, "at least one span"),
        ({"snapshots_km": [2.0, 1.0]}, "snapshots_km must ascend"),
        ({"snapshots_km": [1.0, 1.0]}, "snapshots_km must ascend"),
        ({"snapshots_km": [-1.0]}, "within 0 to 3 km"),
        ({"snapshots_km": [3.1]}, "within 0 to 3 km"),
        ({"snapshots_km": [np.nan]}, "snapshots_km must ascend"),
        ({"field": np.zeros((2, 64))}, "shape"),
        ({"field": np.zeros((1, 3, 64))}, "shape"),
        ({"field": np.zeros((0, 2, 64))}, "shape"),
        ({"field": np.zeros((1, 2, 63))}, "even number of samples"),
        ({"field": np.full((1, 2, 64), np.nan)}, "finite"),
        ({"field": np.full((1, 2, 64), 1e40)}, "must stay within"),
    ],
)
def test_bad_arguments(changes: dict[str, Any], message: str) -> None:
    """A ValueError that names the argument and what it may be."""
    arguments: dict[str, Any] = {
        "field": np.ones((1, 2, 64)),
        "time_step_ps": 2.0,
        "line": [Glass(3.0, 17.0, gamma=1.0).span()],
        **changes,
    }
    with pytest.raises(ValueError, match=message):
        propagate(arguments.pop("field"), **arguments)
