"""Any input is either a valid study or an error at the right place, never a crash."""

import json
import math
from itertools import pairwise
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import BaseModel, ValidationError

from solver.experiment import (
    Contradiction,
    Ensemble,
    Experiment,
    Launch,
    Receiver,
    Relation,
    Source,
    Span,
    Study,
    Sweep,
    numeric_parameters,
    with_changes,
)

many = settings(max_examples=60, deadline=None, derandomize=True, database=None)
STAGES: dict[str, type[BaseModel]] = {
    "source": Source,
    "relation": Relation,
    "launch": Launch,
    "line.0": Span,
    "receiver": Receiver,
    "ensemble": Ensemble,
}
SPAN = {"length_km": 8.0, "dispersion_ps_per_nm_km": -13.0}


def _bounded() -> list[tuple[str, str, str, float]]:
    """(stage, name, rule, limit) of every bound of every parameter."""
    return [
        (stage, name, kind, float(limit))
        for stage, model in STAGES.items()
        for name, field in model.model_fields.items()
        for rule in field.metadata
        for kind in ("ge", "le")
        if (limit := getattr(rule, kind, None)) is not None
    ]


def _errors(stage: str, name: str, value: Any) -> list[tuple[str, ...]]:
    """Where a study with one parameter replaced is refused."""
    tree: dict[str, Any] = {"line": [dict(SPAN)]}
    if stage == "line.0":
        tree["line"][0][name] = value
    else:
        tree[stage] = {name: value}
    with pytest.raises(ValidationError) as caught:
        Experiment.model_validate(tree)
    return [tuple(str(part) for part in error["loc"]) for error in caught.value.errors()]


def test_every_number_is_bounded() -> None:
    """Both ends of every number, so that no input can ask for the impossible."""
    ends = {(stage, name): set() for stage, name, _, _ in _bounded()}
    for stage, name, kind, _ in _bounded():
        ends[stage, name].add(kind)
    for stage, model in STAGES.items():
        for name, field in model.model_fields.items():
            if field.annotation in (int, float, float | None):
                assert ends.get((stage, name)) == {"ge", "le"}, f"{stage}.{name}"


@pytest.mark.parametrize(("stage", "name", "kind", "limit"), _bounded())
def test_out_of_range_is_refused_at_its_place(
    stage: str, name: str, kind: str, limit: float
) -> None:
    """A little past the bound, far past it, infinite, NaN and not a number at all."""
    sign = -1 if kind == "ge" else 1
    step = max(1.0, abs(limit))
    for value in (limit + sign * step, sign * 1e300, sign * math.inf, math.nan, "wide", [1], {}):
        where = (*stage.split("."), name)
        assert where in _errors(stage, name, value)


@pytest.mark.parametrize("stage", STAGES)
def test_unknown_names_are_refused_at_their_place(stage: str) -> None:
    """A misspelt parameter is not silently dropped."""
    assert (*stage.split("."), "powr") in _errors(stage, "powr", 1.0)


@pytest.mark.parametrize(
    ("tree", "where"),
    [
        ({"line": [{"length_km": 1.0}]}, "dispersion_ps_per_nm_km"),
        ({"line": [SPAN | {"beta2_ps2_per_km": 1.0}]}, "beta2_ps2_per_km"),
        ({"line": [SPAN | {"coupling": "custom"}]}, "self_coefficient"),
        ({"line": [SPAN | {"cross_coefficient": 1.0}]}, "cross_coefficient"),
        (
            {"line": [SPAN | {"coupling": "uncoupled", "pmd_ps_per_sqrt_km": 0.1}]},
            "pmd_ps_per_sqrt_km",
        ),
        ({"ensemble": {"samples": 1000}}, "samples"),
        ({"ensemble": {"min_realizations": 100, "max_realizations": 50}}, "max_realizations"),
        ({"ensemble": {"max_lag_ps": 5000.0}}, "max_lag_ps"),
        ({"ensemble": {"field_tolerance": 1e-5}}, "field_tolerance"),
        ({"source": {"width_ghz": 500.0}}, "ensemble.samples"),
        ({"source": {"width_ghz": 0.5}}, "ensemble.window_ps"),
        ({"relation": {"kind": "hilbert", "notch_ghz": 30.0}}, "relation.notch_ghz"),
    ],
)
def test_contradictions_name_the_one_to_change(tree: dict[str, Any], where: str) -> None:
    """Each is a Contradiction with a path and a text that says what to do."""
    with pytest.raises(ValidationError) as caught:
        Experiment.model_validate(tree)
    error = caught.value.errors()[0]
    contradiction = error["ctx"]["error"]
    assert isinstance(contradiction, Contradiction)
    assert contradiction.where == where
    assert len(str(contradiction)) > 20


JSON = st.recursive(
    st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=8),
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3)
    ),
    max_leaves=6,
)
PATHS = [path.replace("*", "0") for path, _, _ in numeric_parameters()] + [
    "relation.kind",
    "source.shape",
    "line.*.coupling",
    "line",
    "line.7.loss_db_per_km",
    "ensemble.samples",
    "nowhere",
    "",
    "..",
]


