"""Material files: units, normal forms, round trips, and one clear message for each wrong input."""

import copy
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kondomf.errors import InputError
from kondomf.material import NUMERIC_KEYS, Material, load_material, material_from_dict, with_value

MINIMAL: dict[str, Any] = {
    "name": "test",
    "spin_layer": {"lattice_constant_angstrom": 5.3, "kitaev_meV": -6.0},
    "conduction_layer": {"lattice_constant_angstrom": 4.06, "hopping_meV": 1300.0, "filling": 0.9},
    "kondo": {"coupling_meV": 900.0},
    "mean_field": {"temperature_K": 1.0},
}


def changed(**changes: Any) -> dict[str, Any]:
    """MINIMAL with section__key=value; None removes a key."""
    data = copy.deepcopy(MINIMAL)
    for name, value in changes.items():
        section, _, key = name.partition("__")
        place, key = (data.setdefault(section, {}), key) if key else (data, section)
        if value is None:
            del place[key]
        else:
            place[key] = value
    return data


def build(**changes: Any) -> Material:
    return material_from_dict(changed(**changes))


def doped(**key: Any) -> Material:
    return build(conduction_layer__filling=None, **key)


def complaint(**changes: Any) -> str:
    with pytest.raises(InputError) as caught:
        build(**changes)
    return str(caught.value)


# ---- what a valid file means -------------------------------------------------------------------------------------


def test_only_the_required_keys_are_needed_and_the_rest_has_defaults():
    material = build()
    assert material.spin_layer.heisenberg_3_meV == 0
    assert material.kondo.anisotropy == (1, 1, 1)
    assert (material.mean_field.exchange_form, material.mean_field.kondo_form) == ("kitaev", "so4")
    assert material.mean_field.magnetic_channel is True
    assert (material.zone.method, material.zone.points, material.zone.offset) == ("uniform", 24, "c3")
    assert (material.search.phase, material.search.starts, material.search.seed) == ("any", 8, 1)


def test_a_whole_number_is_accepted_as_a_real_one():
    assert isinstance(build(kondo__coupling_meV=900).kondo.coupling_meV, float)


def test_one_kitaev_number_stands_for_three_bonds():
    assert build(spin_layer__kitaev_meV=-6).spin_layer.kitaev_meV == (-6, -6, -6)
    assert build(spin_layer__kitaev_meV=[1, 2.5, 3]).spin_layer.kitaev_meV == (1, 2.5, 3)


def test_a_uniaxial_g_tensor_has_its_axis_along_111():
    tensor = build(spin_layer__g_factor=[1.5, 3.0]).spin_layer.g_tensor
    normal, in_plane = np.ones(3) / np.sqrt(3), np.array([1, -1, 0]) / np.sqrt(2)
    assert tensor @ normal == pytest.approx(3.0 * normal, abs=1e-15)
    assert tensor @ in_plane == pytest.approx(1.5 * in_plane, abs=1e-15)
    assert build(spin_layer__g_factor=[1, 2, 3]).spin_layer.g_tensor.tolist() == np.diag([1.0, 2, 3]).tolist()
    assert build(spin_layer__g_factor=2.1).spin_layer.g_tensor.tolist() == (2.1 * np.eye(3)).tolist()


@pytest.mark.parametrize(
    ("cell", "lengths", "sites"),
    [
        ("1x1", (1, 1), 1),
        ("1x2", (1, np.sqrt(3)), 2),
        ("sqrt3", (np.sqrt(3), np.sqrt(3)), 3),
        ([[2, 0], [0, 2]], (2, 2), 4),
    ],
)
def test_cells_have_the_area_and_side_lengths_of_their_name(cell, lengths, sites):
    matrix = build(mean_field__cell=cell).cell_matrix
    primitive = np.array([[1, 0], [0.5, np.sqrt(3) / 2]])
    assert np.linalg.norm(matrix @ primitive, axis=1) == pytest.approx(lengths)
    assert np.linalg.det(matrix) == pytest.approx(sites)
    assert matrix.dtype == np.int64


