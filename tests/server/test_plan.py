"""The grid chosen for a study, and studies over two parameters, through a real server."""

import csv
import io

from tests.serving import LiveServer, tiny


def test_a_plan_chooses_a_grid_and_says_why(server: LiveServer) -> None:
    """Whatever grid the study came with, valid or not; the choice makes a valid study."""
    study = tiny(1, window_ps=16.0, samples=256)
    answer = server.client.post("/api/plan", json=study)
    assert answer.status_code == 200, answer.text
    plan = answer.json()
    assert plan["time_step_ps"] == plan["window_ps"] / plan["samples"]
    deciding = {reason["unit"]: reason for reason in plan["reasons"] if reason["decides"]}
    assert set(deciding) == {"ps", "GHz"}
    assert plan["window_ps"] / 2 < deciding["ps"]["value"] <= plan["window_ps"]
    assert deciding["GHz"]["value"] <= 500.0 / plan["time_step_ps"]
    chosen = tiny(1, window_ps=plan["window_ps"], samples=plan["samples"])
    same = server.client.post("/api/plan", json=chosen).json()
    assert same == plan
    assert server.client.post("/api/plan", json={}).status_code == 200


def test_a_plan_for_what_no_grid_holds_says_so(server: LiveServer) -> None:
    """In the one shape of errors, at its field, within what the server allows."""
    study = tiny(1)
    study["experiment"]["shaper"] = {"resolution_ghz": 1e-4}
    error = server.client.post("/api/plan", json=study).json()["error"]
    assert "no window is long enough for the resolution of the shaper" in error["message"]
    assert error["where"] == "ensemble.grid"
    study["experiment"]["shaper"] = {"resolution_ghz": 0.003}
    answer = server.client.post("/api/plan", json=study)
    assert answer.status_code == 422
    assert answer.json()["error"]["where"] == "experiment.ensemble.samples"
    misspelt = server.client.post("/api/plan", json={"experiment": {"lauch": {}}})
    assert "did you mean launch" in misspelt.json()["error"]["message"]


def test_a_study_with_a_chosen_grid_over_two_parameters(server: LiveServer) -> None:
    """Runs to its end; every curve is there, and so are both tables."""
    study = tiny(31, grid="automatic")
    study["experiment"]["source"] = {"width_ghz": 100.0}
    study["second"] = {"parameter": "line.*.length_km", "start": 1.0, "stop": 2.0, "points": 2}
    run_id = server.post(study)
    row = server.wait(run_id, "done", "failed")
    assert row["state"] == "done"
    assert row["progress"]["points_total"] == 8
    view = server.client.get(f"/api/runs/{run_id}/view").json()
    assert view["study"]["experiment"]["ensemble"]["window_ps"] == 2048.0
    assert view["axes"]["second"]["values"] == [1.0, 2.0]
    assert [curve["name"] for curve in view["variants"]][1] == "coupled, Length 2 km"
    assert all(point["final"] for curve in view["points"] for point in curve)
    point = server.client.get(f"/api/runs/{run_id}/points/3/1").json()
    assert point["budget"]["limited_by"] == point["summary"]["limited_by"] == "statistics"
    for name, rows in (("csv", 8), ("along", 8 * 5)):
        text = server.client.get(row["links"][name]).text
        assert len(list(csv.DictReader(io.StringIO(text)))) == rows


def test_points_of_both_axes_count_against_the_limit(server: LiveServer) -> None:
    """Before anything is built."""
    study = tiny(1)
    study["second"] = {"parameter": "launch.share_1", "start": 0.1, "stop": 0.9, "points": 200}
    answer = server.client.post("/api/runs", json=study)
    assert answer.status_code == 422
    assert "both sweeps" in answer.json()["error"]["message"]
