"""Running a sweep: stopped and resumed equals uninterrupted, for any backend; a bad point harms nobody else."""

import sqlite3
import threading

import numpy as np
import pytest
from test_sweep_synthetic import BAD_POINT, SHAPE, SIZE, SWEEP, write_sweep

from kondomf.errors import InputError
from kondomf.sweep import driver as driver_module
from kondomf.sweep import run as run_module
from kondomf.sweep.driver import MAX_ATTEMPTS, Driver
from kondomf.sweep.execute import Finished, Task, execute
from kondomf.sweep.folder import HEADER, LOCK, PRODUCT, RECORD, locked
from kondomf.sweep.plan import load_sweep
from kondomf.sweep.product import compare_products
from kondomf.sweep.progress import Progress
from kondomf.sweep.read import open_run
from kondomf.sweep.record import FAILED, PointResult
from kondomf.sweep.run import RunOutcome, run_sweep
from kondomf.sweep.store import MemoryStore, SqliteStore

WAVE = "test_sweep_synthetic:wave"
ALL_DONE = RunOutcome(done=SIZE - 2, failed=2, remaining=0, interrupted=False)


def after(points):
    """A stop that is asked for after so many points."""
    answers = iter([False] * points + [True] * SIZE)
    return lambda: next(answers)


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """An uninterrupted serial run."""
    folder = tmp_path_factory.mktemp("whole")
    assert run_sweep(write_sweep(folder), folder / "run", point=WAVE) == ALL_DONE
    return folder / "run"


def test_a_finished_run_is_a_folder_of_header_record_product_and_lock(whole):
    assert {path.name for path in whole.iterdir() if not path.match(f"{RECORD}-*")} == {HEADER, RECORD, PRODUCT, LOCK}


def test_stopped_again_and_again_and_resumed_equals_uninterrupted(tmp_path, whole):
    sweep = write_sweep(tmp_path)
    remaining = SIZE
    for points in (1, 4, 0, 7):
        outcome = run_sweep(sweep, tmp_path / "run", point=WAVE, stop=after(points))
        remaining -= points
        assert (outcome.remaining, outcome.interrupted) == (remaining, True)
        with SqliteStore(tmp_path / "run" / RECORD, open_run(whole).header.fingerprint) as store:
            assert len(store.statuses()) == SIZE - remaining
    assert compare_products(tmp_path / "run" / PRODUCT, whole / PRODUCT) != []
    assert run_sweep(sweep, tmp_path / "run", point=WAVE) == ALL_DONE
    assert compare_products(tmp_path / "run" / PRODUCT, whole / PRODUCT) == []


def test_a_run_begun_by_two_worker_processes_and_finished_by_one_equals_the_serial_run(tmp_path, whole):
    sweep = write_sweep(tmp_path)
    first = run_sweep(sweep, tmp_path / "run", point=WAVE, backend="local", workers=2, stop=after(5))
    assert first.interrupted
    assert 0 < first.remaining < SIZE
    assert run_sweep(sweep, tmp_path / "run", point=WAVE) == ALL_DONE
    assert compare_products(tmp_path / "run" / PRODUCT, whole / PRODUCT) == []


def test_a_finished_run_started_again_computes_nothing_and_renews_a_lost_product(tmp_path, whole):
    sweep = write_sweep(tmp_path)
    run_sweep(sweep, tmp_path / "run", point=WAVE)
    (tmp_path / "run" / PRODUCT).unlink()
    launch = open_run(tmp_path / "run").records("any")[-1].execution.launch
    assert run_sweep(sweep, tmp_path / "run", point=WAVE, stop=after(0)) == ALL_DONE
    assert open_run(tmp_path / "run").records("any")[-1].execution.launch == launch == 1
    assert compare_products(tmp_path / "run" / PRODUCT, whole / PRODUCT) == []


def test_a_point_starts_from_the_committed_arrays_of_its_parent(whole):
    run = open_run(whole)
    plan = load_sweep(whole.parent / "sweep.toml")
    fields = {phase: run.arrays(phase, "fields_meV") for phase in run.phases}
    for record in run.records("any") + run.records("heavy-fermi-liquid"):
        parent = plan.parent(record.key)
        arrays = None
        if parent is not None and parent.index in fields[parent.phase]:
            arrays = {"fields_meV": fields[parent.phase][parent.index]}
        result = execute(Task("again", WAVE, record.inputs, record.seed, arrays)).result
        assert (result.status, result.scalars) == (record.result.status, record.result.scalars)


