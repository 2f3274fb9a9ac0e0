"""Four-band models of solved states and material files, and the files they travel in."""

import json
from dataclasses import replace

import h5py
import numpy as np
import pytest
from materials import T, dimensionless

from kondomf.effective import FourBandModel, effective_model, from_reduced, from_solution, read_model, solve_reduced
from kondomf.effective.extract import fermion_matrix
from kondomf.errors import InputError
from kondomf.meanfield import load_state, named_start, save_state, solve
from kondomf.model.majorana import SPINON, majorana
from kondomf.phases import Order, bands

HEAVY = {"kitaev": 0.3, "kondo": 2.2, "filling": 0.9, "form": "so4", "magnetic": False, "temperature": 0.02}
CLASS = {"search__phase": "heavy-fermi-liquid", "search__starts": 1}

MATERIAL = """name = "test"
[spin_layer]
lattice_constant_angstrom = 5.0
kitaev_meV = 300.0
[conduction_layer]
lattice_constant_angstrom = 5.0
hopping_meV = 1000.0
filling = 0.95
[kondo]
coupling_meV = 1600.0
[mean_field]
exchange_form = "so4"
temperature_meV = 5.0
"""


@pytest.fixture(scope="module")
def heavy():
    """The heavy Fermi liquid of the full two-dimensional problem."""
    return solve(dimensionless(points=48, **HEAVY, **CLASS))


@pytest.fixture(scope="module")
def small():
    """The same on a coarse grid, for files and refusals."""
    return solve(dimensionless(points=6, offset="c3", **HEAVY, **CLASS))


@pytest.fixture(scope="module")
def reduced():
    return solve_reduced(T, 0.3 * T, 2.2 * T, 0.9, 0.02 * T)


def decoupled(**keys):
    material = dimensionless(points=6, offset="c3", **keys)
    return solve(material, only_starts=[named_start(material, "decoupled 0")])


def write_material(folder, *changes):
    text = MATERIAL
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / "material.toml"
    path.write_text(text)
    return path


# ---- extraction from a solved state ------------------------------------------------------------------------------


def test_the_solver_and_the_reduced_equations_give_the_same_four_band_model(heavy, reduced):
    found, expected = from_solution(heavy).model, from_reduced(reduced, 1.0)
    for name in ("b_meV", "dirac_energy_meV", "heavy_level_meV", "hbar_v_meV_angstrom", "hbar_u_meV_angstrom"):
        assert getattr(found, name) == pytest.approx(getattr(expected, name), rel=1e-5), name
    assert (found.cell_area_angstrom2, found.degeneracy) == (pytest.approx(np.sqrt(3) / 2), 4)
    assert found.temperature_meV == pytest.approx(20)


def test_the_solver_has_the_check_values_of_the_reduced_equations(heavy):
    """w = 0.50346357, q = 0.38937335, F = -3.18851111 t at t = 1, K = 0.3, J_K = 2.2, n = 0.9, T = 0.02: two
    independent implementations. An exchange bond has the energy -(K/8) q^2."""
    order = Order(heavy)
    assert order.hybridization == pytest.approx(np.full((2, 4), 0.50346357), abs=1e-6)
    for bonds in order.bond_energies.values():
        assert np.sqrt(-8 * bonds[0] / (0.3 * T)) == pytest.approx(0.38937335, abs=1e-6)
    assert heavy.free_energy_meV_per_cell / T == pytest.approx(-3.18851111, abs=1e-8)


def test_what_the_four_band_model_leaves_out_vanishes_in_the_isotropic_state(heavy):
    found = from_solution(heavy)
    assert found.pairing_meV < 1e-8 * T
    assert found.hybridization_spread_meV < 1e-6 * T
    assert found.level_spread_meV < 1e-6 * T
    assert found.velocity_spread_meV < 1e-6 * T