def test_the_rectangle_has_a_right_angle():
    first, second = build(mean_field__cell="1x2").cell_matrix @ np.array([[1, 0], [0.5, np.sqrt(3) / 2]])
    assert first @ second == pytest.approx(0, abs=1e-15)


def test_velocity_matching_keeps_lattice_constant_times_hopping_and_hopping_matching_keeps_hopping():
    assert build().model_hopping_meV * 5.3 == pytest.approx(1300 * 4.06)
    assert build(conduction_layer__match="hopping").model_hopping_meV == 1300


def test_one_kelvin_is_0_08617_meV():
    """CODATA 2018: k = 8.617333262e-5 eV/K."""
    assert build().temperature_meV == pytest.approx(0.08617333262, rel=1e-9)
    assert build(mean_field__temperature_K=None, mean_field__temperature_meV=5).temperature_meV == 5


@pytest.mark.parametrize("sign", [1, -1])
def test_a_density_fills_two_sites_per_cell_of_the_spin_lattice(sign):
    """Cell area (sqrt(3)/2) a^2 = 24.3263 angstrom^2 at a = 5.3, by hand: 1e13/cm^2 is 0.0243263 electrons a cell."""
    material = doped(conduction_layer__density_per_cm2=sign * 1e13)
    assert material.model_filling == pytest.approx(1 + sign * 0.02432665 / 2, rel=1e-7)


def test_a_charge_transfer_of_the_hopping_is_the_van_hove_filling():
    hopping = build().model_hopping_meV
    assert doped(conduction_layer__charge_transfer_meV=hopping).model_filling == pytest.approx(3 / 4, abs=1e-13)
    assert doped(conduction_layer__charge_transfer_meV=-hopping).model_filling == pytest.approx(5 / 4, abs=1e-13)


def test_a_material_cannot_be_changed():
    with pytest.raises(ValueError, match="frozen"):
        build().kondo.coupling_meV = 3.0


# ---- round trips and single values -------------------------------------------------------------------------------


def test_to_dict_holds_what_was_written_and_gives_back_an_equal_material():
    data = changed(mean_field__cell=[[1, 1], [-1, 2]], spin_layer__g_factor=[2, 3], zone__points=12)
    material = material_from_dict(data)
    assert material_from_dict(material.to_dict()) == material
    assert material.to_dict() == data | {"spin_layer": data["spin_layer"] | {"kitaev_meV": [-6, -6, -6]}}


def test_numpy_numbers_become_plain_numbers():
    material = with_value(build(), "kondo.coupling_meV", np.float64(3))
    assert type(material.to_dict()["kondo"]["coupling_meV"]) is float
    assert with_value(build(), "magnetic_field.tesla", np.array([1, 2, 3])).magnetic_field.tesla == (1, 2, 3)
    assert with_value(build(), "zone.points", np.int64(4)).zone.points == 4


@given(st.floats(0.01, 1.99), st.floats(-1e4, 1e4), st.lists(st.floats(-10, 10), min_size=3, max_size=3))
@settings(deadline=None, max_examples=30)
def test_set_values_are_read_back_exactly(filling, coupling, tesla):
    material = build()
    values = {"conduction_layer.filling": filling, "kondo.coupling_meV": coupling, "magnetic_field.tesla": tesla}
    for key, value in values.items():
        material = with_value(material, key, value)
    assert material.model_filling == filling
    assert material.kondo.coupling_meV == coupling
    assert material.magnetic_field.tesla == tuple(tesla)
    assert material_from_dict(material.to_dict()) == material


def test_setting_one_value_leaves_the_original_and_all_others_alone():
    original = build()
    other = with_value(original, "spin_layer.gamma_meV", 1.5)
    assert original == build()
    assert other == build(spin_layer__gamma_meV=1.5)


def test_a_doping_or_temperature_key_replaces_its_alternatives():
    material = with_value(build(), "conduction_layer.charge_transfer_meV", 100)
    assert material.conduction_layer.filling is None
    assert with_value(material, "conduction_layer.density_per_cm2", 1e12).conduction_layer.charge_transfer_meV is None
    assert with_value(material, "mean_field.temperature_meV", 3).mean_field.temperature_K is None


