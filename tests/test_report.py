"""Figures and tables: written whole or not at all, labelled, and honest about what is missing."""

import json
from dataclasses import replace

import numpy as np
import pytest
from materials import dimensionless
from matplotlib.figure import Figure
from test_sweep_synthetic import write_sweep

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.meanfield import named_start, solve
from kondomf.oscillations import predict
from kondomf.phases import summarize
from kondomf.phases.band_structure import band_structure
from kondomf.report.bands import draw_band_structure
from kondomf.report.map import axis_label, draw, figure_size, read_map
from kondomf.report.oscillations import draw_prediction
from kondomf.report.style import save_figure
from kondomf.report.tables import align, solution_table
from kondomf.sweep import open_run, run_sweep
from kondomf.sweep.record import PointResult

KEYS = ("kondo.coupling_meV", "conduction_layer.filling")
SHAPE = (3, 4)
SWEEP = """
material = "material.toml"
phases = ["any"]
[axes]
"kondo.coupling_meV" = { from = 0.0, to = 600.0, points = 3 }
"conduction_layer.filling" = [0.7, 0.8, 0.9, 1.0]
"""
MAGIC = {".png": b"\x89PNG\r\n\x1a\n", ".pdf": b"%PDF-", ".svg": b"<?xml"}


def region(material, seed, parent):
    """Two phases with a boundary at a coupling of 200 meV; one saddle, one failure."""
    coupling, filling = material["kondo"]["coupling_meV"], material["conduction_layer"]["filling"]
    if (coupling, filling) == (600.0, 0.7):
        raise RuntimeError("lost")
    bound = coupling > 200
    scalars = {
        "phase": "bound" if bound else "free",
        "free_energy_meV_per_cell": -coupling * filling,
        "hybridization": 0.5 if bound else 0.0,
        "spin_moment": None if filling == 1.0 else 0.1,
    }
    return PointResult("saddle" if (coupling, filling) == (300.0, 1.0) else "minimum", scalars, {})


def failing(material, seed, parent):
    """No point succeeds."""
    raise RuntimeError("lost")


def run_of(folder, points=None, sweep=SWEEP, point="test_report:region"):
    """A run, stopped after so many points."""
    answers = iter([False] * (100 if points is None else points) + [True] * 100)
    run_sweep(write_sweep(folder, sweep), folder / "run", point=point, stop=lambda: next(answers))
    return open_run(folder / "run")


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return run_of(tmp_path_factory.mktemp("report"))


@pytest.fixture(scope="module")
def prediction():
    model = FourBandModel(
        b_meV=2.0, dirac_energy_meV=300.0, hbar_v_meV_angstrom=4000.0, heavy_level_meV=0.0, cell_area_angstrom2=25.0
    )
    return predict(model, [10.0, 15.0], [0.5, 2.0, 8.0])


@pytest.fixture(scope="module")
def liquid():
    material = dimensionless(kondo=1.0, points=6, offset="c3")
    return solve(material, only_starts=[named_start(material, "decoupled 0")])


def drawn(draw_into, size=(6.0, 4.0)):
    """The figure that a function has filled, laid out as for saving."""
    figure = Figure(figsize=size, layout="constrained")
    draw_into(figure)
    figure.draw_without_rendering()
    return figure


# ---- maps --------------------------------------------------------------------------------------------------------


def test_a_map_shows_phase_status_and_quantities_of_every_point(run):
    found = read_map(run, None)
    assert (found.name, found.phase_class, found.keys) == ("invented for tests", "any", KEYS)
    assert found.x.tolist() == [0, 300, 600]
    assert found.y.tolist() == [0.7, 0.8, 0.9, 1.0]
    assert found.phase.tolist() == [["free"] * 4, ["bound"] * 4, ["", "bound", "bound", "bound"]]
    assert found.status[1, 3] == "saddle"
    assert found.status[2, 0] == "failed"
    assert found.quantities["free_energy_meV_per_cell"][1].tolist() == pytest.approx([-210, -240, -270, -300])
    assert np.isnan(found.quantities["spin_moment"][:, 3]).all()
    assert found.names == ["bound", "free"]


