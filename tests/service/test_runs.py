"""Runs over HTTP: the same answer as the library, progress, cancelling, downloads, studies, comparison."""

import csv
import io
import json

import numpy as np
import pytest

import bemescape as be
from service.helpers import CAP, PANELS, ball, order, ply_bytes, upload, wait_until_over
from service.test_surfaces import raw_buffers

COARSE = be.SolverSettings(max_panels=PANELS)


@pytest.fixture(scope="session")
def local(tmp_path_factory):
    """The same case, solved by the library."""
    path = tmp_path_factory.mktemp("local") / "ball.ply"
    path.write_bytes(ply_bytes(*ball()))
    cell = be.read_surface(path, unit="um")
    window = be.Window.labels("cap", array="label", value=1)
    return be.solve_escape(
        cell, [window], "1 um^2/s", target="30 %", start={"middle": (0.0, 0.0, 0.0)}, settings=COARSE
    )


def test_the_service_answers_as_the_library_does(client, solved, local):
    summary = client.get(f"/api/runs/{solved['id']}/summary").json()
    # The same code on the same numbers; sums may be grouped by another number of threads.
    np.testing.assert_allclose(summary["mean_time_s"], local.mean_time_s, rtol=1e-9)
    np.testing.assert_allclose(summary["start"]["middle"], local.start["middle"], rtol=1e-9)
    assert summary["windows"][0]["share"] == pytest.approx(local.windows[0].share, rel=1e-9)
    assert summary["made_with"]["mesh_sha256"] == local.mesh_sha256


def test_a_single_small_opening_takes_about_the_textbook_time(client, solved):
    """V/(4 D a) (Berg & Purcell 1977) within a factor of two: the cap is neither flat nor small."""
    answer = solved["answer"]
    a = np.sqrt(_cap_area() / np.pi)
    rule = answer["volume_um3"] / (4.0 * a)
    assert 0.5 < answer["mean_time_s"] / rule < 2.0


def _cap_area():
    vertices, faces, labels = ball()
    corners = vertices[faces[labels == 1]]
    return 0.5 * np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1).sum()


def test_the_buffers_of_a_run_hold_its_panels(client, solved, local):
    header, arrays = raw_buffers(client, f"/api/runs/{solved['id']}/mesh")
    assert header["windows"] == ["cap"]
    np.testing.assert_allclose(arrays["time_s"], local.panel_time_s, rtol=1e-5)
    np.testing.assert_array_equal(arrays["window"], local.panel_window)
    rim = np.unique(arrays["vertices"][arrays["rim"].ravel()], axis=0) + header["offset_um"]
    assert np.ptp(rim[:, 2]) < 0.4  # the border of the cap


def test_questions_to_a_result_answer_as_the_library_does(client, solved, local):
    path = f"/api/runs/{solved['id']}"
    regions = client.get(f"{path}/slow_regions", params={"wall_fraction": 0.25}).json()
    expected = local.slow_regions(0.25)
    assert regions["level_s"] == pytest.approx(expected.level_s, rel=1e-9)
    assert [entry["area_um2"] for entry in regions["regions"]] == pytest.approx([r.area_um2 for r in expected])
    times = client.post(f"{path}/times", json={"points_um": [[0, 0, 0], [5, 5, 5]]}).json()["time_s"]
    assert times[0] == pytest.approx(float(local.time_at([[0, 0, 0]])[0]), rel=1e-9)
    assert times[1] is None
    _, arrays = raw_buffers(
        client, f"{path}/section", method="POST", json={"point_um": [0, 0, 0], "normal": [0, 1, 0], "pixels": 9}
    )
    grid = arrays["time_s"].reshape(9, 9)
    assert np.isnan(grid[0, 0])  # a corner of the square around a ball lies outside
    assert grid[4, 4] == pytest.approx(times[0], rel=2e-3)  # the middle of the middle sample


def test_wrong_questions_are_refused(client, solved):
    path = f"/api/runs/{solved['id']}"
    for part in ("0", "1.1", "nan", "x"):
        assert client.get(f"{path}/slow_regions", params={"wall_fraction": part}).status_code == 422
    for body in (
        {"point_um": [0, 0, 0], "normal": [0, 0, 0]},
        {"point_um": [0, 0], "normal": [0, 0, 1]},
        {"point_um": [0, 0, 1e300], "normal": [0, 0, 1]},
        {"point_um": [0, 0, 0], "normal": [0, 0, 1], "pixels": 10**6},
    ):
        assert client.post(f"{path}/section", json=body).status_code == 422, body
    assert client.get(f"{path}/files/result.pkl").status_code == 404


def test_progress_is_streamed_until_the_run_is_over(client, surface):
    run = client.post("/api/runs", json=order(surface["id"], name="watched")).json()
    kinds, last = [], None
    with client.stream("GET", f"/api/runs/{run['id']}/events") as answer:
        assert answer.headers["content-type"].startswith("text/event-stream")
        for line in answer.iter_lines():
            if line.startswith("event: "):
                kinds.append(line.removeprefix("event: "))
            elif line.startswith("data: ") and kinds[-1] == "run":
                last = json.loads(line.removeprefix("data: "))
                if last["state"] == "done":
                    break
    assert kinds[0] == "run"
    assert "progress" in kinds
    assert last["state"] == "done"


