"""Orders of the splitting schemes, with what they cost."""

import numpy as np
import pytest

from solver.experiment import Span
from solver.fibre import sections
from solver.grid import Grid
from solver.propagation import light_of
from solver.schemes import FOURTH_ORDER, SECOND_ORDER, Scheme
from solver.track import Track, Wave
from tests import reference
from tests.checks import check

SAMPLES, TIME_STEP_PS = 1024, 2.0
LINE = [
    Span(
        length_km=4.0,
        beta2_ps2_per_km=18.5,
        beta3_ps3_per_km=0.3,
        loss_db_per_km=0.2,
        gamma_per_w_km=2.3,
        coupling="linear_birefringent",
        delay_ps_per_km=1.0,
    ),
    Span(length_km=2.0, beta2_ps2_per_km=-5.0, gamma_per_w_km=1.5),
]


GRID = Grid(SAMPLES, TIME_STEP_PS)


class CountedTransforms:
    """The transforms of a wave, counting what the march really spends."""

    def __init__(self, wave: Wave) -> None:
        self._work = wave.work
        self.buffer = wave.work.buffer
        self.spent = 0

    def forward(self) -> None:
        self.spent += 1
        self._work.forward()

    def inverse(self) -> None:
        self.spent += 1
        self._work.inverse()


def _run(field: np.ndarray, scheme: Scheme, steps: int) -> tuple[np.ndarray, int, int]:
    """The field at the end, steps taken and transforms spent."""
    track = Track(sections(LINE, GRID, 1550.0, 0), GRID)
    pieces = track.pieces(track.weights(scheme, light_of(field)), steps)
    wave = Wave(field)
    counted = CountedTransforms(wave)
    wave.work = counted  # type: ignore[assignment]
    outcome = track.march(wave, pieces, scheme, edge_limit=1.0)
    assert outcome.kind == "completed"
    wave.settle()
    return wave.field.copy(), sum(piece.steps for piece in pieces), counted.spent


@pytest.mark.parametrize(
    ("scheme", "steps", "error_at_most", "transforms_at_most"),
    [
        (SECOND_ORDER, [60, 120, 240, 480], 1e-5, 980),
        (FOURTH_ORDER, [24, 36, 54, 81], 5e-8, 980),
    ],
    ids=["second", "fourth"],
)
def test_order_and_cost(
    scheme: Scheme, steps: list[int], error_at_most: float, transforms_at_most: int
) -> None:
    """The slope of error against steps is the order to ±0.2, at two transforms for each stage.

    Strang 1968 and Blanes and Moan 2002 state orders 2 and 4. The reference is the fourth-order
    scheme with many steps, itself held to DOP853 elsewhere.
    """
    field = reference.stirred_light(5, 2, SAMPLES, TIME_STEP_PS, 0.02, 0.2)
    exact, _, _ = _run(field, FOURTH_ORDER, 400)
    errors, taken, cheapest = [], [], {}
    for wanted in steps:
        found, count, spent = _run(field, scheme, wanted)
        assert spent == count * scheme.transforms_per_step == 2 * count * len(scheme.linear)
        errors.append(reference.relative_l2(found, exact))
        taken.append(count)
        cheapest[spent] = errors[-1]
    slope = np.polyfit(np.log(taken), np.log(errors), 1)[0]
    check(
        f"splitting of order {scheme.order}: fitted order",
        "Strang 1968"
        if scheme.order == 2
        else "Blanes and Moan, J. Comput. Appl. Math. 142 (2002)",
        abs(slope + scheme.order),
        0.2,
    )
    affordable = [error for spent, error in cheapest.items() if spent <= transforms_at_most]
    assert min(affordable) <= error_at_most


@pytest.mark.parametrize("scheme", [SECOND_ORDER, FOURTH_ORDER], ids=lambda s: s.name)
def test_schemes_are_consistent_and_symmetric(scheme: Scheme) -> None:
    """Each flow covers the whole step, and the step reads the same backwards."""
    assert sum(scheme.kerr) == pytest.approx(1.0, abs=1e-15)
    assert sum(scheme.linear) == pytest.approx(1.0, abs=1e-15)
    assert scheme.kerr == scheme.kerr[::-1]
    assert scheme.linear == scheme.linear[::-1]
    assert len(scheme.kerr) == len(scheme.linear) + 1


def test_second_order_is_the_plain_split_step() -> None:
    """Step for step the same as a plain numpy loop, so the putting-off of turns is harmless."""
    field = reference.stirred_light(6, 2, SAMPLES, TIME_STEP_PS, 0.02, 0.2)
    glass = reference.Glass(3.0, 18.5, 0.2, 0.05, 2.0, 1.0, 2 / 3, 0.7)
    track = Track(sections([glass.span()], GRID, 1550.0, 0), GRID)
    wave = Wave(field)
    pieces = track.pieces(track.weights(SECOND_ORDER, light_of(field)), 37)
    track.march(wave, pieces, SECOND_ORDER, edge_limit=1.0)
    wave.settle()
    plain = reference.split_step(field, TIME_STEP_PS, [glass], 37)
    assert reference.relative_l2(wave.field, plain) < 1e-12
