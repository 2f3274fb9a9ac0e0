"""Wrong files, keys, options and places: one clear message, exit code 2, nothing written or changed."""

import json
import os
import subprocess
import sys

import h5py
import pytest
from annotated_types import Ge, Gt
from commands import MAP, SWEEP, changed, contents, kondomf, refused, toml, write

from kondomf.material.load import FIELDS, NOT_NUMERIC

# ---- wrong materials ---------------------------------------------------------------------------------------------

UNITS = {"meV": "eV", "angstrom": "nm", "K": "C", "degree": "rad", "cm2": "m2", "tesla": "gauss"}


def unit_of(key):
    return next((unit for unit in UNITS if key.endswith(f"_{unit}") or key.endswith(f".{unit}")), None)


def bounded(key):
    return any(isinstance(rule, Ge | Gt) for rule in FIELDS[key].metadata)


def refused_material(folder, values, *fragments, lines=1):
    text = refused(folder, ["check", write(folder, values), "--json", folder / "out.json"], *fragments)
    assert len(text.splitlines()) <= lines, text
    assert "material.toml" in text


@pytest.mark.parametrize("key", FIELDS)
def test_a_key_of_the_wrong_type_is_refused(tmp_path, key):
    value = 3.5 if key in NOT_NUMERIC else "3"
    refused_material(tmp_path, {key: value}, f"{key} = {json.dumps(value)}", "; give ")


@pytest.mark.parametrize("key", FIELDS)
def test_a_misspelt_key_is_refused_with_the_right_spelling(tmp_path, key):
    misspelt = f"{key[:-2]}{key[-1]}{key[-2]}" if key[-1] != key[-2] else key[:-1]
    lines = 2 if FIELDS[key].is_required() or key.endswith(("filling", "temperature_meV")) else 1
    value = {"name": "x"}.get(key, 1.0)
    refused_material(
        tmp_path, {key: None, misspelt: value}, f"unknown key {misspelt}; instead of", key.split(".")[-1], lines=lines
    )


@pytest.mark.parametrize("key", [key for key in FIELDS if unit_of(key)])
def test_a_key_with_another_unit_is_refused_with_the_right_unit(tmp_path, key):
    unit = unit_of(key)
    other = key.removesuffix(unit) + UNITS[unit]
    lines = 2 if FIELDS[key].is_required() or key.endswith("temperature_meV") else 1
    refused_material(
        tmp_path, {key: None, other: 1.0}, f"unknown key {other}; instead of", key.split(".")[-1], lines=lines
    )


@pytest.mark.parametrize("key", [key for key in FIELDS if bounded(key)])
def test_a_key_of_the_wrong_sign_is_refused(tmp_path, key):
    value = -1 if key in ("zone.points", "search.starts", "search.seed") else -1.0
    refused_material(tmp_path, {key: value}, f"{key} = {value}; give ")


@pytest.mark.parametrize(
    ("values", "fragment"),
    [
        ({"conduction_layer.filling": 2.0}, "strictly between 0 and 2"),
        ({"conduction_layer.filling": 0.0}, "strictly between 0 and 2"),
        ({"mean_field.temperature_K": 0.0}, "the temperature in kelvin, above 0"),
        ({"mean_field.temperature_meV": -1.0}, "above 0"),
        ({"mean_field.cell": [[1, 1], [2, 2]]}, "singular, its rows are parallel"),
        ({"conduction_layer.density_per_cm2": 1e20}, "give an absolute value below"),
        ({"conduction_layer.charge_transfer_meV": 1e5}, "give a smaller absolute value"),
        ({"mean_field.exchange_form": "kitaev"}, 'mean_field.kondo_form to "so4"'),
        ({"mean_field": None}, "section [mean_field] is missing"),
    ],
)
def test_an_impossible_material_is_refused_with_the_remedy(tmp_path, values, fragment):
    refused_material(tmp_path, values, fragment)


def test_two_doping_keys_are_refused(tmp_path):
    data = changed({})
    data["conduction_layer"]["density_per_cm2"] = 1e12
    (tmp_path / "material.toml").write_text(toml(data))
    text = refused(tmp_path, ["check", tmp_path / "material.toml"])
    assert "filling and density_per_cm2 exclude each other; keep one of them" in text


@pytest.mark.parametrize("command", ["check", "solve", "effective"])
@pytest.mark.parametrize(
    ("name", "content", "fragment"),
    [
        ("absent.toml", None, "does not exist"),
        ("broken.toml", b"name = ", "is not valid TOML"),
        ("binary.toml", b"\x00\xff\xfe", "not UTF-8"),
        ("folder", "folder", "is a directory"),
        ("n" * 300, None, "File name too long"),
        ("broken.toml/material.toml", None, "material.toml"),
    ],
)
def test_a_material_that_cannot_be_read_is_refused_by_every_command(tmp_path, command, name, content, fragment):
    (tmp_path / "broken.toml").write_bytes(b"name = ")
    if content == "folder":
        (tmp_path / name).mkdir()
    elif content:
        (tmp_path / name).write_bytes(content)
    refused(tmp_path, [command, tmp_path / name, "--json", tmp_path / "out.json"], fragment)


