"""The HTTP contract against a real server that computes real studies."""

import base64
import io
import json
from typing import Any

import h5py
import httpx
import numpy as np
import pytest

from server.middleware import SECURITY_HEADERS
from tests.serving import LiveServer, lengthy, tiny


@pytest.fixture(scope="module")
def done(server: LiveServer) -> str:
    """A run that is done."""
    run_id = server.post(tiny(1))
    assert server.wait(run_id, "done", "failed")["state"] == "done"
    return run_id


def _error(response: httpx.Response, status: int, code: str) -> dict[str, str]:
    assert response.status_code == status, response.text
    body = response.json()
    assert set(body) == {"error"}
    assert set(body["error"]) == {"code", "message", "where"}
    assert body["error"]["code"] == code
    assert body["error"]["message"]
    error: dict[str, str] = body["error"]
    return error


def test_a_study_is_answered_once(server: LiveServer, done: str) -> None:
    again = server.client.post("/api/runs", json=tiny(1))
    assert again.status_code == 200
    assert (again.json()["id"], again.json()["state"]) == (done, "done")
    assert again.json()["progress"]["points_done"] == 4
    other = server.client.post("/api/runs", json=tiny(2))
    assert other.status_code == 201
    assert other.json()["id"] != done
    assert other.headers["location"] == f"/api/runs/{other.json()['id']}"
    server.wait(other.json()["id"], "done")


def test_the_stream_tells_a_run_from_start_to_end(server: LiveServer) -> None:
    events = list(server.events(server.post(tiny(3))))
    kinds = [event.kind for event in events]
    assert set(kinds) == {"state", "progress", "point", "map"}
    states = [event.data["state"] for event in events if event.kind == "state"]
    assert states[-2:] == ["running", "done"]
    assert kinds[-1] == "state"
    latest: dict[tuple[int, int], dict[str, Any]] = {}
    for event in events:
        if event.kind == "point":
            latest |= {(point["variant"], point["point"]): point for point in event.data["points"]}
    assert set(latest) == {(variant, point) for variant in range(2) for point in range(2)}
    assert all(point["final"] and point["realizations"] == 8 for point in latest.values())
    fractions = [event.data["fraction"] for event in events if event.kind == "progress"]
    assert fractions == sorted(fractions)
    assert fractions[-1] == 1.0


def test_map_rows_arrive_in_order_and_make_the_stored_map(server: LiveServer) -> None:
    run_id = server.post(tiny(4))
    rows = [event.data for event in server.events(run_id) if event.kind == "map"]
    expected = 0
    pieces = []
    for piece in rows:
        assert piece["first_row"] == expected
        expected += piece["rows"]
        levels = np.frombuffer(base64.b64decode(piece["data"]), np.uint8)
        pieces.append(levels.reshape(3, piece["rows"], piece["columns"]))
    streamed = np.concatenate(pieces, axis=1)
    stored = server.client.get(f"/api/runs/{run_id}/maps/{rows[0]['variant']}/{rows[0]['point']}")
    shape = (5, int(stored.headers["x-map-rows"]), int(stored.headers["x-map-columns"]))
    kept = np.frombuffer(stored.content, np.uint8).reshape(shape)
    assert kept.shape[1:] == streamed.shape[1:]
    # The map is its own calculation of the same realization, with steps of its own.
    assert np.mean(np.abs(kept[0].astype(int) - streamed[0].astype(int))) < 3.0
    assert float(stored.headers["x-map-intensity-scale"]) > 0.0


