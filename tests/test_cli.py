"""The commands: tables, JSON, figures, exit codes, and one clear message for everything that cannot work."""

import csv
import json
import os
import subprocess
import sys
from inspect import signature

import h5py
import numpy as np
import pytest
from annotated_types import Ge, Gt
from click.testing import CliRunner

from kondomf.cli import main, number_list
from kondomf.errors import InputError
from kondomf.material.load import FIELDS, NOT_NUMERIC
from kondomf.material.schema import DOPING_KEYS, TEMPERATURE_KEYS

COMMANDS = list(main.commands)
MATERIAL = {
    "name": "invented for tests",
    "spin_layer": {"lattice_constant_angstrom": 5.0, "kitaev_meV": 300.0},
    "conduction_layer": {"lattice_constant_angstrom": 5.0, "hopping_meV": 1000.0, "filling": 0.9},
    "kondo": {"coupling_meV": 2200.0},
    "mean_field": {"exchange_form": "so4", "magnetic_channel": False, "temperature_meV": 20.0},
    "zone": {"points": 6},
    "search": {"phase": "heavy-fermi-liquid", "starts": 1},
}
COLD = {"conduction_layer.filling": 0.985, "kondo.coupling_meV": 1300.0, "mean_field.temperature_meV": 0.1}
SWEEP = """
material = "material.toml"
[axes]
"kondo.coupling_meV" = [0.0, 2200.0]
"conduction_layer.filling" = [0.9, 1.0]
"""
MAP = {"search.phase": "any", "mean_field.exchange_form": "kitaev", "zone.points": 4}
RESULT_KEYS = [
    "free_energy_meV_per_cell",
    "entropy_kB_per_cell",
    "filling",
    "chemical_potential_meV",
    "multipliers_meV",
    "status",
    "residual_meV",
    "curvature_min",
    "curvature_full_space",
    "zero_modes",
    "hybridization_singular_values",
    "spin_moment",
    "electron_moment",
    "bond_energies_meV",
    "pairing",
    "gap_meV",
    "chern_number",
    "phase",
    "phase_evidence",
    "zone_error_meV",
    "evaluations",
    "wall_seconds",
    "inputs",
    "versions",
]


def kondomf(*arguments):
    """Run a command in this process, with standard output and error apart."""
    apart = {"mix_stderr": False} if "mix_stderr" in signature(CliRunner).parameters else {}
    return CliRunner(**apart).invoke(main, [str(argument) for argument in arguments])


def done(*arguments):
    result = kondomf(*arguments)
    assert result.exit_code == 0, result.output
    return result.stdout


def toml(data):
    """A material as TOML; `data` holds plain keys and one level of sections."""
    lines = [f"{key} = {json.dumps(value)}" for key, value in data.items() if not isinstance(value, dict)]
    for section, keys in data.items():
        if isinstance(keys, dict):
            lines += [f"[{section}]", *(f"{key} = {json.dumps(value)}" for key, value in keys.items())]
    return "\n".join(lines) + "\n"


def changed(values):
    """MATERIAL with dotted keys set; None removes one, and a doping or temperature key replaces its rivals."""
    data = json.loads(json.dumps(MATERIAL))
    for dotted, value in values.items():
        section, _, key = dotted.rpartition(".")
        place = data.setdefault(section, {}) if section else data
        for rivals in (DOPING_KEYS, TEMPERATURE_KEYS):
            if key in rivals:
                place = data[section] = {name: kept for name, kept in place.items() if name not in rivals}
        if value is None:
            place.pop(key, None)
        else:
            place[key] = value
    return data


def write(folder, values=(), name="material.toml"):
    path = folder / name
    path.write_text(toml(changed(dict(values))))
    return path


def contents(folder):
    """Every file with its bytes; readers of a run may leave SQLite's own two files beside its record."""
    paths = [path for path in sorted(folder.rglob("*")) if not path.name.endswith(("-shm", "-wal"))]
    return {path: path.read_bytes() if path.is_file() else None for path in paths}


def refused(folder, arguments, *fragments):
    """The command ends with one message on standard error and exit code 2, and changes no file; returns the message."""
    before = contents(folder)
    result = kondomf(*arguments)
    assert isinstance(result.exception, SystemExit), result.exception
    assert result.exit_code == 2
    assert result.stdout == ""
    assert result.stderr.startswith("error: ")
    assert result.stderr.count("error: ") == 1
    assert "Traceback" not in result.stderr
    for fragment in fragments:
        assert fragment in result.stderr, result.stderr
    assert contents(folder) == before
    return result.stderr