def test_tables_and_downloads(client, solved):
    path = f"/api/runs/{solved['id']}"
    rows = list(csv.DictReader(io.StringIO(client.get(f"{path}/tables.csv").text)))
    assert [row["kind"] for row in rows[:3]] == ["whole", "window", "start"]
    assert float(rows[0]["mean_time_s"]) == solved["answer"]["mean_time_s"]
    surface = client.get(f"{path}/files/surface.vtp")
    assert surface.headers["content-disposition"] == 'attachment; filename="surface.vtp"'
    assert b"time_s" in surface.content


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"motion": {"diffusion": "fast"}}, "diffusion"),
        ({"motion": {"difusion": "1 um^2/s"}}, "did you mean 'diffusion'"),
        ({"window": []}, "has no"),
        ({"window": [CAP, CAP]}, "2 windows named 'cap'"),
        ({"window": [{"name": "x"}]}, "no kind"),
        ({"accuracy": {"target": "200 %"}}, "between 0 and 1"),
        ({"accuracy": {"max_panels": 900_000}}, "limit here 30000"),
        ({"surface": "../../etc"}, "there is no surface"),
        ({"name": "x" * 61}, "1 to 60"),
        ({"nonsense": 1}, "nonsense"),
        ({"window": [{"name": "p", "points": {"file": "/etc/passwd", "radius": "1 nm"}}]}, "there is no list of"),
        ({"window": [{"name": "n", "near": {"file": "../x.ply", "unit": "nm", "distance": "1 nm"}}]}, "no surface"),
        ({"start": {"points": {"a": [0, 0]}}}, "three numbers"),
    ],
)
def test_a_wrong_order_is_refused_as_a_wrong_case_file_is(client, surface, change, sentence):
    answer = client.post("/api/runs", json={**order(surface["id"]), **change})
    assert answer.status_code in (404, 422)
    assert sentence in answer.json()["detail"]


def test_a_run_that_cannot_be_answered_fails_with_the_sentence_of_the_library(client, surface):
    outside = order(surface["id"], name="outside", start={"points": {"far": [9.0, 9.0, 9.0]}})
    record = wait_until_over(client, client.post("/api/runs", json=outside).json()["id"])
    assert (record["state"], record["fault"]) == ("failed", "input")
    assert "'far'" in record["reason"]
    assert client.get(f"/api/runs/{record['id']}/summary").status_code == 409


def test_cancelling_waiting_and_running_runs(client, surface):
    ids = [client.post("/api/runs", json=order(surface["id"], name=f"c{k}")).json()["id"] for k in range(4)]
    for run_id in reversed(ids):
        assert client.post(f"/api/runs/{run_id}/cancel").status_code in (202, 409)
    states = [wait_until_over(client, run_id)["state"] for run_id in ids]
    assert states[-1] == "cancelled"
    assert set(states) <= {"cancelled", "done"}
    assert client.post(f"/api/runs/{ids[-1]}/cancel").status_code == 409


def test_a_study_has_the_table_of_a_study_file(client, surface):
    """The mean time scales with the square of the size, sphericity and share with no power of it."""
    vertices, faces, labels = ball()
    double = upload(client, ply_bytes(2 * vertices, faces, labels), name="=double.ply").json()
    rule = {key: value for key, value in order("x").items() if key != "surface"}
    members = [{"surface": surface["id"], "group": "small"}, {"surface": double["id"], "group": "large"}]
    study = client.post("/api/studies", json={"name": "sizes", "surfaces": members, "rule": rule}).json()
    assert "not solved yet" in client.get(f"/api/studies/{study['id']}/table.csv").text
    for row in study["rows"]:
        wait_until_over(client, row["run"])
    study = client.get(f"/api/studies/{study['id']}").json()
    assert [row["state"] for row in study["rows"]] == ["done", "done"]
    assert [row["group"] for row in study["rows"]] == ["small", "large"]
    small, large = study["rows"]
    for column, ratio in {"mean_time_s": 4, "volume_um3": 8, "area_um2": 4, "longest_geodesic_um": 2}.items():
        np.testing.assert_allclose(large[column] / small[column], ratio, rtol=1e-6, err_msg=column)
    # Wadell's sphericity of an icosphere of 320 faces: close to that of a ball, and below.
    assert 0.98 < small["sphericity"] < 1.0
    assert large["sphericity"] == pytest.approx(small["sphericity"], rel=1e-9)
    assert small["shares"] == {"cap": pytest.approx(1.0, abs=1e-3)}  # the balance of a coarse solve
    assert set(study["columns"]) <= set(small)

    rows = list(csv.DictReader(io.StringIO(client.get(f"/api/studies/{study['id']}/table.csv").text)))
    assert [row["shape"] for row in rows] == ["ball", "'=double"]  # no spreadsheet runs it
    assert float(rows[1]["mean_time_s"]) == large["mean_time_s"]
    assert float(rows[1]["share_cap"]) == large["shares"]["cap"]
    statistics = client.get(f"/api/studies/{study['id']}/statistics").json()
    (setting,) = statistics["settings"]
    assert {group["group"]: group["median_s"] for group in setting["groups"]} == {
        "small": small["mean_time_s"],
        "large": large["mean_time_s"],
    }
    assert "no test is meaningful" in setting["pairs"][0]["statement"]
    (entry,) = [entry for entry in client.get("/api/studies").json() if entry["id"] == study["id"]]
    assert entry["runs"] == {"done": 2}

    found = client.get("/api/comparison", params={"run": [row["run"] for row in study["rows"]]}).json()
    assert found["rows"][1]["ratio"] == pytest.approx(large["mean_time_s"] / small["mean_time_s"])
    assert found["rows"][1]["differs"] is True
    assert found["high_s"] == pytest.approx(max(row["slowest_time_s"] for row in study["rows"]))
    assert client.get("/api/comparison", params={"run": [study["rows"][0]["run"]]}).status_code == 422
    assert client.delete(f"/api/studies/{study['id']}").status_code in (204, 409)  # 409 while pictures are drawn


