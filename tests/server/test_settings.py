"""Flags, environment, limits and the wording of refusals."""

from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from server.errors import OverLimit, SettingsError
from server.limits import check_study, refuse_oversize
from server.settings import Settings, read_settings
from server.validation import first_problem
from solver.experiment import Study
from tests.serving import TINY, tiny


def test_flags_win_over_the_environment_and_that_over_defaults() -> None:
    environment = {"CROSSDIP_PORT": "9000", "CROSSDIP_WORKERS": "3", "XDG_DATA_HOME": "/elsewhere"}
    chosen = read_settings({"port": "9001", "workers": None}, environment)
    assert (chosen.port, chosen.workers, chosen.max_points) == (9001, 3, 480)
    assert chosen.data == Path("/elsewhere/crossdip")


@pytest.mark.parametrize("text", ["", "x", "-1", "70000", "1e3", "80.0"])
def test_a_bad_number_names_its_flag_and_range(text: str) -> None:
    with pytest.raises(SettingsError, match=r"--port .*CROSSDIP_PORT.* from 0 to 65535"):
        read_settings({"port": text}, {})


def test_a_short_key_is_refused() -> None:
    with pytest.raises(SettingsError, match="16 characters"):
        read_settings({"access_key": "short"}, {})


@pytest.mark.parametrize(
    ("host", "loopback"),
    [("127.0.0.1", True), ("::1", True), ("localhost", True), ("127.8.9.1", True),
     ("0.0.0.0", False), ("::", False), ("192.0.2.7", False), ("lab", False)],
)  # fmt: skip
def test_only_loopback_counts_as_this_machine(host: str, loopback: bool) -> None:
    assert Settings(data=Path(), host=host).loopback is loopback


@pytest.mark.parametrize(
    ("body", "where", "flag"),
    [
        ({"experiment": {"ensemble": {"samples": 10**9}}},
         "experiment.ensemble.samples", "max-samples"),
        ({"experiment": {"ensemble": {"samples": 1e30}}},
         "experiment.ensemble.samples", "max-samples"),
        ({"experiment": {"ensemble": {"max_realizations": 10**6}}},
         "experiment.ensemble.max_realizations", "max-realizations"),
        ({"sweep": {"points": 10**6}}, "sweep.points", "max-points"),
        ({"sweep": {"points": 200}}, "sweep.points", "max-points"),
        ({"variants": [{"changes": {"ensemble.samples": 2**22}}]},
         "variants.0.changes.samples", "max-samples"),
    ],
)  # fmt: skip
def test_an_oversize_study_is_refused_with_the_limit_and_the_flag(
    body: dict[str, Any], where: str, flag: str
) -> None:
    with pytest.raises(OverLimit, match=f"--{flag}") as caught:
        refuse_oversize(body, Settings(data=Path()))
    assert caught.value.where == where


@pytest.mark.parametrize("body", [None, [], 3, {"experiment": 1}, {"variants": [1, None]}, {}])
def test_what_is_no_study_is_left_to_validation(body: object) -> None:
    refuse_oversize(body, Settings(data=Path()))


def test_the_headline_study_is_within_the_limits() -> None:
    check_study(Study(), Settings(data=Path()))


def _refused(body: Any) -> tuple[str, str, str]:
    with pytest.raises(ValidationError) as caught:
        Study.model_validate(body)
    problem = first_problem(caught.value.errors(), Study)
    return problem.code, problem.where, problem.message


def _source(**values: Any) -> dict[str, Any]:
    return {"experiment": {"source": values}}


def _span(**values: Any) -> dict[str, Any]:
    study = tiny()
    study["experiment"]["line"][0] |= values
    return study


@pytest.mark.parametrize(
    ("body", "code", "where", "words"),
    [
        (_source(width_ghz=-1), "out_of_range", "experiment.source.width_ghz",
         "Width must be a number from 0.1 to 5000 GHz, not -1"),
        (_source(width_ghz=float("nan")), "out_of_range", "experiment.source.width_ghz",
         "from 0.1 to"),
        (_source(width_ghz="wide"), "wrong_type", "experiment.source.width_ghz", 'not "wide"'),
        (_source(order=1.5), "wrong_type", "experiment.source.order",
         "a whole number from 1 to 20"),
        (_source(shape="round"), "out_of_range", "experiment.source.shape", "one of gaussian,"),
        (_source(widht_ghz=20), "unknown_parameter", "experiment.source.widht_ghz",
         "did you mean width_ghz?"),
        ({"experiment": {"line": [{}]}}, "missing", "experiment.line.0.length_km",
         "Length is missing: give a number from 1e-06 to 10000 km"),
        (_span(beta2_ps2_per_km=18), "contradiction", "experiment.line.0.beta2_ps2_per_km",
         "keep one of them"),
        ({"experiment": {"line": []}}, "out_of_range", "experiment.line", "at least 1 item"),
        ({"experiment": {"ensemble": {"samples": 1000}}}, "contradiction",
         "experiment.ensemble.samples", "1024 is the nearest"),
        ({"experiment": {"source": {"width_ghz": 400}, "ensemble": {"samples": 1024}}},
         "contradiction", "experiment.ensemble.samples", "does not fit"),
        ({"sweep": {"parameter": "launch.colour"}}, "contradiction", "sweep.parameter",
         "not a numeric parameter"),
        ({"variants": [{"name": "a", "changes": {"launch.colour": 1}}]}, "contradiction",
         "variants.0.changes", "names no parameter"),
        ([], "wrong_type", "", "the body"),
    ],
)  # fmt: skip
def test_every_refusal_names_the_field_its_range_and_what_was_given(
    body: Any, code: str, where: str, words: str
) -> None:
    found_code, found_where, message = _refused(body)
    assert (found_code, found_where) == (code, where), message
    assert words in message


def test_the_tiny_study_is_valid() -> None:
    assert Study.model_validate(TINY).sweep.points == 2