def test_a_reader_who_reconnects_misses_nothing(server: LiveServer, done: str) -> None:
    run_id = server.post(tiny(5))
    whole = list(server.events(run_id))
    for place in (0, len(whole) // 2, len(whole) - 2):
        assert list(server.events(run_id, whole[place].id)) == whole[place + 1 :]
    query = server.client.get(f"/api/runs/{run_id}/events", params={"after": whole[-2].id})
    assert f"id: {whole[-1].id}" in query.text
    strange = list(server.events(run_id, "another-epoch-7"))
    assert [event.kind for event in strange] == ["reset", "state"]
    assert server.get(f"/api/runs/{run_id}/view")["sequence"] == whole[-1].id


def test_the_view_and_the_point_hold_what_the_page_draws(server: LiveServer, done: str) -> None:
    view = server.get(f"/api/runs/{done}/view")
    axes = view["axes"]
    assert axes["sweep"]["values"] == [10.0, 200.0]
    assert axes["sweep"]["unit"] == "mW"
    assert len(axes["distance_km"]) == 5
    assert [variant["name"] for variant in view["variants"]] == ["coupled", "uncoupled"]
    assert [[point["point"] for point in curve] for curve in view["points"]] == [[0, 1], [0, 1]]
    detail = server.get(f"/api/runs/{done}/points/1/1")
    assert detail["summary"] == view["points"][1][1]
    lags = len(axes["lag_ps"])
    for curve in ("auto1", "auto2", "sum", "cross"):
        for part in ("value", "standard_error", "linear"):
            assert len(detail["correlations"][curve][part]) == lags
    assert detail["distance"]["value"][-1] == detail["summary"]["value"]
    assert len(detail["spectra"]["output1"]["value"]) == len(axes["offset_ghz"])
    assert len(detail["contrast"]["density"]) == len(axes["contrast"])


def test_downloads_describe_the_run(server: LiveServer, done: str) -> None:
    answer = server.client.get(f"/api/runs/{done}/result")
    assert answer.headers["content-disposition"] == f'attachment; filename="crossdip-{done}.h5"'
    with h5py.File(io.BytesIO(answer.content)) as file:
        assert file.attrs["identity"] == done
        assert json.loads(file.attrs["study"])["sweep"]["points"] == 2
    table = server.client.get(f"/api/runs/{done}/curves.csv").text.strip().splitlines()
    assert len([line for line in table if line.startswith(("coupled", "uncoupled"))]) == 4
    picture = server.client.get(f"/api/runs/{done}/picture.svg")
    assert picture.headers["content-type"] == "image/svg+xml"
    assert picture.text.count("<polyline") == 2


def test_the_library_lists_finds_and_renames(server: LiveServer, done: str) -> None:
    renamed = server.client.patch(f"/api/runs/{done}", json={"title": "  Übersicht 100 %  "})
    assert renamed.json()["title"] == "Übersicht 100 %"
    found = server.get("/api/runs", params={"search": "übersicht 100"})
    assert found["total"] == 0 or [row["id"] for row in found["runs"]] == [done]
    assert server.get("/api/runs", params={"search": f"100 % {done[:6]}"})["total"] == 1
    assert server.get("/api/runs", params={"search": "no such words"}) == {"runs": [], "total": 0}
    rows = server.get("/api/runs", params={"limit": 1, "offset": 0})["runs"]
    everything = server.get("/api/runs")["runs"]
    assert rows == everything[:1]
    created = [row["created"] for row in everything]
    assert created == sorted(created, reverse=True)


def test_a_deleted_run_comes_back_whole(server: LiveServer) -> None:
    run_id = server.post(tiny(6))
    server.wait(run_id, "done")
    deleted = server.client.delete(f"/api/runs/{run_id}").json()
    assert deleted["deleted"] == run_id
    assert deleted["undo_until"] > "2026"
    _error(server.client.get(f"/api/runs/{run_id}"), 404, "not_found")
    _error(server.client.get(f"/api/runs/{run_id}/view"), 404, "not_found")
    assert run_id not in {row["id"] for row in server.get("/api/runs")["runs"]}
    restored = server.client.post(f"/api/runs/{run_id}/restore")
    assert (restored.status_code, restored.json()["state"]) == (200, "done")
    assert server.get(f"/api/runs/{run_id}/view")["points"][0][0]["final"]


def test_a_deleted_study_that_is_asked_for_again_is_there(server: LiveServer) -> None:
    run_id = server.post(tiny(7))
    server.client.delete(f"/api/runs/{run_id}")
    assert server.post(tiny(7)) == run_id
    assert server.wait(run_id, "done")["progress"]["points_done"] == 4


def test_runs_wait_their_turn_and_a_waiting_one_can_be_cancelled(server: LiveServer) -> None:
    first, second, third = (server.post(lengthy(seed)) for seed in (10, 11, 12))
    server.wait(first, "running")
    assert server.get(f"/api/runs/{second}")["state"] == "queued"
    assert server.get(f"/api/runs/{second}/view")["points"] == [[None] * 4, [None] * 4]
    assert server.client.post(f"/api/runs/{second}/cancel").json()["state"] == "cancelled"
    assert server.client.post(f"/api/runs/{first}/cancel").json()["state"] == "cancelled"
    server.wait(third, "running", timeout_s=2.0)
    server.client.delete(f"/api/runs/{third}")
    assert server.get(f"/api/runs/{first}/view")["state"] == "cancelled"
    _error(server.client.post(f"/api/runs/{first}/cancel"), 409, "conflict")
    _error(server.client.get(f"/api/runs/{first}/result"), 409, "conflict")


def test_a_session_collects_runs_and_notes(server: LiveServer, done: str) -> None:
    made = server.client.post("/api/sessions", json={"name": "Tuesday"})
    assert made.status_code == 201
    path = f"/api/sessions/{made.json()['id']}"
    assert [row["id"] for row in server.client.put(f"{path}/runs/{done}").json()["runs"]] == [done]
    server.client.patch(path, json={"notes": "the dip is at 200 mW"})
    detail = server.client.patch(path, json={"name": "Wednesday"}).json()
    assert (detail["name"], detail["notes"]) == ("Wednesday", "the dip is at 200 mW")
    listed = {row["id"]: row for row in server.get("/api/sessions")["sessions"]}
    assert listed[detail["id"]]["runs"] == 1
    assert server.client.delete(f"{path}/runs/{done}").json()["runs"] == []
    assert server.client.delete(path).json()["deleted"] == detail["id"]
    _error(server.client.get(path), 404, "not_found")
    assert server.client.post(f"{path}/restore").json()["notes"] == "the dip is at 200 mW"
    _error(server.client.put(f"{path}/runs/{'0' * 16}"), 404, "not_found")


def test_an_overlay_shows_where_curves_differ(server: LiveServer, done: str) -> None:
    other = server.post(tiny(2))
    server.wait(other, "done")
    body = server.get("/api/overlay", params={"curve": [f"{done}:0", f"{done}:1", f"{other}:0"]})
    assert [curve["name"] for curve in body["curves"]] == ["coupled", "uncoupled", "coupled"]
    assert len(body["curves"][0]["points"]) == 2
    differences = {row["path"]: row for row in body["differences"]}
    assert set(differences) == {
        "experiment.relation.kind",
        "experiment.line.0.coupling",
        "experiment.ensemble.seed",
    }
    assert differences["experiment.ensemble.seed"]["values"] == [1, 1, 2]
    assert differences["experiment.line.0.coupling"]["title"] == "Coupling"
    for curve in (f"{done}:7", f"{'0' * 16}:0"):
        error = _error(server.client.get("/api/overlay", params={"curve": curve}), 404, "not_found")
        assert error["where"] == "curve.0"
    _error(server.client.get("/api/overlay", params={"curve": done}), 422, "out_of_range")
    _error(server.client.get("/api/overlay"), 422, "missing")
    nine = {"curve": [f"{done}:0"] * 9}
    _error(server.client.get("/api/overlay", params=nine), 422, "out_of_range")


@pytest.mark.parametrize(
    ("method", "path", "content", "status", "code"),
    [
        ("POST", "/api/runs", b"{not json", 400, "malformed_json"),
        ("POST", "/api/runs", b"", 422, "missing"),
        ("POST", "/api/runs", b"[1]", 422, "wrong_type"),
        ("POST", "/api/runs", b"\xff\xfe", 400, None),
        ("POST", "/api/runs", b"[" * 100_000, 400, None),
        ("POST", "/api/runs", b'{"experiment":{"source":{"width_ghz":NaN}}}', 422, "out_of_range"),
        ("POST", "/api/runs", b'{"experiment":{"source":{"width_ghz":1e999}}}', 422,
         "out_of_range"),
        ("POST", "/api/runs", b'{"experiment":{"ensemble":{"samples":1000000000}}}', 422,
         "over_limit"),
        ("POST", "/api/runs", b'{"sweep":{"points":1000000}}', 422, "over_limit"),
        ("POST", "/api/runs", b'{"colour":1}', 422, "unknown_parameter"),
        ("POST", "/api/runs", b" " * 1_100_000, 413, "too_large"),
        ("PUT", "/api/runs", b"{}", 405, "method_not_allowed"),
        ("GET", "/api/nowhere", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef", b"", 404, "not_found"),
        ("GET", "/api/runs/no-id", b"", 422, None),
        ("GET", "/api/runs/0123456789abcdef/events", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/view", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/result", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/curves.csv", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/picture.svg", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/points/0/0", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/maps/0/0", b"", 404, "not_found"),
        ("GET", "/api/runs/0123456789abcdef/maps/0/x", b"", 422, None),
        ("PATCH", "/api/runs/0123456789abcdef", b'{"title":"x"}', 404, "not_found"),
        ("PATCH", "/api/runs/0123456789abcdef", b'{"title":"  "}', 422, "out_of_range"),
        ("PATCH", "/api/runs/0123456789abcdef", b'{"name":"x"}', 422, None),
        ("DELETE", "/api/runs/0123456789abcdef", b"", 404, "not_found"),
        ("POST", "/api/runs/0123456789abcdef/cancel", b"", 404, "not_found"),
        ("POST", "/api/runs/0123456789abcdef/resume", b"", 404, "not_found"),
        ("POST", "/api/runs/0123456789abcdef/restore", b"", 404, "not_found"),
        ("GET", "/api/runs?limit=0", b"", 422, "out_of_range"),
        ("GET", "/api/runs?limit=x", b"", 422, "wrong_type"),
        ("GET", "/api/sessions/none", b"", 404, "not_found"),
        ("POST", "/api/sessions", b'{"name":""}', 422, "out_of_range"),
        ("POST", "/api/sessions/none/restore", b"", 404, "not_found"),
    ],
)  # fmt: skip
def test_every_mistake_has_the_one_shape(
    server: LiveServer, method: str, path: str, content: bytes, status: int, code: str | None
) -> None:
    headers = {"Content-Type": "application/json"} if content else {}
    response = server.client.request(method, path, content=content, headers=headers)
    error = _error(response, status, code or response.json()["error"]["code"])
    assert "Traceback" not in error["message"]
    for name, value in SECURITY_HEADERS.items():
        assert response.headers[name] == value


def test_a_bad_study_is_refused_at_the_field(server: LiveServer) -> None:
    study = tiny()
    study["experiment"]["line"][0]["gamma_per_w_km"] = -1
    error = _error(server.client.post("/api/runs", json=study), 422, "out_of_range")
    assert error["where"] == "experiment.line.0.gamma_per_w_km"
    assert "from 0 to 10000 1/(W·km), not -1" in error["message"]


def test_the_address_and_the_sender_are_checked_on_loopback_too(server: LiveServer) -> None:
    for host in ("evil.example", "evil.example:80", "127.0.0.1.evil.example", ""):
        _error(server.client.get("/api/runs", headers={"Host": host}), 403, "forbidden")
    assert server.client.get("/healthz", headers={"Host": "localhost:9"}).status_code == 200
    for headers in (
        {"Origin": "http://evil.example"},
        {"Origin": "null"},
        {"Sec-Fetch-Site": "cross-site"},
    ):
        refused = server.client.post("/api/runs", json={}, headers=headers)
        _error(refused, 403, "forbidden")
    own = {"Origin": server.url, "Sec-Fetch-Site": "same-origin"}
    assert server.client.post("/api/sessions", json={"name": "x"}, headers=own).status_code == 201


def test_what_the_system_says_of_itself(server: LiveServer, done: str) -> None:
    health = server.get("/healthz")
    assert health == {"status": "ok", "workers": 2, "engine": "ready"}
    assert server.get("/api/access") == {"may": "write"}
    assert server.get("/api/defaults")["sweep"]["points"] == 12
    metrics = server.client.get("/metrics").text
    assert f'crossdip_runs{{state="done"}} {0}' not in metrics
    assert "crossdip_workers 2" in metrics
    description = server.get("/openapi.json")
    assert "/api/runs/{run_id}/events" in description["paths"]
    assert "Study" in description["components"]["schemas"]
    assert server.client.get("/docs").status_code == 404


def test_large_answers_are_compressed_and_streams_are_not(server: LiveServer, done: str) -> None:
    detail = server.client.get(f"/api/runs/{done}/points/0/0")
    assert detail.headers["content-encoding"] == "gzip"
    stream = server.client.get(f"/api/runs/{done}/events")
    assert "content-encoding" not in stream.headers


def test_the_library_stream_tells_of_every_run(server: LiveServer) -> None:
    with server.client.stream("GET", "/api/events") as response:
        lines = response.iter_lines()
        run_id = server.post(tiny(8))
        states = []
        for line in lines:
            if line.startswith("data: "):
                row = json.loads(line[6:])
                if row["id"] == run_id:
                    states.append(row["state"])
            if states and states[-1] == "done":
                break
    assert [state for i, state in enumerate(states) if state not in states[:i]] == [
        "queued",
        "running",
        "done",
    ]


def test_a_wrong_address_answers_a_person_with_a_page_and_a_script_with_the_error(
    server: LiveServer,
) -> None:
    with httpx.Client(base_url=server.url) as client:
        page = client.get("/nowhere", headers={"Accept": "text/html"})
        data = client.get("/nowhere", headers={"Accept": "application/json"})
        api = client.get("/api/nowhere", headers={"Accept": "text/html"})
    assert (page.status_code, data.status_code, api.status_code) == (404, 404, 404)
    assert "nothing at this address" in page.text
    assert "<html" in page.text
    assert data.json()["error"]["code"] == "not_found"
    assert api.json()["error"]["code"] == "not_found"
