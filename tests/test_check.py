"""Quantities that follow from a material, the honeycomb band behind them, warnings, and the templates."""

import re
import tomllib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants, integrate, special

from kondomf.errors import InputError
from kondomf.material import derive, honeycomb, load_material, material_from_dict, table, with_value, write_templates
from kondomf.material.commensurate import nearest_cell, valley_shift
from kondomf.material.derive import pocket_area
from kondomf.units import FREQUENCY_PER_AREA

GRAPHENE = {
    "name": "graphene lattice on itself",
    "spin_layer": {"lattice_constant_angstrom": 2.46, "kitaev_meV": -1.0},
    "conduction_layer": {"lattice_constant_angstrom": 2.46, "hopping_meV": 3000.0, "filling": 1.0},
    "kondo": {"coupling_meV": 100.0},
    "mean_field": {"temperature_meV": 300.0},
}


@pytest.fixture
def graphene():
    return material_from_dict(GRAPHENE)


@pytest.fixture
def template(tmp_path):
    return load_material(write_templates(tmp_path)[0])


# ---- honeycomb band ----------------------------------------------------------------------------------------------


def test_density_of_states_is_the_published_one_away_from_the_logarithm():
    """Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene", eq. (14), which counts both spins."""
    g = np.array([0.01, 0.3, 0.8, 1.2, 1.9, 2.7, 2.999])
    q = (1 + g) ** 2 - (g**2 - 1) ** 2 / 4
    z0, z1 = np.where(g < 1, q, 4 * g), np.where(g < 1, 4 * g, q)
    published = 4 / np.pi**2 * g / np.sqrt(z0) * special.ellipk(z1 / z0)
    assert 2 * honeycomb.density_of_states(g) == pytest.approx(published, rel=1e-12)


def test_density_of_states_is_linear_at_the_dirac_point_infinite_at_van_hove_and_zero_outside_the_band():
    """Slope 2/(sqrt(3) pi): two cones with A g / (2 pi v^2) each, area A = sqrt(3)/2, v = sqrt(3)/2 (a = t = 1)."""
    assert honeycomb.density_of_states(1e-6) == pytest.approx(2e-6 / (np.sqrt(3) * np.pi), rel=1e-6)
    assert honeycomb.density_of_states(1.0) == np.inf
    assert honeycomb.density_of_states([-0.1, 0.0, 3.1]).tolist() == [0, 0, 0]


@pytest.mark.parametrize(("power", "moment"), [(0, 1), (2, 3), (4, 15), (6, 93), (8, 639)])
def test_moments_count_closed_walks_on_the_honeycomb_lattice(power, moment):
    """1, 3, 15, 93, 639: integer sequence A002893 (closed walks of 2n steps), from memory."""
    g, weight = honeycomb.energy_quadrature()
    assert weight @ g**power == pytest.approx(moment, rel=1e-13)


def test_quadrature_equals_a_zone_average():
    """exp(-g^2) is analytic and periodic in k, so that a uniform grid gives its average to rounding."""
    phase = 2 * np.pi * np.arange(40) / 40
    zone = np.abs(honeycomb.bloch_factor(phase[:, None], phase))
    g, weight = honeycomb.energy_quadrature()
    assert weight @ np.exp(-(g**2)) == pytest.approx(np.exp(-(zone**2)).mean(), rel=1e-13)


@pytest.mark.parametrize("order", [32, 64, 100])
def test_quadrature_of_a_smooth_function_does_not_depend_on_its_order(order):
    g, weight = honeycomb.energy_quadrature(order)
    finer, finer_weight = honeycomb.energy_quadrature(160)
    assert (g.shape, np.all(np.diff(g) >= 0), np.all(weight > 0)) == ((2 * order,), True, True)
    assert weight @ np.tanh(g) == pytest.approx(finer_weight @ np.tanh(finer), abs=2e-13)


@pytest.mark.parametrize("distance", [1.0, 0.5, 1e-2, 1e-4, 1e-8])
def test_integrated_density_is_accurate_across_the_logarithm(distance):
    """Reference: adaptive quadrature in s = -ln|g - 1|, another substitution than the one of the code."""

    def shell(sign: int) -> float:
        def integrand(s: float) -> float:
            return float(honeycomb.density_of_states(1 + sign * np.exp(-s)) * np.exp(-s))

        return integrate.quad(integrand, -np.log(distance), 34, epsabs=1e-13, limit=200)[0]

    assert honeycomb.integrated_density(1 - distance) == pytest.approx(0.25 - shell(-1), abs=1e-11)
    assert honeycomb.integrated_density(1 + distance) == pytest.approx(0.25 + shell(1), abs=1e-11)