@many
@given(st.dictionaries(st.sampled_from(PATHS), JSON, max_size=3))
def test_any_change_is_valid_or_an_error(changes: dict[str, Any]) -> None:
    """with_changes raises what it says, and what it returns is in range."""
    try:
        made = with_changes(Experiment(), changes)
    except (Contradiction, ValidationError):
        return
    again = Experiment.model_validate_json(made.model_dump_json())
    assert again == made


@many
@given(
    st.fixed_dictionaries(
        {},
        optional={
            "experiment": JSON,
            "sweep": JSON
            | st.fixed_dictionaries(
                {},
                optional={
                    "parameter": st.sampled_from(PATHS),
                    "start": st.floats(),
                    "stop": st.floats(),
                    "points": st.integers(-1, 20_000),
                    "spacing": st.sampled_from(["log", "linear", "cubic"]),
                },
            ),
            "variants": JSON
            | st.lists(
                st.fixed_dictionaries(
                    {"name": st.text(max_size=3)},
                    optional={"changes": st.dictionaries(st.sampled_from(PATHS), JSON, max_size=2)},
                ),
                max_size=3,
            ),
        },
    )
)
def test_any_study_is_valid_or_an_error(tree: dict[str, Any]) -> None:
    """A refused study is a ValidationError; an accepted one survives JSON with its identity."""
    try:
        study = Study.model_validate(tree)
    except ValidationError:
        return
    again = Study.model_validate(json.loads(study.model_dump_json()))
    assert again == study
    assert again.identity == study.identity
    study.experiment_at(len(study.curves) - 1, study.sweep.points - 1)


@many
@given(
    st.floats(1e-3, 1e4),
    st.floats(1e-3, 1e4),
    st.integers(2, 200),
    st.sampled_from(["log", "linear"]),
)
def test_sweep_values_are_monotone_and_inside(
    start: float, stop: float, points: int, spacing: Any
) -> None:
    """From one end to the other, never past either, in either direction."""
    if math.isclose(start, stop, rel_tol=1e-6):
        stop = 2.0 * start
    values = Sweep(start=start, stop=stop, points=points, spacing=spacing).values()
    assert len(values) == points
    assert math.isclose(values[0], start, rel_tol=1e-11)
    assert math.isclose(values[-1], stop, rel_tol=1e-11)
    rising = [b - a if stop > start else a - b for a, b in pairwise(values)]
    assert all(step >= 0.0 for step in rising)
    low, high = sorted((start, stop))
    assert all(low * (1 - 1e-11) <= value <= high * (1 + 1e-11) for value in values)


@pytest.mark.parametrize(
    ("study", "where", "says"),
    [
        ({"variants": [{"name": "a"}, {"name": "a"}]}, "variants", "same name"),
        (
            {"variants": [{"name": "a", "changes": {"ensemble.samples": 8192}}]},
            "variants.0.changes",
            "axis that all variants share",
        ),
        (
            {"variants": [{"name": "a", "changes": {"ensemble": {"distances": 8}}}]},
            "variants.0.changes",
            "axis that all variants share",
        ),
        (
            {"variants": [{"name": "a"}, {"name": "b", "changes": {"launch.power": 1}}]},
            "variants.1.changes",
            "names no parameter",
        ),
        (
            {"variants": [{"name": "a", "changes": {"launch.share_1": 2}}]},
            "variants.0.changes",
            "less than or equal to 1",
        ),
        ({"sweep": {"stop": 1e9}}, "sweep", "less than or equal to 100000"),
        ({"sweep": {"parameter": "ensemble.seed"}}, "parameter", "not a numeric parameter"),
        ({"sweep": {"start": -1.0}}, "start", "choose linear"),
        ({"sweep": {"start": 800.0}}, "stop", "stop must differ"),
    ],
)
def test_contradictions_of_a_study(study: dict[str, Any], where: str, says: str) -> None:
    """Variants and sweep ends are tried out before anything runs."""
    with pytest.raises(ValidationError) as caught:
        Study.model_validate(study)
    contradiction = caught.value.errors()[0]["ctx"]["error"]
    assert isinstance(contradiction, Contradiction)
    assert contradiction.where == where
    assert says in str(contradiction)


def test_limits_of_size() -> None:
    """10⁹ samples or 10⁶ points are refused at their field, with the limit."""
    for tree, name, limit in (
        ({"experiment": {"ensemble": {"samples": 10**9}}}, "samples", "4194304"),
        ({"sweep": {"points": 10**6}}, "points", "10000"),
    ):
        with pytest.raises(ValidationError) as caught:
            Study.model_validate(tree)
        error = caught.value.errors()[0]
        assert error["loc"][-1] == name
        assert limit in error["msg"]


def test_identity_depends_on_everything() -> None:
    """A seed, a name, a bound: any change is another study; the same study is the same run."""
    base = Study()
    assert base.identity == Study().identity == Study.model_validate({}).identity
    others = [
        Study(experiment=with_changes(Experiment(), {"ensemble.seed": 21})),
        Study(sweep=Sweep(points=13)),
        Study(variants=base.variants[:2]),
    ]
    assert len({base.identity, *(other.identity for other in others)}) == 4
