"""What happens to a study when workers, the program, files or the disk fail; the solver is replaced by a quick answer.

Every test ends with the table of a run in which nothing happened, byte for byte apart from the two columns of timings.
"""

import os
import random
import shutil
import signal
import subprocess
import sys
import time

import pytest

import study_stubs
from bemescape.errors import SettingsError
from bemescape.study.engine import MOST_DEATHS
from bemescape.study.run import run_study
from study_processes import DRIVER, driver, environment, without_timings

pytestmark = pytest.mark.slow  # schedulers, workers and drivers are started and killed: minutes


def finished_run(study, out, dask_here, *, solve=study_stubs.quick, events=None):
    heard = [] if events is None else events
    result = run_study(study, out, scheduler=dask_here.address, report=False, solve=solve, events=heard.append)
    return result, heard


def kinds(events):
    return [event["event"] for event in events]


def test_a_worker_killed_in_the_middle_costs_nothing(undisturbed, dask_here, tmp_path):
    study, table = undisturbed
    dask_here.ensure_workers(2)
    victim, events = dask_here.workers[0], []

    def kill_after_three(event):
        events.append(event)
        if kinds(events).count("finished") == 3 and victim.poll() is None:
            victim.kill()

    result = run_study(
        study,
        tmp_path / "out",
        scheduler=dask_here.address,
        report=False,
        solve=study_stubs.slow,
        events=kill_after_three,
    )
    victim.wait()
    assert victim.returncode == -signal.SIGKILL
    assert not result.failures
    assert without_timings(result.folder) == table


def test_a_case_that_kills_every_worker_is_given_up_and_the_others_are_solved(boxes, tmp_path):
    result = run_study(boxes, tmp_path / "out", workers=2, report=False, solve=study_stubs.kills_its_worker)
    (reason,) = result.failures.values()
    assert f"{MOST_DEATHS + 1} workers died" in reason
    assert "memory" in reason
    failed = result.table[result.table["failure"] != ""]
    assert list(failed["shape"]) == ["box_02"]
    assert len(result.stored) == study_stubs.SHAPES - 1


@pytest.mark.parametrize("kills", [2, pytest.param(20, marks=pytest.mark.slow)])
def test_the_program_killed_at_random_moments_loses_no_finished_case(undisturbed, dask_here, tmp_path, kills):
    study, table = undisturbed
    chance = random.Random(kills)
    out = tmp_path / "out"
    dask_here.ensure_workers(2)
    kept = 0
    for _ in range(kills):
        child = driver(study, out, dask_here.address, "slow")
        # From before the first case to after the last one would have been written.
        seen = child.stdout.readline()
        assert "planned" in seen
        time.sleep(chance.uniform(0.0, 1.6))
        child.kill()
        child.communicate()
        whole = [folder for folder in (out / "cases").iterdir() if not folder.name.startswith(".")]
        assert len(whole) >= kept
        kept = len(whole)
        if kept == study_stubs.SHAPES:
            shutil.rmtree(whole[0])
            kept -= 1
    result, _ = finished_run(study, out, dask_here)
    assert not result.failures
    assert without_timings(out) == table
    assert not [path for path in out.rglob("*") if path.name.startswith(".writing-")]


def test_a_corrupt_result_is_named_and_solved_again(undisturbed, dask_here, tmp_path):
    study, table = undisturbed
    dask_here.ensure_workers(2)
    result, _ = finished_run(study, tmp_path / "out", dask_here)
    folders = sorted((result.folder / "cases").iterdir())
    flipped = bytearray((folders[0] / "values.bin").read_bytes())
    flipped[1000] ^= 1
    (folders[0] / "values.bin").write_bytes(flipped)
    record = folders[1] / "record.json"
    record.write_bytes(record.read_bytes()[:-40])
    (folders[2] / "note.txt").unlink()
    changed = folders[3] / "record.json"
    changed.write_bytes(changed.read_bytes().replace(b"mean_time_s", b"mean_time_S", 1))
    again, events = finished_run(study, result.folder, dask_here)
    damaged = [event for event in events if event["event"] == "damaged"]
    assert [event["folder"] for event in damaged] == [str(folder) for folder in folders[:4]]
    assert "values.bin fails its checksum" in damaged[0]["reason"]
    assert "note.txt is missing" in damaged[2]["reason"]
    assert kinds(events).count("finished") == 4
    assert without_timings(again.folder) == table


def test_a_second_run_solves_nothing_again(undisturbed, dask_here, tmp_path):
    study, table = undisturbed
    dask_here.ensure_workers(2)
    finished_run(study, tmp_path / "out", dask_here)
    again, events = finished_run(study, tmp_path / "out", dask_here, solve=study_stubs.fails_on_one)
    assert "started" not in kinds(events)
    assert without_timings(again.folder) == table