def test_integrated_density_has_the_shape_of_its_argument_and_saturates():
    assert honeycomb.integrated_density([[0, 3], [4, -1]]) == pytest.approx(np.array([[0, 1], [1, 0]]), abs=1e-13)


def test_van_hove_fillings_are_three_and_five_quarters():
    assert honeycomb.filling_of_dirac_energy(700, 700) == pytest.approx(0.75, abs=1e-13)
    assert honeycomb.filling_of_dirac_energy(-700, 700) == pytest.approx(1.25, abs=1e-13)
    assert honeycomb.filling_of_dirac_energy(0, 700) == 1


@given(st.floats(0.001, 1.999))
@settings(deadline=None, max_examples=50)
def test_dirac_energy_inverts_the_filling(filling):
    energy = honeycomb.dirac_energy_of_filling(filling, 900.0)
    assert np.sign(energy) == np.sign(1 - filling)
    assert honeycomb.filling_of_dirac_energy(energy, 900.0) == pytest.approx(filling, abs=1e-12)


def test_an_almost_empty_band_has_its_dirac_point_at_the_band_edge():
    assert honeycomb.dirac_energy_of_filling(1e-17, 900) == pytest.approx(2700)


def test_a_dirac_energy_outside_the_band_and_an_impossible_filling_are_refused():
    for energy in (2700, -2700, np.nan):
        with pytest.raises(InputError, match="ends 2700 meV from it"):
            honeycomb.filling_of_dirac_energy(energy, 900)
    with pytest.raises(InputError, match="strictly between 0 and 2"):
        honeycomb.dirac_energy_of_filling(2, 900)


# ---- derived quantities ------------------------------------------------------------------------------------------


def test_dirac_velocity_of_graphene_is_a_million_metres_per_second(graphene):
    """Rev. Mod. Phys. 81, 109 (2009), "The electronic properties of graphene": v = 3 t d/2 hbar with bond length d."""
    bond = 2.46e-10 / np.sqrt(3)
    velocity = 1.5 * 3 * constants.e * bond / constants.hbar
    assert derive(graphene).dirac_velocity_m_per_s == pytest.approx(velocity, rel=1e-12)
    assert derive(graphene).dirac_velocity_m_per_s == pytest.approx(1e6, rel=0.05)


def test_velocity_matching_keeps_the_velocity_and_hopping_matching_scales_it(template):
    kept = derive(template)
    assert kept.model_dirac_velocity_m_per_s == pytest.approx(kept.dirac_velocity_m_per_s, rel=1e-14)
    data = template.to_dict()
    data["conduction_layer"]["match"] = "hopping"
    scaled = derive(material_from_dict(data))
    assert scaled.model_dirac_velocity_m_per_s == pytest.approx(kept.dirac_velocity_m_per_s * 5.3 / 4.06)
    assert kept.lattice_mismatch_percent == pytest.approx(-23.396, abs=1e-3)


@pytest.mark.parametrize("density", [1e12, -1e12, -3e13])
def test_onsager_frequency_is_h_n_over_4_e(graphene, density):
    """Degeneracy 4 (valley, spin): 10.34 T at 1e12 per cm^2."""
    derived = derive(with_value(graphene, "conduction_layer.density_per_cm2", density))
    assert derived.oscillation_frequency_T == pytest.approx(constants.h * abs(density) * 1e4 / (4 * constants.e))
    assert derived.oscillation_frequency_T == pytest.approx(10.34 * abs(density) / 1e12, rel=1e-3)
    assert derived.carrier_density_per_cm2 == pytest.approx(density)
    area = np.pi * derived.fermi_wave_vector_per_angstrom**2
    assert area * FREQUENCY_PER_AREA == pytest.approx(derived.oscillation_frequency_T)


def test_two_pockets_of_an_eighth_of_the_zone_merge_at_van_hove_filling_into_one_that_closes_at_the_band_edge():
    zone = 8 * np.pi**2 / np.sqrt(3)
    assert pocket_area(0.75 + 1e-12, 1) == pytest.approx(zone / 8)
    assert pocket_area(0.75 - 1e-12, 1) == pytest.approx(zone * 3 / 4)
    assert pocket_area(1e-9, 1) == pytest.approx(0, abs=1e-6)
    assert pocket_area(1.1, 1) == pytest.approx(pocket_area(0.9, 1))


def test_dirac_energies_of_cone_and_band_agree_at_small_doping_and_have_the_sign_of_hole_doping(graphene):
    for density in (1e11, -1e11):
        derived = derive(with_value(graphene, "conduction_layer.density_per_cm2", density))
        assert derived.dirac_energy_cone_meV == pytest.approx(derived.dirac_energy_band_meV, rel=1e-3)
        assert np.sign(derived.dirac_energy_cone_meV) == -np.sign(density)


