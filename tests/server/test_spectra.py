"""Import of measured spectra and the catalogue of fibres, over HTTP."""

import math
from typing import Any

import httpx
import pytest

from server.middleware import UPLOAD_LIMIT_BYTES
from solver.catalogue import KINDS
from solver.experiment import Experiment, Study
from tests.serving import LiveServer, tiny


def _trace(points: int = 601) -> str:
    """A Gaussian of 0.2 nm at 1552 nm, 60 dB above its floor, dBm over nm."""
    rows = ["Wavelength (nm);Level (dBm)"]
    for index in range(points):
        away_nm = 6.0 * index / (points - 1) - 3.0
        power = math.exp(-4.0 * math.log(2.0) * (away_nm / 0.2) ** 2) + 1e-6
        rows.append(f"{1552.0 + away_nm:.4f};{10.0 * math.log10(power):.3f}")
    return "\n".join(rows)


def _send(server: LiveServer, body: str | bytes, **choices: Any) -> httpx.Response:
    return server.client.post("/api/spectra", content=body, params=choices)


def _refusal(response: httpx.Response, status: int, code: str, where: str) -> str:
    assert response.status_code == status, response.text
    error = response.json()["error"]
    assert set(response.json()) == {"error"}
    assert (error["code"], error["where"]) == (code, where)
    return str(error["message"])


def test_a_file_becomes_a_source_that_runs(server: LiveServer) -> None:
    """What comes back is put into a study as it is."""
    response = _send(server, _trace(), floor_db=50, name="bench trace")
    assert response.status_code == 200, response.text
    answer = response.json()
    assert answer["source"]["shape"] == "measured"
    assert answer["source"]["measured"]["name"] == "bench trace"
    assert answer["source"]["wavelength_nm"] == pytest.approx(1552.0, abs=1e-3)
    assert any("dBm (from the header)" in remark for remark in answer["remarks"])
    assert len(answer["preview"]["offset_ghz"]) == len(answer["preview"]["density"]) <= 400
    assert max(answer["preview"]["density"]) == 1.0
    study = tiny(77)
    study["experiment"]["source"] = answer["source"]
    assert Study.model_validate(study).experiment.source.measured is not None
    row = server.wait(server.post(study), "done", "failed")
    assert row["state"] == "done"


def test_overlaid_spectra_differ_in_one_line(server: LiveServer) -> None:
    """Not in one for each of their points."""
    traces = []
    for seed, floor_db in ((78, 50), (78, 40)):
        study = tiny(seed)
        answer = _send(server, _trace(), floor_db=floor_db, name="trace").json()
        study["experiment"]["source"] = answer["source"]
        traces.append(f"{server.post(study)}:0")
    rows = server.get("/api/overlay", params={"curve": traces})["differences"]
    (row,) = [row for row in rows if "measured" in row["path"]]
    assert row["path"] == "experiment.source.measured"
    assert row["title"] == "Measured spectrum"
    assert all(value.startswith("trace: ") for value in row["values"])
    assert len(set(row["values"])) == 2


def test_a_floor_is_suggested(server: LiveServer) -> None:
    assert _send(server, _trace()).json()["suggested"]["floor_db"] == pytest.approx(60.0, abs=0.11)
    assert _send(server, _trace(), floor_db=50).json()["suggested"]["floor_db"] is None


def test_the_preview_of_many_points_keeps_the_top(server: LiveServer) -> None:
    answer = _send(server, _trace(60_001)).json()
    assert len(answer["source"]["measured"]["offset_ghz"]) == 2048
    assert len(answer["preview"]["offset_ghz"]) <= 400
    assert max(answer["preview"]["density"]) == 1.0


def test_offsets_bring_no_wavelength(server: LiveServer) -> None:
    """The carrier of the study then stays as it is."""
    answer = _send(server, "-20 0\n-5 2\n5 2\n20 0", level="linear").json()
    assert "wavelength_nm" not in answer["source"]


def test_refusals_name_line_and_choice(server: LiveServer) -> None:
    """In the one shape of errors; ``where`` is the choice that would have the file taken."""
    broken = _trace().replace("1551.0000", "interrupted", 1)
    message = _refusal(_send(server, broken), 422, "unreadable", "strays")
    assert "line 202" in message
    assert _send(server, broken, strays="skip").status_code == 200
    assert "empty" in _refusal(_send(server, b""), 422, "unreadable", "")
    message = _refusal(_send(server, _trace(), axis="THz"), 422, "unreadable", "axis")
    assert "choose nm" in message


@pytest.mark.parametrize(
    ("choices", "where"),
    [
        ({"axis": "parsec"}, "query.axis"),
        ({"wavelength_nm": 10}, "query.wavelength_nm"),
        ({"floor_db": "nan"}, "query.floor_db"),
        ({"column": 1}, "query.column"),
        ({"name": "x" * 201}, "query.name"),
    ],
)
def test_choices_are_bounded(server: LiveServer, choices: dict[str, Any], where: str) -> None:
    response = _send(server, _trace(11), **choices)
    assert response.status_code == 422
    assert response.json()["error"]["where"] == where


def test_a_file_may_be_large_but_not_without_end(server: LiveServer) -> None:
    """Far beyond what a study may have, and up to the limit to the byte."""
    line = b"1552.0000;-60.000                                              \n"
    large = _trace().encode() + b"\n" + line * (UPLOAD_LIMIT_BYTES // len(line) - 500)
    assert len(large) > 40_000_000
    answer = _send(server, large).json()
    assert any("repeating a place" in remark for remark in answer["remarks"])
    message = _refusal(_send(server, b"1" * (UPLOAD_LIMIT_BYTES + 1)), 413, "too_large", "")
    assert "40 MiB" in message
    assert server.client.get("/healthz").json()["status"] == "ok"


def test_the_gate_stands_before_the_upload(server: LiveServer) -> None:
    """A page of another site cannot have a file read."""
    headers = {"Origin": "http://elsewhere.example"}
    response = server.client.post("/api/spectra", content=_trace(), headers=headers)
    assert response.status_code == 403


def test_the_catalogue_fills_spans(server: LiveServer) -> None:
    """Every kind's parameters make a span; each says where they come from."""
    answer = server.get("/api/fibres")
    assert [kind["key"] for kind in answer["kinds"]] == [kind.key for kind in KINDS]
    for kind in answer["kinds"]:
        assert "length_km" not in kind["span"]
        line = [{"length_km": 0.5, **kind["span"]}]
        source = {"wavelength_nm": kind["wavelength_nm"]}
        made = Experiment.model_validate({"line": line, "source": source})
        assert made.line[0].beta2(kind["wavelength_nm"]) > 0.0
        assert kind["source"]
        assert kind["group"]
    signs = {known["key"]: known["sign"] for known in answer["classes"]}
    assert (signs["G.652"], signs["G.655.C"]) == ("anomalous", "either")


def test_the_catalogue_follows_the_carrier(server: LiveServer) -> None:
    """D by the slope where the figures hold, advice where they do not."""
    kinds = {kind["key"]: kind for kind in server.get("/api/fibres?wavelength_nm=1540")["kinds"]}
    moved = kinds["g655c-negative"]
    assert moved["span"]["dispersion_ps_per_nm_km"] == pytest.approx(-5.6)
    assert moved["advice"] == ""
    assert "use 1150 nm" in kinds["spun"]["advice"]
    assert server.client.get("/api/fibres?wavelength_nm=0").status_code == 422