def test_a_point_that_raises_is_a_failed_record_and_its_child_starts_cold(whole):
    run = open_run(whole)
    assert run.status("any")[BAD_POINT] == FAILED
    bad = next(record for record in run.records("any") if record.key.index == BAD_POINT)
    assert bad.result.message == "RuntimeError: no such wave at this point"
    cold = run.quantity("any", "phase") == "cold"
    assert {tuple(index) for index in np.argwhere(cold)} == {(0, 0), (BAD_POINT[0], BAD_POINT[1] + 1)}


def test_a_point_that_kills_its_worker_fails_alone(tmp_path):
    axes = '"kondo.coupling_meV" = [300, 600]\n"conduction_layer.filling" = [0.8, 0.95, 1.0]'
    sweep = write_sweep(tmp_path, f'material = "material.toml"\n[axes]\n{axes}\n')
    point = "test_sweep_synthetic:deadly"
    outcome = run_sweep(sweep, tmp_path / "run", point=point, backend="local", workers=2)
    assert outcome == run_sweep(sweep, tmp_path / "peaceful", point=WAVE) == RunOutcome(5, 1, 0, False)
    run, peaceful = open_run(tmp_path / "run"), open_run(tmp_path / "peaceful")
    assert (run.status("any") == peaceful.status("any")).all()
    np.testing.assert_array_equal(run.quantity("any", "gap_meV"), peaceful.quantity("any", "gap_meV"))
    bad = next(record for record in run.records("any") if record.result.status == FAILED)
    assert "ended its worker" in bad.result.message
    assert bad.execution.attempt == MAX_ATTEMPTS


@pytest.mark.parametrize(("point", "reason"), [("greedy", "read-only"), ("wordy", "only numbers are stored")])
def test_a_point_function_that_breaks_its_contract_fails_with_the_reason(tmp_path, point, reason):
    sweep = write_sweep(tmp_path, 'material = "material.toml"\n[axes]\n"kondo.coupling_meV" = [1, 2]\n')
    run_sweep(sweep, tmp_path / "run", point=f"test_sweep_synthetic:{point}")
    last = open_run(tmp_path / "run").records("any")[-1].result
    assert last.status == FAILED
    assert reason in last.message


def test_numerical_libraries_have_one_thread_inside_a_point_and_their_own_number_again_outside():
    import numba
    from threadpoolctl import threadpool_info

    def threads():
        return [pool["num_threads"] for pool in threadpool_info()], numba.get_num_threads()

    before = threads()
    result = execute(Task("threads", f"{__name__}:count_threads", {}, 0, None)).result
    assert set(result.arrays["threads"]) == {1}
    assert threads() == before


def count_threads(material, seed, parent):
    import numba
    from threadpoolctl import threadpool_info

    threads = [pool["num_threads"] for pool in threadpool_info()]
    return PointResult("minimum", {}, {"threads": np.array([*threads, numba.get_num_threads()])})


def test_changed_inputs_are_refused_with_the_differences_and_nothing_is_touched(tmp_path):
    run_sweep(write_sweep(tmp_path), tmp_path / "run", point=WAVE, stop=after(2))
    before = (tmp_path / "run" / RECORD).read_bytes()
    changed = SWEEP.replace("0.95", "0.96").replace('["any", "heavy-fermi-liquid"]', '["any"]')
    with pytest.raises(InputError) as caught:
        run_sweep(write_sweep(tmp_path, changed), tmp_path / "run", point="test_sweep_synthetic:greedy")
    for line in (
        f'point: "{WAVE}" in the run, "test_sweep_synthetic:greedy" now',
        'phases: ["any", "heavy-fermi-liquid"] in the run, ["any"] now',
        "axes.conduction_layer.filling: [0.7, 0.8, 0.95, 1.0] in the run, [0.7, 0.8, 0.96, 1.0] now",
    ):
        assert line in str(caught.value)
    assert "another folder" in str(caught.value)
    assert (tmp_path / "run" / RECORD).read_bytes() == before