def test_the_text_of_a_map_counts_points_and_tells_ranges(run):
    rows = [line.split("  ") for line in read_map(run, "any").text().splitlines()]
    text = {row[0]: row[-1].strip() for row in rows}
    assert text["bound"] == "7 points, Kondo coupling (meV) 300 to 600, filling 0.7 to 1"
    assert text["free"] == "4 points, Kondo coupling (meV) 0 to 0, filling 0.7 to 1"
    assert text["no minimum"] == "2 points"
    assert text["not computed yet"] == "0 points"


def test_the_columns_of_a_map_have_one_row_per_point_and_its_json_no_nan(run):
    found = read_map(run, None)
    columns = found.columns()
    assert list(columns)[:4] == [*KEYS, "phase", "status"]
    assert {len(column) for column in columns.values()} == {12}
    row = {name: column[6] for name, column in columns.items()}
    assert (row[KEYS[0]], row[KEYS[1]], row["phase"]) == (300, 0.9, "bound")
    plain = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert plain["spin_moment"][0] == [0.1, 0.1, 0.1, None]
    assert plain["axes"][KEYS[1]] == [0.7, 0.8, 0.9, 1.0]


def test_a_drawn_map_names_axes_regions_and_doubtful_points(run):
    found = read_map(run, None)
    figure = drawn(lambda figure: draw(figure, found), figure_size(found))
    (axes,) = figure.axes
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("Kondo coupling (meV)", "filling")
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts == ["bound (7)", "free (4)", "no minimum (2)"]
    assert "invented for tests" in figure.get_suptitle()


def test_cuts_are_drawn_along_the_first_axis_at_the_nearest_grid_value(run):
    found = read_map(run, None, (f"{KEYS[1]}=0.88", f"{KEYS[1]}=0.7"))
    assert found.cuts == (2, 0)
    figure = drawn(lambda figure: draw(figure, found), figure_size(found))
    labels = [axes.get_ylabel() for axes in figure.axes]
    assert labels == ["F (meV per cell)", "largest hybridization", "spin moment (ħ)"]
    energy, last = figure.axes[0].lines
    assert energy.get_ydata().tolist() == pytest.approx([0, -270, -540])
    assert np.isnan(last.get_ydata()[2]), "the failed point leaves a gap"
    assert {axes.get_xlabel() for axes in figure.axes} == {"Kondo coupling (meV)"}


@pytest.mark.parametrize(
    ("cut", "message"),
    [
        ("0.9", "give KEY=VALUE, for instance conduction_layer.filling=0.9"),
        (f"{KEYS[1]}=", "give KEY=VALUE"),
        (f"{KEYS[1]}=high", "give KEY=VALUE"),
        (f"{KEYS[1]}=nan", "give KEY=VALUE"),
        (f"{KEYS[1]}=inf", "give KEY=VALUE"),
        (f"{KEYS[0]}=300", "fix a value of the second, conduction_layer.filling"),
        ("filling=0.9", "fix a value of the second, conduction_layer.filling"),
    ],
)
def test_a_cut_that_is_none_is_refused_with_one_that_is(run, cut, message):
    with pytest.raises(InputError, match=message):
        read_map(run, None, (cut,))


def test_an_unknown_class_is_answered_with_the_known_ones(run):
    with pytest.raises(InputError, match="it has any"):
        read_map(run, "magnetic")


@pytest.mark.parametrize("axes", [['"kondo.coupling_meV" = [0, 300]'], None])
def test_a_run_with_another_number_of_axes_makes_no_map(tmp_path, axes):
    lines = axes or [f'"{key}" = [0.5, 1.0]' for key in (*KEYS, "mean_field.temperature_K")]
    one = run_of(tmp_path, sweep="\n".join(['material = "material.toml"', "[axes]", *lines]))
    with pytest.raises(InputError, match=r"swept along kondo.coupling_meV.*; a map needs exactly two axes"):
        read_map(one, None)


def test_a_run_without_a_finished_point_asks_for_patience_and_a_partial_one_is_drawn(tmp_path):
    empty = run_of(tmp_path / "empty", points=0)
    with pytest.raises(InputError, match=r"no finished point of class any yet; look at it with: kondomf progress"):
        read_map(empty, None)
    found = read_map(run_of(tmp_path / "partial", points=5), None, (f"{KEYS[1]}=0.8",))
    assert (found.status != "").sum() == 5
    assert "7 points" in found.text().splitlines()[-1]
    assert "not computed yet" in found.text().splitlines()[-1]
    drawn(lambda figure: draw(figure, found))
    drawn(lambda figure: draw(figure, replace(found, cuts=())))
    json.dumps(found.to_dict(), allow_nan=False)