def test_a_charge_transfer_is_given_back_as_the_dirac_energy_of_the_band(graphene):
    derived = derive(with_value(graphene, "conduction_layer.charge_transfer_meV", 450.0))
    assert derived.dirac_energy_band_meV == pytest.approx(450.0, rel=1e-10)


def test_energy_scales_are_given_in_meV_and_kelvin(template):
    """CODATA 2018: k = 0.08617333262 meV/K, mu_B = 0.057883818060 meV/T."""
    derived = derive(with_value(template, "magnetic_field.tesla", [0, 0, 10.0]))
    assert derived.energy_scales_meV["temperature"] == 20
    assert derived.energy_scales_K["temperature"] == pytest.approx(20 / 0.08617333262)
    assert derived.energy_scales_meV["electron_zeeman"] == pytest.approx(2 * 10 * 0.057883818060)
    assert derived.energy_scales_K["kitaev"] == pytest.approx(6 / 0.08617333262)


def test_zeeman_splitting_uses_the_g_tensor(template):
    anisotropic = with_value(with_value(template, "spin_layer.g_factor", [1, 3]), "magnetic_field.tesla", [1, 1, 1])
    scales = derive(anisotropic).energy_scales_meV
    assert scales["spin_zeeman"] == pytest.approx(3 * np.sqrt(3) * 0.057883818060)


# ---- two lattices ------------------------------------------------------------------------------------------------


def test_equal_lattices_have_no_valley_shift_and_share_the_primitive_cell():
    for twist in (0, 60, -120):
        assert valley_shift(2.46, 2.46, twist) == pytest.approx(0, abs=1e-12)
        cell = nearest_cell(2.46, 2.46, twist)
        assert cell is not None
        assert cell.spin_cell == ((1, 0), (0, 1))
        assert (cell.strain_percent, cell.rotation_degree) == pytest.approx((0, 0), abs=1e-10)
        assert cell.spin_valley == "K"


def test_valley_shift_of_twisted_equal_layers():
    """2 |K| sin(theta/2): Proc. Natl. Acad. Sci. 108, 12233 (2011), "Moire bands in twisted double-layer graphene"."""
    expected = 4 * np.pi / (3 * 2.46) * 2 * np.sin(np.radians(1.05) / 2)
    assert valley_shift(2.46, 2.46, 1.05) == pytest.approx(expected)


def test_untwisted_valley_shift_is_the_difference_of_zone_sizes():
    assert valley_shift(5.3, 4.06, 0) == pytest.approx(4 * np.pi / 3 * (1 / 4.06 - 1 / 5.3))


def test_the_sqrt7_twist_of_equal_layers_is_found_exactly():
    """Vectors (2, 1) and (1, 2) of equal length enclose 21.787 degree, cos = 13/14 (common practice, by hand)."""
    cell = nearest_cell(2.46, 2.46, np.degrees(np.arccos(13 / 14)))
    assert cell is not None
    assert cell.area_angstrom2 == pytest.approx(7 * np.sqrt(3) / 2 * 2.46**2)
    assert (cell.strain_percent, cell.rotation_degree) == pytest.approx((0, 0), abs=1e-10)


def test_sqrt3_supercell_folds_the_valleys_of_one_layer_onto_gamma():
    """A lattice constant sqrt(3) larger at 30 degree: the R30 cell folds K of the small lattice onto Gamma."""
    cell = nearest_cell(np.sqrt(3) * 2.46, 2.46, 30)
    assert cell is not None
    assert cell.spin_cell == ((1, 0), (0, 1))
    assert (cell.spin_valley, cell.conduction_valley) == ("K", "Gamma")
    assert abs(np.linalg.det(cell.conduction_cell)) == pytest.approx(3)


@given(st.floats(2, 8), st.floats(2, 8), st.floats(0, 60))
@settings(deadline=None, max_examples=40)
def test_the_reported_strain_and_turn_close_the_common_cell(spin_constant, conduction_constant, twist):
    cell = nearest_cell(spin_constant, conduction_constant, twist)
    assert cell is not None
    primitive = np.array([1, np.exp(1j * np.pi / 3)])
    spin = np.array(cell.spin_cell) @ primitive * spin_constant
    conduction = np.array(cell.conduction_cell) @ primitive * conduction_constant
    moved = conduction * (1 + cell.strain_percent / 100) * np.exp(1j * np.radians(twist + cell.rotation_degree))
    assert moved == pytest.approx(spin, abs=1e-9)
    assert cell.area_angstrom2 == pytest.approx(np.linalg.det(cell.spin_cell) * np.sqrt(3) / 2 * spin_constant**2)
    assert abs(spin[0]) <= 60 + 1e-9


def test_lattices_too_large_for_the_search_have_no_cell():
    assert nearest_cell(70, 4, 0) is None