@pytest.fixture(scope="module")
def chain(tmp_path_factory):
    """A folder in which a material was solved and a sweep was run."""
    folder = tmp_path_factory.mktemp("chain")
    material = write(folder)
    (folder / "sweep.toml").write_text(SWEEP)
    solved = kondomf("solve", material, "--state", folder / "state.h5", "--json", folder / "result.json")
    assert solved.exit_code == 0, solved.output
    (folder / "solve.txt").write_text(solved.stdout)
    (folder / "solve.log").write_text(solved.stderr)
    write(folder, MAP)
    (folder / "sweep.txt").write_text(done("sweep", folder / "sweep.toml"))
    write(folder)
    done("effective", write(folder, COLD, "cold.toml"), "--json", folder / "model.json")
    return folder


# ---- help and start-up -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_every_command_shows_an_example_of_it(command):
    text = done(command, "--help")
    assert f"Example:\n    kondomf {command} " in text
    assert text == done(command, "-h")


def test_help_lists_the_commands_of_the_whole_chain_and_needs_no_heavy_import():
    chain = ["new", "check", "solve", "bands", "effective", "oscillations", "sweep", "progress", "map"]
    assert set(chain) <= set(COMMANDS)
    script = "import sys, kondomf.cli; print({'numpy', 'h5py', 'matplotlib', 'distributed'} & set(sys.modules))"
    result = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert result.stdout == "set()\n"


def test_an_unknown_command_or_option_is_a_usage_error_with_exit_code_2():
    for arguments in (["sovle"], ["solve"], ["solve", "x", "--stat", "y"], ["bands", "x", "--points", "few"]):
        result = kondomf(*arguments)
        assert result.exit_code == 2
        assert result.stdout == ""
        assert "Error: " in result.stderr


# ---- what works --------------------------------------------------------------------------------------------------


def test_new_writes_files_that_check_accepts_and_refuses_to_overwrite_them(tmp_path):
    text = done("new", tmp_path / "demo")
    assert text.splitlines() == [f"wrote {tmp_path / 'demo' / name}" for name in ("material.toml", "sweep.toml")]
    assert "Dirac velocity" in done("check", tmp_path / "demo" / "material.toml")
    refused(tmp_path, ["new", tmp_path / "demo"], "material.toml exists", "--overwrite")
    done("new", tmp_path / "demo", "--overwrite")


def test_check_prints_derived_quantities_and_warnings_and_writes_them_as_json(tmp_path):
    material = write(tmp_path, {"conduction_layer.filling": 1.0})
    text = done("check", material, "--json", tmp_path / "check.json")
    assert "warning: temperature 20 meV is small against the level spacing" in text
    derived = json.loads((tmp_path / "check.json").read_text())
    assert derived == json.loads(done("check", material, "--json", "-"))
    assert derived["dirac_velocity_m_per_s"] == pytest.approx(6.579e5, rel=1e-3)


def test_solve_prints_a_table_and_writes_every_promised_key(chain):
    text = (chain / "solve.txt").read_text()
    assert text.startswith("phase               heavy Fermi liquid\n")
    assert "Mean-field theory of Majorana partons" in text
    assert (chain / "solve.log").read_text().startswith("start 1 (hybridized 0): minimum, F = ")
    result = json.loads((chain / "result.json").read_text())
    assert set(RESULT_KEYS) <= set(result)
    assert {"singlet", "triplet"} <= set(result["pairing"])
    assert {"broken_generators", "gauge_directions"} <= set(result["zero_modes"])
    assert result["status"] == "minimum-in-class"
    assert result["inputs"]["kondo"]["coupling_meV"] == 2200
    for site in result["hybridization_singular_values"]:
        assert site == sorted(site, reverse=True)


def test_json_to_standard_output_is_alone_there(chain):
    everything = subprocess.run(
        [sys.executable, "-m", "kondomf.cli", "solve", chain / "material.toml", "--json", "-"],
        capture_output=True,
        text=True,
        check=True,
    )
    assert set(RESULT_KEYS) <= set(json.loads(everything.stdout))
    assert everything.stderr.startswith("start 1 ")
    assert len(everything.stderr.splitlines()) == 1
    assert kondomf("solve", chain / "material.toml", "--json", "-", "--quiet").stderr == ""


