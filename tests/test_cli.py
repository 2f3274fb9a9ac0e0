"""The commands: tables, JSON, figures, exit codes, and one clear message for everything that cannot work."""

import csv
import json
import subprocess
import sys

import numpy as np
import pytest
from commands import COMMANDS, RESULT_KEYS, done, kondomf, refused, write

from kondomf.cli import number_list
from kondomf.errors import InputError

# ---- help and start-up -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_every_command_shows_an_example_of_it(command):
    text = done(command, "--help")
    assert f"Example:\n    kondomf {command}" in text
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
    names = ("material.toml", "sweep.toml", "heavy.toml")
    assert text.splitlines() == [f"wrote {tmp_path / 'demo' / name}" for name in names]
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
    assert text.split("\n")[0].split(None, 1) == ["phase", "heavy Fermi liquid"]
    assert "specific heat" in text
    assert "Mean-field theory of Majorana partons" in text
    assert (chain / "solve.log").read_text().startswith("start 1 (hybridized 0): minimum, F = ")
    result = json.loads((chain / "result.json").read_text())
    assert set(RESULT_KEYS) <= set(result)
    assert result["thermodynamics"]["specific_heat_kB_per_cell"] > 0
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
    assert results[0]["trials"][-1]["start"].startswith("random ")
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


def test_solve_along_follows_the_branches_and_writes_figure_table_and_json_of_the_same_numbers(tmp_path):
    material = write(tmp_path, {"search.phase": "any", "zone.points": 4, "search.starts": 3})
    outputs = {kind: tmp_path / f"along.{kind}" for kind in ("json", "csv", "png")}
    options = ["--json", outputs["json"], "--data", outputs["csv"], "--figure", outputs["png"]]
    text = done("solve", material, "--along", "mean_field.temperature_meV=40:400", "--precision", 0.5, *options)
    found = json.loads(outputs["json"].read_text())
    assert f"branch {len(found['branches'])}" in text
    states = sum(len(branch["states"]["x"]) for branch in found["branches"])
    lines = outputs["csv"].read_text().splitlines()
    assert lines[0].startswith("branch,mean_field.temperature_meV,free_energy_meV_per_cell")
    assert len(lines) == states + 1
    assert outputs["png"].stat().st_size > 10_000
    transition = found["transitions"][-1]
    assert (transition["kind"], transition["lowest"]) == ("continuous", True)  # the hybridization melts
    assert 40 < transition["at"] < 400


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


# ---- wrong options -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "fragment"),
    [
        (["solve", "material.toml", "--start", "decoupled"], "the starts are decoupled 0, hybridized 0"),
        (["solve", "material.toml", "--keep-saddle"], "--keep-saddle studies one start: name it with --start"),
        (["solve", "material.toml", "--along", "kondo"], "--along 'kondo': give KEY=FROM:TO like kondo.coupling_meV="),
        (["solve", "material.toml", "--along", "kondo.coupling_meV=2:1"], "give FROM below TO"),
        (["solve", "material.toml", "--along", "kondo.coupling_meV=1:2", "--precision", "0"], "precision 0 of kondo"),
        (["solve", "material.toml", "--along", "zone.points=2:4"], "zone.points is no coupling"),
        (["solve", "material.toml", "--along", "kondo.j=1:2"], "kondo.j is no numeric key of a material"),
        (["solve", "material.toml", "--along", "conduction_layer.filling=1:3"], "filling"),
        (
            ["solve", "material.toml", "--along", "kondo.coupling_meV=1:2", "--start", "decoupled 0"],
            "leave out --start",
        ),
        (["solve", "material.toml", "--figure", "f.png"], "belong to --along KEY=FROM:TO"),
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