def test_another_order_of_the_same_axes_is_another_run(tmp_path):
    lines = SWEEP.strip().splitlines()
    run_sweep(write_sweep(tmp_path), tmp_path / "run", point=WAVE, stop=after(0))
    swapped = write_sweep(tmp_path, "\n".join([*lines[:-2], lines[-1], lines[-2]]))
    with pytest.raises(InputError, match="axis_order"):
        run_sweep(swapped, tmp_path / "run", point=WAVE)


def test_inputs_that_differ_only_in_how_they_are_written_are_the_same(tmp_path):
    run_sweep(write_sweep(tmp_path), tmp_path / "run", point=WAVE, stop=after(1))
    rewritten = SWEEP.replace("{ from = 0.0, to = 600.0, points = 3 }", "[0, 300, 600]")
    assert run_sweep(write_sweep(tmp_path, rewritten), tmp_path / "run", point=WAVE) == ALL_DONE


def test_an_edited_damaged_or_newer_header_is_refused(tmp_path):
    sweep = write_sweep(tmp_path)
    run_sweep(sweep, tmp_path / "run", point=WAVE, stop=after(0))
    header = tmp_path / "run" / HEADER
    text = header.read_text()
    cases = {
        "edited": text.replace("0.95", "0.96"),
        "damaged": text[: len(text) // 4],
        "schema version 2": text.replace("schema = 1", "schema = 2"),
    }
    for reason, content in cases.items():
        header.write_text(content)
        with pytest.raises(InputError, match=reason):
            run_sweep(sweep, tmp_path / "run", point=WAVE)


def test_a_folder_that_is_no_run_is_refused_and_left_alone(tmp_path):
    sweep = write_sweep(tmp_path)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "notes.txt").write_text("mine")
    (tmp_path / "file").touch()
    for name in ("mine", "file"):
        with pytest.raises(InputError, match=name):
            run_sweep(sweep, tmp_path / name, point=WAVE)
    assert [path.name for path in (tmp_path / "mine").iterdir()] == ["notes.txt"]


def test_a_wrong_call_leaves_no_folder_behind(tmp_path):
    sweep = write_sweep(tmp_path)
    calls = [
        {"point": "test_sweep_synthetic:wafe"},
        {"point": "no_such_module:wave"},
        {"point": WAVE, "backend": "cloud"},
        {"point": WAVE, "workers": 0},
        {"point": WAVE, "workers": 2},
    ]
    for arguments in calls:
        with pytest.raises(InputError):
            run_sweep(sweep, tmp_path / "run", **arguments)
    assert not (tmp_path / "run").exists()


def test_a_run_in_use_is_refused_with_who_uses_it(tmp_path, whole):
    with locked(whole), pytest.raises(InputError, match=r"being worked on by process \d+ on .* since "):
        run_sweep(whole.parent / "sweep.toml", whole, point=WAVE)


def test_outside_the_main_thread_a_run_is_stopped_by_its_argument(tmp_path, whole):
    outcomes = []

    def work():
        outcomes.append(run_sweep(write_sweep(tmp_path), tmp_path / "run", point=WAVE, stop=after(3)))

    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert [outcome.remaining for outcome in outcomes] == [SIZE - 3]


def test_a_full_disk_ends_the_launch_with_a_remedy_and_loses_nothing_committed(tmp_path, whole, monkeypatch):
    put = SqliteStore.put

    def full_after_five(self, record):
        if len(self.statuses()) == 5:
            raise sqlite3.OperationalError("database or disk is full")
        put(self, record)

    monkeypatch.setattr(SqliteStore, "put", full_after_five)
    sweep = write_sweep(tmp_path)
    outcome = run_sweep(sweep, tmp_path / "run", point=WAVE)
    assert (outcome.remaining, outcome.interrupted) == (SIZE - 5, False)
    assert "free space" in outcome.problem
    monkeypatch.undo()
    assert run_sweep(sweep, tmp_path / "run", point=WAVE) == ALL_DONE
    assert compare_products(tmp_path / "run" / PRODUCT, whole / PRODUCT) == []


