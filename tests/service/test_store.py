"""The database: states, the fair queue, files, and what a crash leaves."""

import numpy as np
import pytest

from bemescape.errors import SettingsError
from bemescape.service.problems import Refusal
from bemescape.service.settings import Limits
from bemescape.service.store import Store

FOUND = {"report": {"solvable": True}, "mesh": b"mesh", "healed": b"healed"}


@pytest.fixture
def store(tmp_path):
    store = Store(tmp_path, Limits(queued_runs=50, owner_bytes=10_000))
    yield store
    store.close()


def surface(store, owner="anna", data=b"surface"):
    return store.add_surface(owner, name="ball", suffix=".ply", unit="um", heal="auto", data=data, found=FOUND).id


def queue(store, owner, count=1, surface_id=None):
    place = surface_id or surface(store, owner)
    runs, _ = store.add_runs(owner, [(place, f"{owner} {number}", {"a": number}) for number in range(count)])
    return [run.id for run in runs]


def files_on_disk(tmp_path):
    return sorted(path.name for path in (tmp_path / "files").rglob("*") if path.is_file())


def test_owners_take_turns(store):
    queue(store, "anna", 4)
    queue(store, "bela", 2)
    queue(store, "cleo", 1)
    taken = [store.next_to_solve().owner for _ in range(7)]
    assert taken[:3] == ["anna", "bela", "cleo"]
    assert sorted(taken[3:5]) == ["anna", "bela"]
    assert taken[5:] == ["anna", "anna"]
    assert store.next_to_solve() is None


def test_runs_of_one_owner_keep_their_order(store):
    ids = queue(store, "anna", 3)
    assert [store.next_to_solve().id for _ in range(3)] == ids


def test_an_interrupted_run_is_begun_once_more_and_then_given_up(store):
    (run_id,) = queue(store, "anna")
    store.next_to_solve()
    assert store.recover() == [run_id]
    assert store.run("anna", run_id).state == "queued"
    store.next_to_solve()
    assert store.interrupted(run_id) == "failed"
    run = store.run("anna", run_id)
    assert (run.attempts, run.fault) == (2, "service")
    assert "2 times" in run.reason


def test_what_a_run_answers_after_it_is_over_counts_for_nothing(store):
    (run_id,) = queue(store, "anna")
    store.next_to_solve()
    store.ended(run_id, "cancelled", "cancelled while it was computed", None)
    store.solved(run_id, {"summary.json": b"{}"}, "{}", second_opinion=False)
    assert store.run("anna", run_id).state == "cancelled"
    assert store.run_files(run_id) == {}


def test_what_could_not_be_begun_waits_as_if_it_had_never_been_claimed(store):
    (run_id,) = queue(store, "anna")
    for _ in range(5):
        store.next_to_solve()
        store.put_back(run_id, "state")
        assert (store.run("anna", run_id).state, store.run("anna", run_id).attempts) == ("queued", 0)
    store.next_to_solve()
    store.solved(run_id, {"f": b"x"}, "{}", second_opinion=True)
    store.put_back(run_id, "state")  # done is done
    assert store.run("anna", run_id).state == "done"
    assert store.next_to_draw().id == run_id
    store.put_back(run_id, "pictures")
    assert store.next_to_draw().id == run_id


def test_files_of_runs_go_with_them_and_shared_ones_stay(store, tmp_path):
    first, second = queue(store, "anna", 2)
    for run_id in (first, second):
        store.next_to_solve()
        store.solved(run_id, {"same": b"the same", "own": run_id.encode()}, "{}", second_opinion=False)
    before = len(files_on_disk(tmp_path))
    store.delete_run("anna", first)
    assert len(files_on_disk(tmp_path)) == before - 1
    assert store.files.read(store.run_files(second)["same"]) == b"the same"
    assert store.integrity() == "ok"


def test_a_surface_goes_only_with_its_runs_and_never_from_under_an_active_one(store, tmp_path):
    place = surface(store)
    (run_id,) = queue(store, "anna", 1, place)
    with pytest.raises(Refusal, match="1 run of this surface"):
        store.delete_surface("anna", place, with_runs=False)
    with pytest.raises(Refusal, match="cancel it first"):
        store.delete_surface("anna", place, with_runs=True)
    store.cancel("anna", run_id)
    store.delete_surface("anna", place, with_runs=True)
    assert files_on_disk(tmp_path) == []
    with pytest.raises(Refusal, match="there is no run"):
        store.run("anna", run_id)


def test_half_written_files_vanish_at_the_next_start(store, tmp_path):
    surface(store)
    (tmp_path / "unfinished" / "0123").write_bytes(b"half")
    orphan = store.files.write(b"written, but its row never was")
    store.recover()
    assert list((tmp_path / "unfinished").iterdir()) == []
    assert orphan not in files_on_disk(tmp_path)
    assert len(files_on_disk(tmp_path)) == 3


def test_limits_of_an_owner(store):
    store.check_room("anna", 9_000)
    surface(store, data=b"x" * 9_000)
    with pytest.raises(Refusal, match="would pass the limit"):
        store.check_room("anna", 2_000)
    store.check_room("bela", 2_000)
    with pytest.raises(Refusal, match="limit of 50") as refusal:
        queue(store, "bela", 51)
    assert refusal.value.status == 429
    assert store.runs("bela") == []


def test_old_runs_go_after_their_time(tmp_path):
    store = Store(tmp_path, Limits(keep_days=2.0))
    first, second = queue(store, "anna", 2)
    store.next_to_solve()
    store.solved(first, {"f": b"x"}, "{}", second_opinion=False)
    finished = store.run("anna", first).finished
    assert store.delete_old(finished + 1.9 * 86400) == 0
    assert store.delete_old(finished + 2.1 * 86400) == 1
    assert [run.id for run in store.runs("anna")] == [second]
    store.close()


def test_two_services_cannot_use_one_folder(store, tmp_path):
    with pytest.raises(SettingsError, match="another service uses the data folder"):
        Store(tmp_path, Limits())


def test_second_opinions_wait_for_an_empty_queue(store):
    first, second = queue(store, "anna", 2)
    store.next_to_solve()
    store.solved(first, {"f": b"x"}, "{}", second_opinion=True)
    assert store.next_to_check() is None
    store.next_to_solve()
    assert store.next_to_check() is None
    store.ended(second, "failed", "no", "input")
    assert store.next_to_check().id == first
    assert store.next_to_check() is None


def test_many_threads_claim_each_run_once(store):
    from concurrent.futures import ThreadPoolExecutor

    ids = queue(store, "anna", 40)
    with ThreadPoolExecutor(8) as pool:
        taken = [run.id for run in pool.map(lambda _: store.next_to_solve(), range(60)) if run is not None]
    assert sorted(taken) == sorted(ids)
    assert np.unique(taken).size == 40