def test_the_model_does_not_depend_on_the_gauge_of_the_spinons(small):
    """A local SU(2) rotation of the fields turns the hybridization of a site, and b, epsilon_f and u must not see it.

    The rotation about the constraint's z axis acts on (chi0, chi3) and (chi1, chi2) of one site by the same angle;
    it is a phase of the spinons, so that electron U(1) stays manifest.
    """
    expected, model = from_solution(small).model, small.model
    angle = 0.8
    rotation = np.eye(16)
    for mu, nu in ((0, 3), (1, 2)):
        i, j = majorana(1, SPINON, mu), majorana(1, SPINON, nu)
        rotation[np.ix_([i, j], [i, j])] = [[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]]
    matrices = np.zeros((len(model.lattice_vectors), 16, 16))
    r, a, b = model.position
    matrices[r, a, b] = small.phi
    home = np.flatnonzero(~model.lattice_vectors.any(axis=1))[0]
    matrices[home] -= matrices[home].T
    turned = rotation @ matrices @ rotation.T
    other = replace(small, phi=turned[r, a, b])
    assert np.abs(other.phi - small.phi).max() > 0.1 * T
    found = from_solution(other).model
    for name in ("b_meV", "dirac_energy_meV", "heavy_level_meV", "hbar_v_meV_angstrom", "hbar_u_meV_angstrom"):
        assert getattr(found, name) == pytest.approx(getattr(expected, name), rel=1e-9), name


def test_complex_fermions_have_the_bands_of_the_majoranas(small):
    """Without anomalous elements the spectrum of the Majoranas is that of the fermions and its negative."""
    k = np.random.default_rng(2).random((5, 2))
    normal, anomalous = fermion_matrix(small, k)
    assert np.abs(anomalous).max() < 1e-9 * T
    there = np.linalg.eigvalsh(fermion_matrix(small, -k)[0])
    both = np.sort(np.hstack([np.linalg.eigvalsh(normal), -there]), axis=1)
    assert bands(small, k).energy == pytest.approx(both, abs=1e-9 * T)


def test_a_state_with_pairing_is_refused_with_the_form_to_use():
    material = dimensionless(-1.0, 4.0, points=4, offset="c3")
    paired = solve(material, only_starts=[named_start(material, "hybridized 0")])
    with pytest.raises(InputError, match=r'pair .*exchange_form = kondo_form = "so4"'):
        from_solution(paired)


@pytest.mark.parametrize("form", ["kitaev", "so4"])
def test_a_decoupled_state_is_refused_whatever_its_form(form):
    with pytest.raises(InputError, match="no hybridization: its spinons are decoupled"):
        from_solution(decoupled(kondo=0.5, form=form))


def test_a_larger_magnetic_cell_is_refused():
    material = dimensionless(0.3, 2.2, 0.9, form="so4", cell="1x2", points=2, temperature=0.2, **CLASS)
    with pytest.raises(InputError, match=r'needs a solution in the 1x1 cell; set mean_field.cell = "1x1"'):
        from_solution(solve(material))


# ---- from files --------------------------------------------------------------------------------------------------


def test_a_state_file_and_the_solution_in_it_give_the_same_model_and_evidence(tmp_path, small):
    path = tmp_path / "state.h5"
    save_state(small, path)
    result = effective_model(path, 50.0)
    assert result.model == from_solution(small).model
    assert result.converged
    assert result.status == "minimum-in-class"
    assert result.evidence["free_energy_meV_per_cell"] == small.free_energy_meV_per_cell
    assert result.evidence["inputs"] == small.inputs
    renamed = path.rename(tmp_path / "state.data")
    assert effective_model(renamed, 50.0).model == result.model


def test_the_bands_of_state_and_material_deviate_alike_from_the_four_band_model(tmp_path, heavy):
    path = tmp_path / "state.h5"
    save_state(heavy, path)
    changes = [("0.95", "0.9"), ("1600.0", "2200.0"), ("temperature_meV = 5.0", "temperature_meV = 20.0")]
    material = write_material(tmp_path, *changes, ("_angstrom = 5.0", "_angstrom = 1.0"))
    ours, theirs = (effective_model(source, 100.0).deviation for source in (path, material))
    assert theirs.states > 0
    assert ours.states == 2 * theirs.states  # both spins
    assert ours.max_meV == pytest.approx(theirs.max_meV, rel=1e-4)
    assert ours.rms_meV == pytest.approx(theirs.rms_meV, rel=1e-4)
    assert ours.fermi_area_ratio == pytest.approx(theirs.fermi_area_ratio, rel=1e-5)