def test_too_little_space_is_said_before_and_noticed_during_the_run(tmp_path, monkeypatch):
    sweep = write_sweep(tmp_path)
    monkeypatch.setattr(run_module, "_FREE_BYTES", 2**80)
    outcome = run_sweep(sweep, tmp_path / "run", point=WAVE)
    assert (outcome.done, outcome.remaining) == (0, SIZE)
    assert "MiB are needed" in outcome.problem
    answers = iter([None, None, "only 1 MiB is free"])
    monkeypatch.setattr(run_module, "_space_problem", lambda folder: next(answers))
    monkeypatch.setattr(driver_module, "_HOUSEKEEPING_SECONDS", -1.0)
    outcome = run_sweep(sweep, tmp_path / "run", point=WAVE)
    assert (outcome.done, outcome.problem, outcome.interrupted) == (2, "only 1 MiB is free", False)


class LostWorkers:
    """An executor that takes tasks and never hands any back."""

    slots = 5

    def __init__(self):
        self.submitted = []

    def submit(self, task):
        self.submitted.append(task.name)

    def next_finished(self, timeout):
        return None

    def worker_count(self):
        return 0


def driver_of(tmp_path, executor):
    plan = load_sweep(write_sweep(tmp_path))
    return Driver(plan, WAVE, MemoryStore(), Progress(), lambda: False, lambda: None)


def test_a_launch_without_workers_ends_with_a_remedy(tmp_path, monkeypatch):
    monkeypatch.setattr(driver_module, "_NO_WORKER_SECONDS", 0.05)
    executor = LostWorkers()
    driver = driver_of(tmp_path, executor)
    driver.run(executor, 1)
    assert "start the same sweep again" in driver.problem


def test_only_points_with_a_committed_parent_are_handed_out(tmp_path, monkeypatch):
    monkeypatch.setattr(driver_module, "_NO_WORKER_SECONDS", 0.05)
    executor = LostWorkers()
    driver_of(tmp_path, executor).run(executor, 1)
    assert executor.submitted == ["any [0, 0], attempt 1", "heavy-fermi-liquid [0, 0], attempt 1"]


class Fragile:
    """An executor whose one worker dies with everything it was given as soon as a deadly point is among it."""

    slots = 4

    def __init__(self, deadly):
        self.deadly, self.tasks, self.lost = deadly, [], []

    def submit(self, task):
        self.tasks.append(task)

    def next_finished(self, timeout):
        if any(task.name.rpartition(", attempt")[0] in self.deadly for task in self.tasks):
            self.lost, self.tasks = [*self.lost, *self.tasks], []
        return Finished(self.lost.pop().name, None) if self.lost else execute(self.tasks.pop())

    def worker_count(self):
        return 1


@pytest.mark.parametrize("seed", range(5))
def test_however_many_points_are_deadly_no_other_is_held_guilty(tmp_path, seed):
    plan, store = load_sweep(write_sweep(tmp_path)), MemoryStore()
    store.begin_launch(None)
    keys = np.array(sorted(plan.points()), dtype=object)
    deadly = set(np.random.default_rng(seed).choice(keys, size=SIZE // 3, replace=False))
    Driver(plan, WAVE, store, Progress(), lambda: False, lambda: None).run(Fragile(set(map(str, deadly))), 1)
    guilty = {r.key for phase in plan.phases for r in store.records(phase) if "ended its worker" in r.result.message}
    assert len(store.statuses()) == SIZE
    assert guilty == deadly


def test_every_point_is_announced_once(tmp_path):
    class Counter(Progress):
        calls: tuple = ()

        def start(self, total, done, failed):
            self.calls += (("start", total, done, failed),)

        def point(self, failed):
            self.calls += (("point", failed),)

        def close(self):
            self.calls += ("close",)

    sweep, counter = write_sweep(tmp_path), Counter()
    run_sweep(sweep, tmp_path / "run", point=WAVE, stop=after(3))
    run_sweep(sweep, tmp_path / "run", point=WAVE, progress=counter)
    assert counter.calls[0] == ("start", SIZE, 3, 0)
    assert counter.calls[-1] == "close"
    assert [call[1] for call in counter.calls[1:-1]].count(True) == 2
    assert len(counter.calls) == 2 + SIZE - 3


def test_the_grid_of_the_run_is_the_grid_of_the_sweep(whole):
    assert open_run(whole).shape == SHAPE
    assert open_run(whole).material["zone"]["method"] == "uniform", "defaults are written out"
