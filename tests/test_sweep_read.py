"""Looking at a run: what is committed is shown on the grid of the axes, and the pace comes from all points."""

import io

import numpy as np
import pytest
from test_sweep_synthetic import BAD_POINT, SHAPE, SIZE, write_sweep

from kondomf.errors import InputError
from kondomf.sweep import progress as progress_module
from kondomf.sweep.folder import locked
from kondomf.sweep.progress import console_progress, duration_text, state_text
from kondomf.sweep.read import open_run, progress_text
from kondomf.sweep.run import run_sweep


@pytest.fixture(scope="module")
def halfway(tmp_path_factory):
    """A run stopped after ten points."""
    folder = tmp_path_factory.mktemp("halfway")
    answers = iter([False] * 10 + [True])
    run_sweep(write_sweep(folder), folder / "run", point="test_sweep_synthetic:wave", stop=lambda: next(answers))
    return open_run(folder / "run")


def test_quantities_have_the_shape_of_the_axes_and_gaps_where_nothing_is_committed(halfway):
    assert halfway.shape == SHAPE
    assert [axis.key for axis in halfway.axes] == ["kondo.coupling_meV", "conduction_layer.filling"]
    assert halfway.phases == ("any", "heavy-fermi-liquid")
    status, gap = halfway.status("any"), halfway.quantity("any", "gap_meV")
    assert status.shape == gap.shape == halfway.quantity("any", "phase").shape == SHAPE
    assert (status != "").sum() + (halfway.status("heavy-fermi-liquid") != "").sum() == 10
    assert np.isnan(gap[status == ""]).all()
    assert gap[0, 0] == 0.7
    assert halfway.quantity("any", "phase")[0, 0] == "cold"
    assert "evaluations" in halfway.quantities("any")


def test_arrays_come_by_index(halfway):
    assert halfway.array_names("any") == ["fields_meV", "spectrum"]
    fields = halfway.arrays("any", "fields_meV")
    assert set(fields) == {index for index in np.ndindex(SHAPE) if halfway.status("any")[index]}
    assert fields[0, 0].sum() == halfway.quantity("any", "free_energy_meV_per_cell")[0, 0]


def test_the_summary_counts_every_point_once(halfway):
    summary = halfway.summary()
    assert summary.done + summary.failed == 10
    assert summary.remaining == SIZE - 10
    assert sum(sum(counts.values()) for counts in summary.statuses.values()) == 10
    assert summary.remaining_seconds == pytest.approx(summary.seconds_per_point * (SIZE - 10))
    assert summary.working is None


def test_the_progress_text_says_how_far_it_is_and_how_to_go_on(halfway):
    text = progress_text(halfway)
    assert f"10 of {SIZE} points (42%)" in text
    assert "3 values, 0 to 600" in text
    assert "start the same sweep" in text
    with locked(halfway.folder):
        assert "running: process" in progress_text(halfway)


def test_the_reason_of_a_failed_point_is_shown(tmp_path):
    outcome = run_sweep(write_sweep(tmp_path), tmp_path / "run", point="test_sweep_synthetic:wave")
    assert outcome.failed == 2
    text = progress_text(open_run(tmp_path / "run"))
    assert f"failed any {list(BAD_POINT)}: RuntimeError: no such wave at this point" in text
    assert "go on" not in text


def test_unknown_names_are_answered_with_the_known_ones(halfway):
    for call in (lambda: halfway.quantity("any", "gap"), lambda: halfway.quantity("solid", "gap_meV")):
        with pytest.raises(InputError, match="it has"):
            call()
    with pytest.raises(InputError, match="fields_meV, spectrum"):
        halfway.arrays("any", "fields")


@pytest.mark.parametrize("name", ["nowhere", "empty", "file"])
def test_what_is_no_run_is_refused(tmp_path, name):
    (tmp_path / "empty").mkdir()
    (tmp_path / "file").touch()
    with pytest.raises(InputError, match="not the folder of a run"):
        open_run(tmp_path / name)


def test_a_log_file_gets_a_line_at_the_start_at_intervals_and_at_the_end(monkeypatch):
    now = 0.0
    monkeypatch.setattr(progress_module.time, "monotonic", lambda: now)
    stream = io.StringIO()
    progress = console_progress(stream)
    progress.start(10, 2, 1)
    for now in (10.0, 20.0, 40.0, 50.0):  # the clock reads it
        progress.point(failed=now == 40.0)
    progress.close()
    assert stream.getvalue().splitlines() == [
        "2 of 10 points (20%), 1 failed",
        "5 of 10 points (50%), 2 failed, 13 s a point, about 1 min left",
        "6 of 10 points (60%), 2 failed, 12 s a point, about 50 s left",
    ]


def test_a_terminal_gets_a_bar():
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    stream = Terminal()
    progress = console_progress(stream)
    progress.start(4, 1, 0)
    progress.point(failed=True)
    progress.tick()
    progress.close()
    assert "\r" in stream.getvalue()
    assert "2/4" in stream.getvalue()
    assert "failed=1" in stream.getvalue()


def test_spans_are_told_in_the_units_that_matter():
    spans = [0.0123, 3.21, 59, 150, 3600 * 3 + 60 * 7, 3600 * 24 * 2 + 3600 * 5]
    assert [duration_text(s) for s in spans] == ["0.012 s", "3.2 s", "59 s", "2 min", "3 h 7 min", "2 d 5 h"]
    assert state_text(3, 0, 3, 1.0) == "3 of 3 points (100%), 1 s a point"