def test_a_material_file_gives_the_solution_of_the_reduced_equations(tmp_path):
    result = effective_model(write_material(tmp_path), 50.0)
    assert result.model == from_reduced(solve_reduced(1000.0, 300.0, 1600.0, 0.95, 5.0), 5.0)
    assert result.converged
    assert result.evidence["inputs"]["name"] == "test"
    json.dumps(result.to_dict(), allow_nan=False)
    assert dict(result.rows())["hybridization b"].startswith(f"{result.model.b_meV:.5g}"[:5])


def test_a_material_without_hybridized_solution_is_no_success(tmp_path):
    result = effective_model(write_material(tmp_path, ("1600.0", "-100.0")), 50.0)
    assert result.model.b_meV == 0
    assert not result.converged
    assert "no hybridized solution" in dict(result.rows())["status"]


REASONS = {
    "exchange_form and kondo_form must be": ('exchange_form = "so4"', 'exchange_form = "kitaev"'),
    "kitaev_meV must be equal": ("kitaev_meV = 300.0", "kitaev_meV = [300.0, 300.0, 301.0]\ngamma_meV = 1.0"),
    "further exchange must vanish": ("kitaev_meV = 300.0", "kitaev_meV = 300.0\nheisenberg_3_meV = 1.0"),
    "nearest-neighbour hopping alone": ("hopping_meV = 1000.0", "hopping_meV = 1000.0\nrashba_meV = 1.0"),
    "neighbour_coupling_meV must vanish": ("[mean_field]", "neighbour_coupling_meV = 1.0\n[mean_field]"),
    "anisotropy must be [1, 1, 1]": ("coupling_meV = 1600.0", "coupling_meV = 1600.0\nanisotropy = [1, 1, 0.5]"),
    "magnetic_field.tesla must vanish": ("[mean_field]", "[magnetic_field]\ntesla = [0, 0, 1]\n[mean_field]"),
}


@pytest.mark.parametrize("reason", REASONS)
def test_a_material_outside_the_reduced_equations_is_refused_with_the_reason(tmp_path, reason):
    with pytest.raises(InputError) as caught:
        effective_model(write_material(tmp_path, REASONS[reason]), 50.0)
    assert reason in str(caught.value)
    assert 'search.phase = "heavy-fermi-liquid"' in str(caught.value)


def test_all_reasons_stand_in_one_message(tmp_path):
    changes = [change for reason, change in REASONS.items() if "further" not in reason]
    with pytest.raises(InputError) as caught:
        effective_model(write_material(tmp_path, *changes), 50.0)
    assert all(reason in str(caught.value) for reason in REASONS)
    assert "\n" not in str(caught.value)


def test_an_anisotropy_that_is_uniform_but_not_one_is_refused(tmp_path):
    change = ("coupling_meV = 1600.0", "coupling_meV = 1600.0\nanisotropy = [0.5, 0.5, 0.5]")
    with pytest.raises(InputError, match="anisotropy must be"):
        effective_model(write_material(tmp_path, change), 50.0)


@pytest.mark.parametrize(
    ("name", "message"),
    [("absent.toml", "does not exist"), ("absent.h5", "no state file"), ("folder.h5", "is a directory")],
)
def test_a_source_that_is_not_there_is_asked_for_in_its_own_words(tmp_path, name, message):
    (tmp_path / "folder.h5").mkdir()
    with pytest.raises(InputError, match=message):
        effective_model(tmp_path / name, 50.0)


# ---- model files -------------------------------------------------------------------------------------------------


@pytest.fixture
def document(small):
    """What `effective --json` writes, without the evidence."""
    model = from_solution(small).model
    return {"format": "kondomf effective model", "schema": 1, "model": model.to_dict()}


def test_a_model_file_gives_back_the_same_model(tmp_path, document, small):
    path = tmp_path / "model.json"
    path.write_text(json.dumps(document))
    assert read_model(path) == from_solution(small).model