def test_a_wrong_file_in_a_process_of_its_own_has_no_traceback(tmp_path):
    material = write(tmp_path, {"kondo.coupling_meV": "strong"})
    result = subprocess.run(
        [sys.executable, "-m", "kondomf.cli", "solve", material, "--json", tmp_path / "out.json"],
        capture_output=True,
        text=True,
    )
    expected = f'error: {material}, line 10: kondo.coupling_meV = "strong": not a number; give the Kondo coupling'
    assert (result.returncode, result.stdout) == (2, "")
    assert result.stderr.startswith(expected)
    assert len(result.stderr.splitlines()) == 1
    assert list(tmp_path.iterdir()) == [material]


# ---- outputs that cannot be written ------------------------------------------------------------------------------

WRITERS = [
    ("check", "material.toml", "--json", ".json"),
    ("solve", "material.toml", "--json", ".json"),
    ("solve", "material.toml", "--state", ".h5"),
    ("bands", "state.h5", "--json", ".json"),
    ("bands", "state.h5", "--figure", ".png"),
    ("bands", "state.h5", "--data", ".csv"),
    ("effective", "state.h5", "--json", ".json"),
    ("oscillations", "model.json", "--json", ".json"),
    ("oscillations", "model.json", "--figure", ".pdf"),
    ("oscillations", "model.json", "--data", ".csv"),
    ("map", "sweep.run", "--json", ".json"),
    ("map", "sweep.run", "--figure", ".svg"),
    ("map", "sweep.run", "--data", ".csv"),
]


@pytest.fixture
def no_work(monkeypatch):
    """Whatever reads or computes fails the test: outputs are refused before."""

    def work(*_, **__):
        pytest.fail("computed before the output was refused")

    for place in ("material.load_material", "meanfield.load_state", "effective.effective_model"):
        monkeypatch.setattr(f"kondomf.{place}", work)
    for place in ("effective.read_model", "sweep.open_run"):
        monkeypatch.setattr(f"kondomf.{place}", work)


@pytest.mark.usefixtures("no_work")
@pytest.mark.parametrize(("command", "source", "option", "suffix"), WRITERS)
def test_an_output_that_cannot_be_written_is_refused_before_any_work(
    chain, tmp_path, monkeypatch, command, source, option, suffix
):
    taken, folder = tmp_path / f"taken{suffix}", tmp_path / f"folder{suffix}"
    taken.write_text("precious")
    folder.mkdir()
    cases = {
        taken: f"{taken} exists; choose another name or pass --overwrite to replace it",
        folder: f"{folder} is a directory; give the name of a file",
        tmp_path / "missing" / f"x{suffix}": f"{tmp_path / 'missing'} does not exist; create it first",
        taken / f"x{suffix}": f"cannot write {taken / f'x{suffix}'}: {taken} is a file, not a folder",
        tmp_path / ("n" * 300 + suffix): "File name too long; choose another name or folder",
    }
    for path, message in cases.items():
        refused(tmp_path, [command, chain / source, option, path], message)
    monkeypatch.setattr(os, "access", lambda _, mode: mode != os.W_OK)  # the superuser may write everywhere
    message = f"no permission to write in {tmp_path}; choose another folder"
    refused(tmp_path, [command, chain / source, option, tmp_path / f"new{suffix}"], message)


@pytest.mark.usefixtures("no_work")
@pytest.mark.parametrize(
    ("command", "source"), [("bands", "state.h5"), ("oscillations", "model.json"), ("map", "sweep.run")]
)
def test_a_figure_of_unknown_format_or_two_outputs_of_one_name_are_refused_before_any_work(
    chain, tmp_path, command, source
):
    refused(tmp_path, [command, chain / source, "--figure", tmp_path / "x.gif"], "use .png, .pdf, .svg")
    both = ["--json", tmp_path / "x.csv", "--data", tmp_path / "x.csv"]
    refused(tmp_path, [command, chain / source, *both], "x.csv is named for two outputs; give each its own file")


@pytest.mark.parametrize("place", ["file", "file/demo"])
def test_new_refuses_a_folder_that_cannot_be_made(tmp_path, place):
    (tmp_path / "file").write_text("precious")
    refused(tmp_path, ["new", tmp_path / place], "cannot create the folder", "choose another one")