def test_failures_keep_their_reason_with_the_row_and_are_tried_again(undisturbed, dask_here, tmp_path):
    study, table = undisturbed
    dask_here.ensure_workers(2)
    first, events = finished_run(study, tmp_path / "out", dask_here, solve=study_stubs.fails_on_one)
    failed = first.table.set_index("shape")["failure"]
    assert failed["box_03"].startswith("shapes.csv row 5: window 'pore' lies 1.50 µm off the wall")
    assert "ZeroDivisionError: nobody foresaw this" in failed["box_04"]
    assert (failed.drop(["box_03", "box_04"]) == "").all()
    assert {entry.case for entry in first.statistics.settings[0].excluded} == {"box_03", "box_04"}
    assert kinds(events).count("failed") == 2
    again, events = finished_run(study, tmp_path / "out", dask_here)
    assert kinds(events).count("started") == 2
    assert without_timings(again.folder) == table


FULL_DISK = """
set -e
mount -t tmpfs -o size=600k tmpfs "$1"
"$2" "$3" "$4" "$1/out" "$5" quick > "$6/first" 2>&1 || true
mount -o remount,size=40m "$1"
"$2" "$3" "$4" "$1/out" "$5" quick > "$6/second" 2>&1
cp "$1/out/cases.csv" "$1/out/statistics.json" "$6"
"""


def test_a_full_disk_stops_the_study_in_a_sentence_and_costs_no_finished_case(undisturbed, dask_here, tmp_path):
    """A tmpfs of 600 kB in a mount namespace of its own; each of twelve cases takes 72 kB."""
    study, table = undisturbed
    private = ["unshare", "-m"] if os.name == "posix" and os.geteuid() == 0 else ["unshare", "-rm"]
    if shutil.which("unshare") is None or subprocess.run([*private, "true"], capture_output=True).returncode:
        pytest.skip("this system gives no mount namespace for a small disk")
    dask_here.ensure_workers(2)
    disk, logs = tmp_path / "disk", tmp_path / "logs"
    disk.mkdir()
    logs.mkdir()
    arguments = [str(disk), sys.executable, str(DRIVER), str(study), dask_here.address, str(logs)]
    subprocess.run([*private, "bash", "-c", FULL_DISK, "bash", *arguments], check=True, env=environment(), timeout=300)
    first, second = (logs / "first").read_text(), (logs / "second").read_text()
    assert "No space left on device; what was finished before is whole" in first
    assert "Traceback" not in first
    stored = first.count('"finished"')
    assert 0 < stored < study_stubs.SHAPES
    assert f'"finished_before": {stored}' in second
    assert second.count('"finished",') == study_stubs.SHAPES - stored
    assert without_timings(logs) == table


def test_ctrl_c_writes_what_is_finished_and_says_what_remains(undisturbed, dask_here, tmp_path):
    study, table = undisturbed
    dask_here.ensure_workers(2)
    out = tmp_path / "out"
    child = driver(study, out, dask_here.address, "slow")
    for line in child.stdout:
        if '"finished"' in line:
            child.send_signal(signal.SIGINT)
            break
    rest = child.stdout.read()
    assert child.wait(timeout=120) == 130
    stored = len([folder for folder in (out / "cases").iterdir() if not folder.name.startswith(".")])
    assert 0 < stored < study_stubs.SHAPES
    assert f"{stored} of {study_stubs.SHAPES} cases are kept" in rest
    assert f"{study_stubs.SHAPES - stored} remain" in rest
    lines, _ = without_timings(out)
    assert sum("not solved yet" in line for line in lines) == study_stubs.SHAPES - stored
    result, _ = finished_run(study, out, dask_here)
    assert without_timings(result.folder) == table


def test_two_runs_in_one_folder_are_refused(undisturbed, dask_here, tmp_path):
    study, _ = undisturbed
    dask_here.ensure_workers(2)
    child = driver(study, tmp_path / "out", dask_here.address, "slow")
    assert "planned" in child.stdout.readline()
    with pytest.raises(SettingsError, match="another run is writing"):
        finished_run(study, tmp_path / "out", dask_here)
    child.kill()
    child.communicate()


def test_an_address_where_nothing_answers_is_refused_in_a_sentence(boxes, tmp_path):
    with pytest.raises(SettingsError, match=r"--scheduler is 'tcp://127.0.0.1:9', and nothing answers there"):
        run_study(boxes, tmp_path / "out", scheduler="tcp://127.0.0.1:9", report=False)


def test_a_large_shape_does_not_run_beside_others_beyond_the_memory(undisturbed, dask_here, tmp_path):
    """Each case is estimated at about 0.5 GB: with 0.6 GB one runs at a time, though there are two workers."""
    study, _ = undisturbed
    dask_here.ensure_workers(2)

    def most_at_once(memory_mb, out):
        events, running, most = [], set(), 0
        run_study(
            study,
            out,
            scheduler=dask_here.address,
            report=False,
            solve=study_stubs.slow,
            memory_mb=memory_mb,
            events=events.append,
        )
        for event in events:
            if event["event"] == "started":
                running.add(event["case"])
            if event["event"] == "finished":
                running.discard(event["case"])
            most = max(most, len(running))
        return most

    assert most_at_once(600.0, tmp_path / "little") == 1
    assert most_at_once(6000.0, tmp_path / "plenty") >= 2