def test_a_run_of_failures_alone_makes_no_map(tmp_path):
    lost = run_of(tmp_path, point="test_report:failing")
    with pytest.raises(InputError, match="kondomf progress"):
        read_map(lost, None)


@pytest.mark.parametrize("filling", ["[0.9]", "[0.9, 0.7, 0.8]", "[1.0, 0.8]"])
def test_axes_of_one_value_or_in_any_order_are_drawn_without_a_warning(tmp_path, filling):
    axes = f'"{KEYS[0]}" = [0, 600, 300]\n"{KEYS[1]}" = {filling}'
    found = read_map(run_of(tmp_path, sweep=f'material = "material.toml"\n[axes]\n{axes}\n'), None)
    drawn(lambda figure: draw(figure, found))
    done = found.status != "failed"
    energy = found.quantities["free_energy_meV_per_cell"]
    assert (np.diff(found.x) > 0).all()
    assert (np.diff(found.y) > 0).all()
    assert energy[done] == pytest.approx(-np.outer(found.x, found.y)[done])
    cut = read_map(open_run(tmp_path / "run"), None, (f"{KEYS[1]}=0.9",))
    figure = drawn(lambda figure: draw(figure, cut))
    assert figure.axes[0].lines[0].get_xdata().tolist() == [0, 300, 600]


@pytest.mark.parametrize(
    ("key", "words"),
    [
        ("kondo.coupling_meV", "Kondo coupling (meV)"),
        ("conduction_layer.filling", "filling"),
        ("mean_field.temperature_K", "temperature (K)"),
        ("spin_layer.kitaev_meV", "kitaev (meV)"),
        ("conduction_layer.density_per_cm2", "density (1/cm²)"),
    ],
)
def test_an_axis_is_called_by_its_quantity_and_unit(key, words):
    assert axis_label(key) == words


# ---- other figures -----------------------------------------------------------------------------------------------


def test_bands_and_density_of_states_share_their_energies_and_name_their_axes(liquid):
    found = band_structure(liquid, 30, 8)
    figure = drawn(lambda figure: draw_band_structure(figure, found))
    left, right, bar = figure.axes
    assert left.get_ylabel() == "quasiparticle energy (meV)"
    assert [tick.get_text() for tick in left.get_xticklabels()] == ["Γ", "K", "M", "Γ"]
    assert left.get_ylim() == right.get_ylim() == (-found.window_meV, found.window_meV)
    assert right.get_xlabel() == "states per meV\nand cell"
    assert bar.get_ylabel() == "conduction weight"
    assert len(left.collections[0].get_offsets()) == found.bands.energy.size


def test_a_window_without_states_is_drawn_empty(liquid):
    found = band_structure(liquid, 30, 8, 1e-9)
    figure = drawn(lambda figure: draw_band_structure(figure, found))
    assert len(figure.axes[0].collections[0].get_offsets()) < found.bands.energy.size


def test_every_field_has_a_solid_curve_beside_a_dashed_one_of_lifshitz_and_kosevich(prediction):
    figure = drawn(lambda figure: draw_prediction(figure, prediction))
    upper, lower = figure.axes
    solid = [line for line in upper.lines if line.get_linestyle() == "-"]
    dashed = [line for line in upper.lines if line.get_linestyle() == "--" and len(line.get_xdata())]
    assert [line.get_label() for line in solid] == ["10 T", "15 T"]
    assert len(dashed) == 2
    for line, relative in zip(solid, prediction.table.relative, strict=True):
        assert line.get_ydata().tolist() == relative.tolist()
    assert upper.get_xlabel() == "temperature (K)"
    assert "magnetization" in upper.get_ylabel()
    assert lower.get_xlabel() == "1/B (1/T)"
    assert "mu_B" in lower.get_ylabel()