# ---- warnings and the table --------------------------------------------------------------------------------------


def test_a_material_inside_all_ranges_has_no_warning_but_the_form(graphene):
    """Every material uses one form or the other, and each has its limit."""
    assert [text for text in derive(graphene).warnings if "form" not in text] == []


@pytest.mark.parametrize(
    ("key", "value", "fragments"),
    [
        ("conduction_layer.charge_transfer_meV", 1000.0, ["0.33 t_eff", "rough guides"]),
        ("mean_field.temperature_meV", 5.0, ["5 meV", "level spacing 375 meV", "to about 450"]),
        ("kondo.coupling_meV", 0, ["Kondo coupling is zero"]),
        ("kondo.anisotropy", [0, 0, 0], ["Kondo coupling is zero"]),
        ("conduction_layer.twist_degree", 5, ["twist does not enter the model"]),
        ("conduction_layer.kane_mele_meV", 5, ["kane_mele_meV", "left out"]),
    ],
)
def test_leaving_a_range_is_warned_about_with_its_number(graphene, key, value, fragments):
    before = derive(graphene).warnings
    new = [text for text in derive(with_value(graphene, key, value)).warnings if text not in before]
    assert len(new) == 1
    assert all(fragment in new[0] for fragment in fragments), new[0]


def test_each_spin_form_is_warned_about_by_its_own_limit(graphene):
    def warnings(**mean_field: str) -> str:
        data = graphene.to_dict()
        data["mean_field"] |= mean_field
        return "\n".join(derive(material_from_dict(data)).warnings)

    assert "pair explicitly" in warnings()
    assert "quarter of its energy" not in warnings()
    assert "pair explicitly" not in warnings(exchange_form="so4")
    assert "quarter of its energy" in warnings(exchange_form="so4")
    assert "pair explicitly" in warnings(exchange_form="so4", kondo_form="kitaev")


def test_the_suggested_number_of_grid_points_silences_the_warning(graphene):
    cold = with_value(graphene, "mean_field.temperature_meV", 5.0)
    assert not any("level spacing" in text for text in derive(with_value(cold, "zone.points", 450)).warnings)
    assert any("level spacing" in text for text in derive(with_value(cold, "zone.points", 448)).warnings)


def test_the_table_shows_every_quantity_with_its_unit(template):
    rows = dict(table(derive(template)))
    assert rows["Dirac velocity"] == "6.944e+05 m/s"
    assert rows["lattice mismatch (a_c - a_s)/a_s"] == "-23.40 %"
    assert rows["energy scale: temperature"] == "20 meV = 232.1 K"
    assert "K folds onto" in rows["nearest common cell, spin layer"]
    assert derive(template).to_dict()["commensurate_cell"]["spin_cell"] == [[10, 0], [0, 10]]


# ---- templates ---------------------------------------------------------------------------------------------------


def test_templates_are_valid_and_say_that_they_are_invented(tmp_path):
    material, sweep, heavy = write_templates(tmp_path / "new" / "folder")
    assert load_material(material).name.endswith("(invented)")
    assert load_material(heavy).search.phase == "heavy-fermi-liquid"
    assert all("INVENTED" in path.read_text() for path in (material, sweep, heavy))
    assert derive(load_material(material)).model_hopping_meV > 0


def test_commented_lines_of_the_material_template_are_legal_keys_with_their_defaults(tmp_path, template):
    text = (tmp_path / "material.toml").read_text()
    lines = [re.sub(r"^# (?=\[|\w+ = )", "", line) for line in text.splitlines()]
    alternatives = ("charge_transfer_meV", "density_per_cm2")
    data = tomllib.loads("\n".join(line for line in lines if not line.startswith(alternatives)))
    assert material_from_dict(data) == template


def test_axes_of_the_sweep_template_are_numeric_keys_of_its_material(tmp_path, template):
    sweep = tomllib.loads((tmp_path / "sweep.toml").read_text())
    assert (tmp_path / sweep["material"]).exists()
    for key, axis in sweep["axes"].items():
        assert axis["points"] > 1
        for value in (axis["from"], axis["to"]):
            with_value(template, key, value)


def test_templates_never_replace_a_file_unless_told_to(tmp_path):
    (tmp_path / "sweep.toml").write_text("mine")
    with pytest.raises(InputError, match="exists; choose another name or pass --overwrite"):
        write_templates(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["sweep.toml"]
    write_templates(tmp_path, overwrite=True)
    assert (tmp_path / "sweep.toml").read_text() != "mine"


def test_a_folder_that_cannot_be_made_is_refused(tmp_path):
    (tmp_path / "file").write_text("")
    for folder in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(InputError, match=r"cannot create the folder .*; choose another one"):
            write_templates(folder)
