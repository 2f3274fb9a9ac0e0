"""Ctrl-C and SIGTERM in a process of its own: orderly, resumable, nothing left behind."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from test_sweep_synthetic import SIZE, write_sweep

from kondomf.errors import InputError
from kondomf.sweep.folder import PRODUCT
from kondomf.sweep.product import compare_products
from kondomf.sweep.read import open_run
from kondomf.sweep.run import run_sweep

SCRIPT = """
import sys
from kondomf.sweep.progress import console_progress
from kondomf.sweep.run import run_sweep
sweep, folder, point, backend, workers, grace = sys.argv[1:]
outcome = run_sweep(sweep, folder, point="test_sweep_synthetic:" + point, backend=backend, workers=int(workers),
                    progress=console_progress(), grace_seconds=float(grace))
sys.exit(130 if outcome.interrupted else 0)
"""


def start(sweep, folder, point, backend, workers, grace):
    """The sweep in a process group of its own, as a shell would start it."""
    arguments = [sweep, folder, point, backend, workers, grace]
    return subprocess.Popen(
        [sys.executable, "-c", SCRIPT, *map(str, arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        start_new_session=True,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parent), "SYNTHETIC_PAUSE_SECONDS": "0.3"},
    )


def wait_until(condition, seconds=30.0):
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline
        time.sleep(0.02)


def points_done(folder):
    try:
        return SIZE - open_run(folder).summary().remaining
    except InputError:  # the folder does not exist yet
        return 0


def group_is_gone(process):
    try:
        os.killpg(process.pid, 0)
    except ProcessLookupError:
        return True
    return False


@pytest.mark.parametrize(("backend", "workers"), [("serial", 1), ("local", 2)])
def test_ctrl_c_and_resumption_equal_an_uninterrupted_run(tmp_path, backend, workers):
    sweep = write_sweep(tmp_path)
    process = start(sweep, tmp_path / "run", "wave", backend, workers, 20)
    wait_until(lambda: points_done(tmp_path / "run") >= 3)
    before = points_done(tmp_path / "run")
    os.killpg(process.pid, signal.SIGINT)  # a terminal sends it to the workers too
    output, _ = process.communicate(timeout=30)
    assert process.returncode == 130, output
    assert "once more to stop at once" in output
    assert "Traceback" not in output
    assert "failed" not in output
    wait_until(lambda: group_is_gone(process))
    assert before + workers <= points_done(tmp_path / "run") < SIZE, "running points finish, the others are left"
    assert (tmp_path / "run" / PRODUCT).exists()
    for folder in ("run", "whole"):
        assert run_sweep(sweep, tmp_path / folder, point="test_sweep_synthetic:wave").remaining == 0
    assert compare_products(tmp_path / "run" / PRODUCT, tmp_path / "whole" / PRODUCT) == []


@pytest.mark.parametrize(("backend", "workers"), [("serial", 1), ("local", 1)])
def test_points_that_outlast_the_grace_are_given_up_and_the_product_is_rebuilt(tmp_path, backend, workers):
    process = start(write_sweep(tmp_path), tmp_path / "run", "endless", backend, workers, 0.3)
    wait_until(lambda: "0 of 24 points" in process.stdout.readline())
    time.sleep(1.0)
    process.send_signal(signal.SIGTERM)
    output, _ = process.communicate(timeout=20)
    assert process.returncode == 130, output
    assert "Traceback" not in output
    wait_until(lambda: group_is_gone(process))
    assert (tmp_path / "run" / PRODUCT).exists()
    assert points_done(tmp_path / "run") == 0


@pytest.mark.parametrize(("backend", "workers"), [("serial", 1), ("local", 1)])
def test_the_second_signal_ends_at_once(tmp_path, backend, workers):
    process = start(write_sweep(tmp_path), tmp_path / "run", "endless", backend, workers, 600)
    wait_until(lambda: "0 of 24 points" in process.stdout.readline())
    time.sleep(0.5)
    process.send_signal(signal.SIGINT)
    wait_until(lambda: "stopping" in process.stdout.readline())
    process.send_signal(signal.SIGINT)
    output, _ = process.communicate(timeout=20)
    assert process.returncode == 130, output
    assert "Traceback" not in output
    wait_until(lambda: group_is_gone(process))
    assert not (tmp_path / "run" / PRODUCT).exists()