def test_a_disk_that_fills_up_leaves_the_old_output(chain, tmp_path, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    path = tmp_path / "out.json"
    path.write_text("precious")
    monkeypatch.setattr(os, "fsync", full)
    result = kondomf("check", chain / "material.toml", "--json", path, "--overwrite")
    assert result.exit_code == 2
    assert "No space left on device; free space or choose another folder" in result.stderr
    assert path.read_text() == "precious"
    assert list(tmp_path.iterdir()) == [path]


# ---- state and run files -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("command", ["bands", "effective"])
@pytest.mark.parametrize("damage", ["missing", "text", "empty", "truncated", "version"])
def test_a_state_file_that_is_none_is_refused(chain, tmp_path, command, damage):
    path = tmp_path / "state.h5"
    if damage != "missing":
        path.write_bytes((chain / "state.h5").read_bytes())
    if damage == "text":
        path.write_text("name = 3")
    elif damage == "empty":
        path.write_bytes(b"")
    elif damage == "truncated":
        path.write_bytes(path.read_bytes()[:3000])
    elif damage == "version":
        with h5py.File(path, "a") as file:
            file.attrs["schema"] = 7
    fragments = {"missing": "no state file", "version": "of schema 7; this version reads state files of schema 2"}
    fragment = fragments.get(damage, "truncated or not HDF5")
    refused(tmp_path, [command, path, "--json", tmp_path / "out.json"], fragment, "--state")


def copy_run(source, target):
    target.mkdir()
    for name in ("run.toml", "points.sqlite", "run.h5"):
        (target / name).write_bytes((source / name).read_bytes())


@pytest.mark.parametrize("command", ["progress", "map", "sweep"])
@pytest.mark.parametrize(
    ("damage", "fragment"),
    [
        ("file", "sweep.run"),
        ("no header", "run.toml is missing"),
        ("cut header", "is damaged or cut off"),
        ("version", "has schema version 99, this version of kondomf reads"),
        ("no record", "points.sqlite is missing"),
        ("cut record", "points.sqlite is damaged"),
        ("text record", "points.sqlite is damaged, cut off or not the record of a run"),
    ],
)
def test_a_run_that_is_none_is_refused(chain, tmp_path, command, damage, fragment):
    write(tmp_path, MAP)
    sweep, run = tmp_path / "sweep.toml", tmp_path / "sweep.run"
    sweep.write_text(SWEEP)
    if damage == "file":
        run.write_text("x")
    else:
        copy_run(chain / "sweep.run", run)
        header, record = run / "run.toml", run / "points.sqlite"
        text = header.read_text()
        if damage == "no header":
            header.unlink()
        elif damage == "cut header":
            header.write_text(text[: len(text) // 3])
        elif damage == "version":
            header.write_text("\n".join("schema = 99" if x.startswith("schema") else x for x in text.splitlines()))
        elif damage == "no record":
            record.unlink()
        elif damage == "cut record":
            record.write_bytes(record.read_bytes()[:5000])
        else:
            record.write_text("name = 3\n" * 200)
    before = contents(tmp_path)
    result = kondomf(command, sweep if command == "sweep" else run)
    assert (result.exit_code, result.stdout) == (2, "")
    assert result.stderr.startswith("error: ")
    assert fragment in result.stderr
    assert isinstance(result.exception, SystemExit)
    after = contents(tmp_path)
    for name in ("LOCK", "points.sqlite-shm", "points.sqlite-wal"):  # who looked last, and SQLite's own files
        after.pop(run / name, None)
    assert after == before


@pytest.mark.parametrize("command", ["progress", "map"])
def test_a_run_that_is_not_there_is_refused(tmp_path, command):
    refused(tmp_path, [command, tmp_path / "absent.run"], "is not the folder of a run")


def test_a_sweep_whose_inputs_changed_is_refused_with_the_difference(chain, tmp_path):
    write(tmp_path, MAP | {"zone.points": 6})
    (tmp_path / "sweep.toml").write_text(SWEEP)
    copy_run(chain / "sweep.run", tmp_path / "sweep.run")
    refused(tmp_path, ["sweep", tmp_path / "sweep.toml"], "zone.points: 4 in the run, 6 now", "choose another folder")


def test_a_sweep_into_a_place_that_cannot_hold_it_is_refused(chain, tmp_path):
    (tmp_path / "file").write_text("precious")
    for place in ("file", "file/run"):
        refused(tmp_path, ["sweep", chain / "sweep.toml", "--run", tmp_path / place], str(tmp_path / "file"))


def test_a_sweep_of_a_missing_material_is_refused(tmp_path):
    (tmp_path / "sweep.toml").write_text(SWEEP)
    refused(tmp_path, ["sweep", tmp_path / "sweep.toml"], "material.toml does not exist")
    refused(tmp_path, ["sweep", tmp_path / "absent.toml"], "cannot read the sweep file")