@pytest.mark.parametrize(("fields", "temperatures"), [([12.0], [1.0]), (list(range(5, 25)), [1.0, 2.0])])
def test_one_field_or_many_are_drawn_without_a_warning(prediction, fields, temperatures):
    found = predict(prediction.model, fields, temperatures)
    figure = drawn(lambda figure: draw_prediction(figure, found))
    assert len(figure.axes[0].get_legend().get_texts()) == min(len(fields), 6) + 1


# ---- writing -----------------------------------------------------------------------------------------------------


def line(figure):
    figure.subplots().plot([0, 1], [0, 1])


def broken(figure):
    raise RuntimeError("cannot draw")


@pytest.mark.parametrize("suffix", MAGIC)
def test_a_figure_has_the_format_of_its_suffix_and_leaves_no_other_file(tmp_path, suffix):
    path = tmp_path / f"figure{suffix}"
    save_figure(path, line, (3.0, 2.0), overwrite=False)
    assert path.read_bytes().startswith(MAGIC[suffix])
    assert list(tmp_path.iterdir()) == [path]


def test_upper_case_suffixes_are_formats_too(tmp_path):
    save_figure(tmp_path / "FIGURE.PNG", line, (3.0, 2.0), overwrite=False)
    assert (tmp_path / "FIGURE.PNG").read_bytes().startswith(MAGIC[".png"])


@pytest.mark.parametrize("name", ["figure.gif", "figure", "figure.png.txt"])
def test_an_unknown_format_is_refused_before_anything_is_drawn(tmp_path, name):
    with pytest.raises(InputError, match=r"use .png, .pdf, .svg"):
        save_figure(tmp_path / name, broken, (3.0, 2.0), overwrite=False)
    assert list(tmp_path.iterdir()) == []


def test_an_existing_figure_is_only_replaced_on_request(tmp_path):
    path = tmp_path / "figure.png"
    path.write_text("precious")
    with pytest.raises(InputError, match="exists; choose another name or pass --overwrite"):
        save_figure(path, line, (3.0, 2.0), overwrite=False)
    assert path.read_text() == "precious"
    save_figure(path, line, (3.0, 2.0), overwrite=True)
    assert path.read_bytes().startswith(MAGIC[".png"])


@pytest.mark.parametrize("overwrite", [False, True])
def test_a_figure_that_cannot_be_drawn_or_saved_leaves_everything_as_it_was(tmp_path, overwrite, monkeypatch):
    path = tmp_path / "figure.png"
    if overwrite:
        path.write_text("precious")
    before = [(file.name, file.read_bytes()) for file in tmp_path.iterdir()]
    with pytest.raises(RuntimeError, match="cannot draw"):
        save_figure(path, broken, (3.0, 2.0), overwrite)

    def full(self, target, **_):
        target.write_bytes(b"half")
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Figure, "savefig", full)
    with pytest.raises(InputError, match=r"cannot write .*No space left on device; free space"):
        save_figure(path, line, (3.0, 2.0), overwrite)
    assert [(file.name, file.read_bytes()) for file in tmp_path.iterdir()] == before


def test_the_look_of_our_figures_does_not_leak_into_the_settings_of_matplotlib(tmp_path):
    import matplotlib

    before = dict(matplotlib.rcParams)
    save_figure(tmp_path / "figure.svg", line, (3.0, 2.0), overwrite=False)
    assert dict(matplotlib.rcParams) == before


# ---- tables ------------------------------------------------------------------------------------------------------


def test_a_table_aligns_its_second_column():
    assert align([("a", "1"), ("long name", "2")]) == "a          1\nlong name  2"


def test_the_table_of_a_solution_tells_what_it_is_and_why(liquid):
    text = solution_table(summarize(liquid))
    assert "Kitaev spin liquid with metal (FL*)" in text.splitlines()[0]
    assert "- no hybridization" in text
    for words in (
        "minimum: stationary",
        "meV per cell",
        "chemical potential",
        "zero modes",
        "1 of 1 ended at the only minimum met",
    ):
        assert words in text, words
    assert "-0.0000" not in text


def test_a_solution_without_certificate_has_a_table_too(liquid):
    lost = replace(liquid, status="not-converged", message="stopped", curvature_min=None, zero_modes=None)
    text = solution_table(summarize(lost))
    assert "undetermined" in text
    assert "not-converged: stopped" in text
    assert "curvature" not in text