def test_studies_with_wrong_bodies_queue_nothing(client, surface):
    before = len(client.get("/api/runs").json())
    rule = {key: value for key, value in order("x").items() if key != "surface"}
    for body in (
        [],
        {},
        {"surfaces": [], "rule": rule},
        {"surfaces": [""], "rule": rule},
        {"surfaces": [surface["id"], surface["id"]], "rule": rule},
        {"surfaces": [surface["id"], "0" * 16], "rule": rule},
        {"surfaces": [surface["id"]], "rule": {}},
        {"surfaces": [surface["id"]], "rule": {**rule, "surface": "x"}},
        {"surfaces": [{"surface": surface["id"], "group": "a\nb"}], "rule": rule},
        {"surfaces": [{"surface": surface["id"], "colour": "red"}], "rule": rule},
        {"surfaces": [surface["id"]], "rule": rule, "subjects": "means"},
    ):
        assert client.post("/api/studies", json=body).status_code in (404, 422), body
    assert len(client.get("/api/runs").json()) == before


def test_the_client_has_the_calls_of_the_library(live, local, tmp_path):
    path = tmp_path / "ball.ply"
    path.write_bytes(ply_bytes(*ball()))
    events = []
    with be.connect(live.url) as service:
        cell = be.read_surface(path, unit="um")
        result = service.solve_escape(
            cell,
            [be.Window.labels("cap", array="label", value=1)],
            "1 um^2/s",
            target="30 %",
            settings=COARSE,
            start={"middle": (0.0, 0.0, 0.0)},
            progress=events.append,
        )
        np.testing.assert_allclose(result.mean_time_s, local.mean_time_s, rtol=1e-9)
        np.testing.assert_allclose(result.panel_time_s, local.panel_time_s, rtol=1e-7)
        assert {event.stage for event in events} & {"near field", "iterating", "placing windows"}
        pore = be.Window.disc("pore", centre=(0, 0, 9), radius="10 nm")
        with pytest.raises(be.SettingsError, match="off the wall"):
            service.solve_escape(cell, [pore], 1.0)
    from bemescape.remote import ServiceError

    with pytest.raises(ServiceError, match="does not answer"):
        be.connect("http://127.0.0.1:9")
    with pytest.raises(be.SettingsError, match="begins with http"):
        be.connect("ball.ply")


def test_solve_on_a_server_writes_the_same_folder(live, local, tmp_path, monkeypatch, capsys):
    from bemescape.cli.main import main

    (tmp_path / "ball.ply").write_bytes(ply_bytes(*ball()))
    case = tmp_path / "ball.toml"
    case.write_text(
        '[surface]\nfile = "ball.ply"\nunit = "um"\n[motion]\ndiffusion = "1 um^2/s"\n[[window]]\nname = "cap"\n'
        'labels = { array = "label", value = 1 }\n[accuracy]\ntarget = "30 %"\n'
        f"max_panels = {PANELS}\n"
    )
    out = tmp_path / "out"
    code = main(["solve", str(case), "--server", live.url, "--out", str(out), "--json", "--no-pictures", "--quiet"])
    assert code in (0, 1)  # 1: the coarse mesh misses the target
    summary = json.loads(capsys.readouterr().out)
    assert summary["mean_time_s"] == pytest.approx(local.mean_time_s, rel=1e-9)
    assert be.EscapeResult.load(out).mean_time_s == summary["mean_time_s"]


def test_the_description_of_the_api_names_every_resource_with_examples(client):
    description = client.get("/api/openapi.json").json()
    assert {"/api/surfaces", "/api/runs", "/api/studies", "/api/comparison"} <= set(description["paths"])
    assert description["components"]["schemas"]["RunOrder"]["properties"]["window"]
    body = description["paths"]["/api/runs"]["post"]["requestBody"]["content"]["application/json"]
    assert body["example"]["motion"] == {"diffusion": "200 um^2/s"}