def test_the_same_seed_gives_the_same_json_apart_from_the_time(tmp_path):
    keys = {"search.phase": "any", "search.starts": 8, "zone.points": 2, "mean_field.temperature_meV": 300.0}
    results = []
    for seed in (4, 4, 5):
        material = write(tmp_path, keys | {"search.seed": seed})
        results.append(json.loads(done("solve", material, "--json", "-", "--quiet")))
        assert results[-1].pop("wall_seconds") > 0
    assert results[0] == results[1]
    assert results[0]["trials"][-1]["start"] == "random 1"
    assert results[0]["evaluations"] != results[2]["evaluations"]


def test_bands_writes_figure_table_and_json_of_the_same_numbers(chain, tmp_path):
    outputs = {"--figure": tmp_path / "b.png", "--data": tmp_path / "b.csv", "--json": tmp_path / "b.json"}
    pairs = [argument for pair in outputs.items() for argument in pair]
    text = done("bands", chain / "state.h5", *pairs, "--points", 20, "--grid", 8, "--window", 900)
    assert "gap" in text
    found = json.loads(outputs["--json"].read_text())
    with outputs["--data"].open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [float(row["energy_meV"]) for row in rows] == pytest.approx(np.ravel(found["energy_meV"]).tolist())
    assert found["dos_energy_meV"][-1] == 900
    assert outputs["--figure"].read_bytes().startswith(b"\x89PNG")


def test_effective_of_the_state_and_of_the_material_agree(chain, tmp_path):
    models = []
    for source in ("state.h5", "material.toml"):
        text = done("effective", chain / source, "--json", tmp_path / f"{source}.json")
        assert "hybridization b" in text
        models.append(json.loads((tmp_path / f"{source}.json").read_text())["model"])
    for name in ("b_meV", "dirac_energy_meV", "hbar_v_meV_angstrom"):
        assert models[0][name] == pytest.approx(models[1][name], rel=3e-3), name


def test_oscillations_goes_on_from_the_file_of_effective(chain, tmp_path):
    outputs = ["--figure", tmp_path / "o.pdf", "--data", tmp_path / "o.csv", "--json", tmp_path / "o.json"]
    text = done("oscillations", chain / "model.json", "--fields", "8,12", "--temperatures", "0.5:4:3", *outputs)
    found = json.loads((tmp_path / "o.json").read_text())
    assert found["fields_T"] == [8, 12]
    assert found["temperatures_K"] == [0.5, 2.25, 4]
    assert f"{found['frequency_T']:.6g} T" in text
    assert len((tmp_path / "o.csv").read_text().splitlines()) == 1 + 2 * 3
    assert (tmp_path / "o.pdf").read_bytes().startswith(b"%PDF")


def test_a_finished_sweep_is_shown_by_progress_and_map_and_started_again_computes_nothing(chain, tmp_path):
    run = chain / "sweep.run"
    assert (chain / "sweep.txt").read_text() == f"4 points done, 0 failed, 0 to do, in {run}\n"
    assert "4 of 4 points (100%)" in done("progress", run)
    text = done("map", run, "--json", tmp_path / "m.json", "--data", tmp_path / "m.csv", "--figure", tmp_path / "m.svg")
    assert "Kitaev spin liquid with metal (FL*)  2 points, Kondo coupling (meV) 0 to 0" in text
    found = json.loads((tmp_path / "m.json").read_text())
    assert np.shape(found["hybridization"]) == (2, 2)
    assert np.array(found["hybridization"])[0].max() < 1e-6 < 0.1 < np.array(found["hybridization"])[1].min()
    assert len((tmp_path / "m.csv").read_text().splitlines()) == 5
    assert (tmp_path / "m.svg").read_bytes().startswith(b"<?xml")
    done("map", run, "--figure", tmp_path / "cut.png", "--cut", "conduction_layer.filling=1")


def test_an_output_is_replaced_on_request(chain, tmp_path):
    (tmp_path / "m.json").write_text("old")
    done("map", chain / "sweep.run", "--json", tmp_path / "m.json", "--overwrite")
    assert json.loads((tmp_path / "m.json").read_text())["class"] == "any"


# ---- numerical failure is a result -------------------------------------------------------------------------------


def test_a_saddle_is_reported_with_exit_code_1_and_written(tmp_path):
    keys = {"spin_layer.kitaev_meV": 1000.0, "kondo.coupling_meV": 3200.0, "conduction_layer.filling": 1.0}
    keys |= {"mean_field.exchange_form": "kitaev", "mean_field.temperature_meV": 5.0, "search.phase": "any"}
    material, out, state = write(tmp_path, keys), tmp_path / "out.json", tmp_path / "state.h5"
    result = kondomf("solve", material, "--start", "decoupled 0", "--keep-saddle", "--json", out, "--state", state)
    assert result.exit_code == 1
    assert "saddle: stationary; there are directions in which F falls" in result.stdout
    found = json.loads(out.read_text())
    assert found["status"] == "saddle"
    assert found["curvature_min"] < -0.1
    refused(tmp_path, ["effective", state], "no hybridization")


