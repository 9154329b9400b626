"""What stands behind the rows of ``crossdip bench``: the same problem both ways, no timing."""

import math
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from server import yardstick
from server.diagram import drawn
from server.yardstick import Rung
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


def test_a_ladder_falls_with_the_order_of_its_scheme() -> None:
    """Solver and script are held against the same truth, far below single precision."""
    ladder = yardstick.Ladder(50.0, 4096, FOURTH_ORDER, 1024)
    plain = yardstick.plain_script()
    for rungs, order in (
        (ladder.rungs(SECOND_ORDER, "double", [256, 512]), 2),
        (ladder.plain_rungs(plain, [256, 512]), 2),
        (ladder.rungs(FOURTH_ORDER, "double", [64, 128]), 4),
    ):
        assert math.log2(rungs[0].error / rungs[1].error) == pytest.approx(order, abs=0.2)
    assert ladder.rungs(SECOND_ORDER, "double", [32], parts=16)[0].transforms == 64


def test_transforms_are_read_between_rungs_on_logarithmic_axes() -> None:
    """And nowhere beyond them."""
    rungs = [Rung(n, 0.0, 4.0 / n**2) for n in (10, 100, 1000)]
    assert yardstick.transforms_at(4.0 / 30**2, rungs) == pytest.approx(30.0)
    assert math.isinf(yardstick.transforms_at(1e-9, rungs))
    assert math.isinf(yardstick.transforms_at(1.0, rungs))


def test_the_diagram_shows_every_curve() -> None:
    """Well-formed SVG; a steeper curve ends lower; names are text, not markup."""
    work = np.array([10.0, 100.0, 1000.0])
    curves = {
        "second <order>": [(float(n), float(n**-2.0)) for n in work],
        "fourth": [(float(n), float(n**-4.0)) for n in work],
    }
    root = ElementTree.fromstring(drawn("Title", curves, curves, switch=1e-4))
    name = "{http://www.w3.org/2000/svg}"
    words = [text.text for text in root.iter(f"{name}text")]
    assert {"Title", "second <order>", "fourth", "10³", "10⁻¹²"} <= set(words)
    dots = [
        (float(dot.get("cx", "")), float(dot.get("cy", ""))) for dot in root.iter(f"{name}circle")
    ]
    second, fourth = dots[:3], dots[3:6]
    assert len(dots) == 12
    assert second[0][0] < second[1][0] < second[2][0]
    assert fourth[2][1] > second[2][1] > second[0][1]