def test_grid_points_on_an_axis_of_real_numbers_are_whole_numbers():
    assert with_value(build(), "zone.points", 36.0).zone.points == 36
    with pytest.raises(InputError, match=r"zone.points = 36.5: not a whole number"):
        with_value(build(), "zone.points", 36.5)


def test_every_numeric_key_can_be_set_and_others_cannot():
    for key in NUMERIC_KEYS:
        section, name = key.split(".")
        value: Any = {"anisotropy": [1.0, 1.0, 1.0], "tesla": [1.0, 1.0, 1.0], "points": 2}.get(name, 1)
        assert getattr(getattr(with_value(build(), key, value), section), name) is not None
    for key in ("name", "search.phase", "mean_field.cell", "mean_field.magnetic_channel", "kondo", "a.b.c", ""):
        with pytest.raises(InputError, match="no numeric key"):
            with_value(build(), key, 1)


def test_a_misspelt_numeric_key_is_answered_with_the_nearest_one():
    with pytest.raises(InputError, match=r"kondo.couplng_meV is no numeric key .* kondo.coupling_meV"):
        with_value(build(), "kondo.couplng_meV", 1)


# ---- wrong keys and values ---------------------------------------------------------------------------------------

NUMBERS = [key for key in NUMERIC_KEYS if key not in ("kondo.anisotropy", "magnetic_field.tesla")]
POSITIVE = [
    "spin_layer.lattice_constant_angstrom",
    "conduction_layer.lattice_constant_angstrom",
    "conduction_layer.hopping_meV",
    "mean_field.temperature_K",
    "mean_field.temperature_meV",
    "zone.tolerance_meV",
    "zone.points",
    "search.starts",
]


def shows(key: str, value: str) -> str:
    return re.escape(f"{key} = {value}")


@pytest.mark.parametrize("key", NUMBERS)
@pytest.mark.parametrize(("value", "shown"), [(True, "true"), ("3", '"3"'), (float("nan"), "NaN"), (10**400, "1000")])
def test_a_bool_a_string_nan_and_an_endless_number_are_no_numbers(key, value, shown):
    if key in ("zone.points", "search.starts", "search.seed") and value == 10**400:
        value, shown = 1.5, "1.5"
    with pytest.raises(InputError, match=shows(key, shown) + ".*; give "):
        with_value(build(), key, value)


@pytest.mark.parametrize("key", POSITIVE)
@pytest.mark.parametrize("value", [0, -1])
def test_a_positive_quantity_refuses_zero_and_negative_values(key, value):
    with pytest.raises(InputError, match=shows(key, str(value)) + ".*; give .*(above 0|at least 1|even whole number)"):
        with_value(build(), key, value)


@pytest.mark.parametrize("points", [1, 25])
def test_an_odd_number_of_grid_points_is_refused(points):
    """The gauge copies of a decoupled state have the same F only on grids that half a period maps onto themselves."""
    with pytest.raises(InputError, match=f"zone.points = {points}: not an even number.*; give"):
        with_value(build(), "zone.points", points)


@pytest.mark.parametrize("value", [0, 2, -0.1, 2.1, float("inf")])
def test_a_filling_outside_0_to_2_is_refused(value):
    with pytest.raises(InputError, match=r"conduction_layer.filling = .*strictly between 0 and 2"):
        with_value(build(), "conduction_layer.filling", value)


