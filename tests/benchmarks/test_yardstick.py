"""What stands behind the rows of ``crossdip bench``: the same problem both ways, no timing."""

import math
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from server import ladder, yardstick
from server.diagram import Row, drawn
from server.ladder import Rung
from solver.experiment import Study
from solver.schemes import FOURTH_ORDER, SECOND_ORDER


def test_both_ways_of_one_propagation_end_at_the_same_field() -> None:
    """The script is loaded from the tree, and given the fibre that the solver is given."""
    plain = yardstick.plain_script()
    assert plain is not None
    one = yardstick.single_propagation(plain, power_mw=50.0, tolerance=1e-4)
    assert max(one.error, one.plain_error) <= 1e-4
    assert one.apart <= 1.1 * (one.error + one.plain_error)
    assert min(one.solver_s, one.plain_s) > 0.0


def test_without_the_source_tree_there_is_no_script(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An installed package has no tests beside it."""
    monkeypatch.setattr(yardstick, "_PATH", tmp_path / "plain.py")
    assert yardstick.plain_script() is None


def test_the_script_is_charged_the_realizations_that_plain_averages_need() -> None:
    """More of them than a study that knows its launch, on the same light; steps as few as do."""
    study = Study.model_validate(
        {
            "experiment": {"ensemble": {"samples": 1024, "window_ps": 2048.0, "distances": 4}},
            "sweep": {"points": 2, "start": 20.0, "stop": 100.0},
            "variants": [{"name": "only"}],
        }
    )
    state = yardstick.computed(study)
    plain = yardstick.plain_script()
    assert plain is not None
    script = yardstick.plain_study(plain, state, 1)
    points = state.result().points[0]
    assert script.study_realizations == sum(point.realizations for point in points)
    assert script.realizations > script.study_realizations
    assert script.cpu_s > script.equal_cpu_s > 0.0
    assert 1 <= script.fewest_steps < script.most_steps


def test_the_transforms_of_a_task_are_those_it_counts() -> None:
    """What a task is held against are its own transforms, on the grids of its own legs."""
    later = yardstick.later_task(200.0)
    spent = sum(
        sum(piece.steps for piece in later.passage.pieces(leg)[index])
        * later.passage.scheme.transforms_per_step
        for index, leg in enumerate(later.schedule)
    )
    counted = sum(yardstick.run_round(later.task).transforms)
    assert counted == spent * len(later.batches())


def test_a_ladder_falls_with_the_order_of_its_scheme() -> None:
    """Solver and script are held against the same truth, far below single precision."""
    steps = ladder.Ladder(50.0, 4096, FOURTH_ORDER, 1024)
    plain = yardstick.plain_script()
    assert plain is not None
    for rungs, order in (
        (steps.rungs(SECOND_ORDER, "double", [256, 512]), 2),
        (steps.plain_rungs(plain, [256, 512]), 2),
        (steps.rungs(FOURTH_ORDER, "double", [32, 64]), 4),
    ):
        assert math.log2(rungs[0].error / rungs[1].error) == pytest.approx(order, abs=0.2)
    ours, weighed = steps.study_rung()
    assert 0.0 < weighed <= ours.transforms
    assert ours.error < Study().experiment.ensemble.field_tolerance


def test_work_is_read_between_rungs_on_logarithmic_axes() -> None:
    """And nowhere beyond them."""
    rungs = [Rung(n, 2.0 * n, 4.0 / n**2) for n in (10, 100, 1000)]
    assert ladder.work_at(4.0 / 30**2, rungs, ladder.of_transforms) == pytest.approx(30.0)
    assert ladder.work_at(4.0 / 30**2, rungs, ladder.of_time) == pytest.approx(60.0)
    assert math.isinf(ladder.work_at(1e-9, rungs, ladder.of_time))
    assert math.isinf(ladder.work_at(1.0, rungs, ladder.of_time))


def test_the_crossing_of_two_orders() -> None:
    """Second order with n⁻² and fourth with n⁻⁴ at three times the work meet at an error of 3⁻⁴."""
    second = [Rung(0, n, n**-2.0) for n in (1.0, 1e2, 1e4)]
    fourth = [Rung(0, 3.0 * n, n**-4.0) for n in (1.0, 10.0, 1e2)]
    case = ladder.Case(second, fourth, [], [], second[0], 1.0)
    assert case.crossing() == pytest.approx(3.0**-4, rel=0.3)
    assert [name for name, _ in case.curves()][:2] == [
        "second order, double",
        "fourth order, double",
    ]


def test_the_diagram_shows_every_curve() -> None:
    """Well-formed SVG; a steeper curve ends lower; names are text, not markup."""
    work = np.array([10.0, 100.0, 1000.0])
    curves = {
        "second <order>": [(float(n), float(n**-2.0)) for n in work],
        "fourth": [(float(n), float(n**-4.0)) for n in work],
    }
    rows = [Row("low", curves, curves), Row("high", curves, curves)]
    root = ElementTree.fromstring(drawn("Title", rows, switch=1e-4, remarks=["Why."]))
    name = "{http://www.w3.org/2000/svg}"
    words = [text.text for text in root.iter(f"{name}text")]
    assert {"Title", "low", "high", "Why.", "second <order>", "10³", "10⁻¹²"} <= set(words)
    dots = [
        (float(dot.get("cx", "")), float(dot.get("cy", ""))) for dot in root.iter(f"{name}circle")
    ]
    second, fourth = dots[:3], dots[3:6]
    assert len(dots) == 24
    assert second[0][0] < second[1][0] < second[2][0]
    assert fourth[2][1] > second[2][1] > second[0][1]
    assert dots[12][1] > dots[11][1]