def test_a_heavy_fermi_liquid_that_does_not_exist_has_exit_code_1(tmp_path):
    result = kondomf("effective", write(tmp_path, {"kondo.coupling_meV": -50.0}), "--json", tmp_path / "out.json")
    assert result.exit_code == 1
    assert "no hybridized solution" in result.stdout
    assert json.loads((tmp_path / "out.json").read_text())["model"]["b_meV"] == 0


def test_numbers_that_are_none_become_null_in_json(chain, monkeypatch):
    from kondomf import phases

    original = phases.summarize
    values = {"gap_meV": float("nan"), "nematicity": np.float64("inf"), "evaluations": np.int64(3)}
    monkeypatch.setattr(phases, "summarize", lambda solution: original(solution) | values)
    found = json.loads(done("solve", chain / "material.toml", "--json", "-", "--quiet"), parse_constant=pytest.fail)
    assert (found["gap_meV"], found["nematicity"], found["evaluations"]) == (None, None, 3)


def test_an_interrupted_solve_ends_with_exit_code_130_and_leaves_nothing(tmp_path, monkeypatch):
    def interrupt(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("kondomf.meanfield.solve", interrupt)
    material = write(tmp_path)
    result = kondomf("solve", material, "--state", tmp_path / "state.h5", "--json", tmp_path / "out.json")
    assert result.exit_code == 130
    assert result.stderr == "interrupted; nothing half-written was left\n"
    assert list(tmp_path.iterdir()) == [material]


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


# ---- wrong options -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "fragment"),
    [
        (["solve", "material.toml", "--start", "decoupled"], "the starts are decoupled 0, hybridized 0"),
        (["solve", "material.toml", "--keep-saddle"], "--keep-saddle studies one start: name it with --start"),
        (["bands", "state.h5", "--window", "0"], "--window 0: give a finite energy in meV above zero"),
        (["bands", "state.h5", "--window", "nan"], "--window nan: give a finite energy"),
        (["bands", "state.h5", "--window", "inf"], "--window inf: give a finite energy"),
        (["effective", "material.toml", "--window", "-3"], "--window -3: give a finite energy in meV above zero"),
        (["oscillations", "model.json", "--fields", "ten"], "--fields 'ten': give numbers above zero like 10,15,20"),
        (["oscillations", "model.json", "--fields", "1:2:0"], "--fields '1:2:0'"),
        (["oscillations", "model.json", "--temperatures", "0,1"], "--temperatures '0,1': give numbers above zero"),
        (["oscillations", "model.json", "--temperatures", "1,nan"], "--temperatures '1,nan'"),
        (["oscillations", "material.toml"], "is no model file"),
        (["map", "sweep.run", "--class", "magnetic"], "has no phase class 'magnetic'; it has any"),
        (["map", "sweep.run", "--cut", "0.9"], "give KEY=VALUE, for instance conduction_layer.filling=1"),
        (["map", "sweep.run", "--cut", "kondo.coupling_meV=0"], "fix a value of the second"),
        (["sweep", "material.toml"], "a sweep has material, phases and [axes]"),
    ],
)
def test_an_impossible_option_is_refused_with_what_is_possible(chain, monkeypatch, arguments, fragment):
    monkeypatch.chdir(chain)
    refused(chain, arguments, fragment)


@pytest.mark.parametrize(
    ("text", "numbers"), [("3", [3]), ("1, 2.5", [1, 2.5]), ("1:2:3", [1, 1.5, 2]), ("5:1:2", [5, 1])]
)
def test_a_list_of_numbers_is_given_one_by_one_or_evenly_spaced(text, numbers):
    assert number_list("--fields", text) == numbers


@pytest.mark.parametrize("text", ["", ",", "1,,2", "1:2", "1:2:3:4", "1:2:2.5", "1:2:-1", "-1", "0", "inf", "1;2"])
def test_anything_else_is_no_list_of_numbers(text):
    with pytest.raises(InputError, match="--fields"):
        number_list("--fields", text)


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
    fragments = {"missing": "no state file", "version": "of schema 7; this version reads state files of schema 1"}
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