@pytest.mark.parametrize(
    ("changes", "fragments"),
    [
        (
            {"spin_layer__kitaev_meV": [1, 2]},
            ["spin_layer.kitaev_meV = [1, 2]: 2 entries", "three for the x, y, z bonds"],
        ),
        ({"spin_layer__kitaev_meV": [1, 2, True]}, ["[1, 2, true]: not a number"]),
        ({"spin_layer__g_factor": [1, 2, 3, 4]}, ["spin_layer.g_factor = [1, 2, 3, 4]: 4 entries", "in plane"]),
        ({"conduction_layer__g_factor": [2, 2, 2]}, ["conduction_layer.g_factor", "only the spin layer"]),
        ({"kondo__anisotropy": 1.0}, ["kondo.anisotropy = 1.0: not a list of numbers", "three numbers"]),
        ({"kondo__anisotropy": [1, 1, float("nan")]}, ["not finite"]),
        ({"magnetic_field__tesla": [1, 2]}, ["magnetic_field.tesla = [1, 2]: 2 entries", "[1, 1, 1]: perpendicular"]),
        ({"search__seed": -1}, ["search.seed = -1", "at least 0"]),
        (
            {"search__phase": "superconductor"},
            ['search.phase = "superconductor"', '"heavy-fermi-liquid"', '"magnetic"'],
        ),
        ({"search__phase": "heavy-fermi-liquid"}, ["search.phase", "pair explicitly", "exchange_form", '"so4"']),
        (
            {
                "search__phase": "heavy-fermi-liquid",
                "mean_field__exchange_form": "so4",
                "mean_field__kondo_form": "kitaev",
            },
            ["mean_field.kondo_form", '"so4"'],
        ),
        ({"mean_field__exchange_form": "SO4"}, ['mean_field.exchange_form = "SO4"', '"kitaev" or "so4"']),
        ({"mean_field__kondo_form": 4}, ["mean_field.kondo_form = 4", '"so4" or "kitaev"']),
        ({"mean_field__magnetic_channel": 1}, ["mean_field.magnetic_channel = 1", "true or false"]),
        ({"mean_field__magnetic_channel": "yes"}, ['mean_field.magnetic_channel = "yes"', "true or false"]),
        ({"mean_field__cell": "2x2"}, ['mean_field.cell = "2x2": not a cell', '"sqrt3"', "[[a, b], [c, d]]"]),
        ({"mean_field__cell": [[1, 0]]}, ["mean_field.cell = [[1, 0]]: not a cell"]),
        ({"mean_field__cell": [[1, 0], [0.5, 1]]}, ["not a whole number"]),
        ({"mean_field__cell": [[1, 2], [2, 4]]}, ["mean_field.cell = [[1, 2], [2, 4]]: singular", "a d - b c > 0"]),
        ({"mean_field__cell": [[0, 1], [1, 0]]}, ["left-handed (determinant -1)", "swap the two rows"]),
        ({"zone__method": "adaptive"}, ["this version sums over uniform grids only", '"uniform"']),
        ({"zone__method": "random"}, ['zone.method = "random"', '"uniform"']),
        ({"zone__offset": "gamma"}, ['zone.offset = "gamma"', '"c3"', '"midpoint"']),
        ({"conduction_layer__match": "density"}, ['conduction_layer.match = "density"', '"velocity"', '"hopping"']),
        ({"name": 3}, ["name = 3", "a name in quotes"]),
        ({"name": ""}, ['name = ""', "a name in quotes"]),
        ({"name": None}, ["name is missing", "a name in quotes"]),
        ({"kondo__coupling_meV": None}, ["kondo.coupling_meV is missing; add the Kondo coupling"]),
        ({"spin_layer__kitaev_meV": None}, ["spin_layer.kitaev_meV is missing"]),
        ({"kondo": None}, ["section [kondo] is missing; it needs coupling_meV"]),
        ({"mean_field": None}, ["section [mean_field] is missing", "one of temperature_K, temperature_meV"]),
        ({"kondo": 900}, ["kondo = 900 is no section", "[kondo]"]),
        ({"kondo__couplng_meV": 1}, ["unknown key kondo.couplng_meV", "use coupling_meV"]),
        ({"kondo__xyz": 1}, ["unknown key kondo.xyz", "coupling_meV, anisotropy"]),
        ({"kondoo__coupling_meV": 1}, ["unknown key kondoo", "use kondo"]),
        (
            {"conduction_layer__charge_transfer_meV": 1},
            ["filling and charge_transfer_meV exclude each other", "keep one"],
        ),
        ({"conduction_layer__filling": None}, ["[conduction_layer] needs one of filling, charge_transfer_meV"]),
        ({"mean_field__temperature_meV": 1}, ["temperature_K and temperature_meV exclude each other", "keep one"]),
        ({"mean_field__temperature_K": None}, ["[mean_field] needs one of temperature_K, temperature_meV"]),
    ],
)
def test_a_wrong_entry_is_answered_with_key_value_legal_values_and_remedy(changes, fragments):
    text = complaint(**changes)
    assert text.startswith("material: ")
    assert all(fragment in text for fragment in fragments), text
    assert "\n" not in text, "one problem, one line"