def test_a_model_written_by_hand_needs_no_temperature(tmp_path, document):
    path = tmp_path / "model.json"
    by_hand = FourBandModel(
        b_meV=1.0, dirac_energy_meV=300.0, hbar_v_meV_angstrom=5000.0, heavy_level_meV=0.0, cell_area_angstrom2=20.0
    )
    path.write_text(json.dumps(document | {"model": by_hand.to_dict()}))
    assert read_model(path) == by_hand


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"schema": 2}, "no model file of schema 1"),
        ({"format": "kondomf state"}, "no model file of schema 1"),
        ({"model": None}, "lacks b_meV"),
        ({"model": "b_meV"}, "lacks b_meV"),
        ({"b_meV": None}, "b_meV = None is no number"),
        ({"b_meV": "3"}, "b_meV = '3' is no number"),
        ({"b_meV": float("nan")}, "b_meV = nan: give a finite number"),
        ({"hbar_v_meV_angstrom": -1}, "hbar_v_meV_angstrom = -1: give a finite value above zero"),
        ({"temperature_meV": "cold"}, "temperature_meV = 'cold' is no number"),
        ({"notes": 3}, "holds no model"),
    ],
)
def test_a_model_file_that_holds_no_model_is_refused_by_name(tmp_path, document, change, message):
    path = tmp_path / "model.json"
    for name, value in change.items():
        (document if name in document else document["model"])[name] = value
    path.write_text(json.dumps(document))
    with pytest.raises(InputError, match=message) as caught:
        read_model(path)
    assert str(path) in str(caught.value)
    assert "kondomf effective" in str(caught.value)


@pytest.mark.parametrize("content", [b"", b"[]", b"3", b"\xff\xfe", b'{"format": ', b"name = 3"])
def test_a_file_that_is_no_model_is_refused(tmp_path, content):
    path = tmp_path / "model.json"
    path.write_bytes(content)
    with pytest.raises(InputError, match="is no model file"):
        read_model(path)


def test_a_missing_model_file_and_a_directory_are_refused(tmp_path):
    with pytest.raises(InputError, match=r"no file .*absent.json; write one with: kondomf effective"):
        read_model(tmp_path / "absent.json")
    with pytest.raises(InputError, match="is no model file"):
        read_model(tmp_path)


# ---- state files -------------------------------------------------------------------------------------------------


def test_a_state_file_gives_back_the_solution(tmp_path, small):
    path = tmp_path / "state.h5"
    save_state(small, path)
    again = load_state(path)
    for name in ("phi", "p", "correlators", "multipliers"):
        assert np.array_equal(getattr(again, name), getattr(small, name)), name
    assert np.array_equal(again.model.v, small.model.v)
    for name in ("status", "history", "trials", "zero_modes", "curvatures", "inputs", "free_energy_meV_per_cell"):
        assert getattr(again, name) == getattr(small, name), name


def damage(path, how):
    if how == "truncated":
        path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    elif how == "text":
        path.write_text("not HDF5")
    elif how == "empty":
        path.write_bytes(b"")
    elif how == "foreign":
        with h5py.File(path, "w") as file:
            file["x"] = 1
    else:
        with h5py.File(path, "a") as file:
            if how == "schema":
                file.attrs["schema"] = 1
            elif how == "array":
                del file["phi"]
            elif how == "inputs":
                file.attrs["inputs"] = '{"name": "x"}'
            elif how == "channels":
                file["channels"][0, 0] += 1
            else:
                evidence = json.loads(file["evidence"].asstr()[()]) | {"mood": "good"}
                del file["evidence"]
                file["evidence"] = json.dumps(evidence) if how == "unknown evidence" else "{}"


@pytest.mark.parametrize(
    ("how", "message"),
    [
        ("truncated", "truncated or not HDF5"),
        ("text", "truncated or not HDF5"),
        ("empty", "truncated or not HDF5"),
        ("foreign", "an HDF5 file of another kind; this version reads state files of schema 2"),
        ("schema", "a kondomf state file of schema 1; this version reads state files of schema 2"),
        ("array", "truncated or not HDF5"),
        ("inputs", "section .spin_layer. is missing"),
        ("channels", "other channels than this version builds"),
        ("unknown evidence", "other evidence than this version reads .*mood"),
        ("no evidence", "other evidence than this version reads .*zero_modes"),
    ],
)
def test_a_damaged_or_foreign_state_file_is_refused_and_left_alone(tmp_path, small, how, message):
    path = tmp_path / "state.h5"
    save_state(small, path)
    damage(path, how)
    before = path.read_bytes()
    with pytest.raises(InputError, match=message) as caught:
        load_state(path)
    assert str(path) in str(caught.value)
    assert path.read_bytes() == before