def test_a_charge_transfer_outside_the_band_is_refused():
    hopping = build().model_hopping_meV
    with pytest.raises(InputError, match=r"charge_transfer_meV.*smaller absolute value"):
        doped(conduction_layer__charge_transfer_meV=3 * hopping)
    with pytest.raises(InputError, match=r"charge_transfer_meV.*smaller absolute value"):
        doped(conduction_layer__charge_transfer_meV=-3 * hopping)


@pytest.mark.parametrize("density", [1e16, -1e16])
def test_a_density_beyond_full_or_empty_bands_is_refused(density):
    with pytest.raises(InputError, match=r"density_per_cm2 gives a filling of .* absolute value below 8.22e\+14"):
        doped(conduction_layer__density_per_cm2=density)


def test_all_problems_of_a_file_are_listed_one_line_each_without_jargon():
    text = complaint(kondo__coupling_meV="x", zone__points=0, spin_layer__lattice_constant_angstrom=None, mean_field=3)
    lines = text.splitlines()
    assert len(lines) == 4
    assert all(line.startswith("material: ") for line in lines)
    assert not re.search(r"pydantic|validation|Input should|type=|ctx", text)


# ---- files -------------------------------------------------------------------------------------------------------

TEXT = """name = "from a file"
[spin_layer]
lattice_constant_angstrom = 5.30
kitaev_meV = -6.0  # comment
[conduction_layer]
lattice_constant_angstrom = 4.06
hopping_meV = 1300.0
filling = 0.9
[kondo]
coupling_meV = 900.0
[mean_field]
temperature_K = 1.0
"""


def write(folder: Path, content: str | bytes) -> Path:
    path = folder / "material.toml"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def test_a_file_equals_the_dict_of_its_keys(tmp_path):
    assert load_material(write(tmp_path, TEXT)) == build(name="from a file")


def test_windows_line_ends_and_byte_order_mark_are_read(tmp_path):
    content = b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode()
    assert load_material(write(tmp_path, content)) == build(name="from a file")


@pytest.mark.parametrize(
    ("old", "new", "fragments"),
    [
        ("900.0", "-true", ["material.toml is not valid TOML", "line 10", "key = value"]),
        ("coupling_meV = 900.0", "coupling_meV", ["not valid TOML", "line 10"]),
        ("900.0", "true", ["material.toml, line 10: kondo.coupling_meV = true: not a number; give the Kondo coupling"]),
        ("5.30", "nan", ["line 3: spin_layer.lattice_constant_angstrom = NaN: not finite"]),
        ("hopping_meV", "hoping_meV", ["line 7: unknown key conduction_layer.hoping_meV", "use hopping_meV"]),
        ("[kondo]", "[kondos]", ["line 9: unknown key kondos", "use kondo", "section [kondo] is missing"]),
        ("filling = 0.9", "", ["line 5: [conduction_layer] needs one of"]),
        ('"from a file"', "'''\n'''", ["line 1: name"]),
        (TEXT, "", ["section [spin_layer] is missing", "name is missing"]),
    ],
)
def test_an_error_in_a_file_names_file_and_line(tmp_path, old, new, fragments):
    path = write(tmp_path, TEXT.replace(old, new))
    with pytest.raises(InputError) as caught:
        load_material(path)
    assert all(fragment in str(caught.value) for fragment in [str(path), *fragments]), str(caught.value)


def test_a_missing_file_a_directory_and_binary_data_are_refused(tmp_path):
    with pytest.raises(InputError, match=r"absent.toml does not exist; check the name"):
        load_material(tmp_path / "absent.toml")
    with pytest.raises(InputError, match="is a directory; give the name of a material file"):
        load_material(tmp_path)
    with pytest.raises(InputError, match="is not UTF-8 text"):
        load_material(write(tmp_path, b"\x89HDF\r\n\x1a\n\xff"))
