"""What a solution is called and why: order parameters, spectra, labels, and their independence of the gauge."""

import json
from dataclasses import replace

import numpy as np
import pytest
from materials import T, dimensionless

from kondomf.material import honeycomb
from kondomf.meanfield import Settings, Start, named_start, solve
from kondomf.meanfield.evaluate import evaluate
from kondomf.model import build_model
from kondomf.model.majorana import ELECTRON, SPINON, majorana, spinor
from kondomf.phases import Order, bands, density_of_states, gap, label, path, summarize
from kondomf.phases.band_structure import band_structure
from kondomf.phases.order import SINGLET, TRIPLET
from kondomf.units import BOHR_MAGNETON

LIQUID = "Kitaev spin liquid with metal (FL*)"
VAN_HOVE = {"kondo": 3.5, "filling": 0.75, "magnetic": False}
HEAVY = {
    "kitaev": 0.3,
    "kondo": 2.2,
    "filling": 0.9,
    "form": "so4",
    "magnetic": False,
    "temperature": 0.02,
    "search__phase": "heavy-fermi-liquid",
    "search__starts": 1,
}


def solved(start, keep_saddle=False, **keys):
    """Solution from one start, a standard one by its name; energies in `keys` in units of t."""
    material = dimensionless(**keys)
    chosen = named_start(material, start) if isinstance(start, str) else start
    return solve(material, only_starts=[chosen], settings=Settings(keep_saddle=keep_saddle))


def free_electrons(filling=1.0, **keys):
    """Electrons on a layer of nearly free spins, decoupled from them."""
    keys = {"points": 6, "offset": "c3", "temperature": 0.002} | keys
    return solved("decoupled 0", kitaev=-1e-3, filling=filling, **keys)


def named(solution):
    return label(solution, Order(solution), gap(solution))


@pytest.fixture(scope="module")
def liquid():
    """The spin liquid below a metal at the Dirac points."""
    return solved("decoupled 0", kondo=3.2, offset="c3")


@pytest.fixture(scope="module")
def heavy():
    return solve(dimensionless(points=12, offset="c3", **HEAVY))


# ---- hybridization and labels ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("start", "keys", "values"),
    [
        ("hybridized 0", VAN_HOVE, [0.7164, 0.7139, 0.6696, 0.5876]),
        ("hybridized M1", VAN_HOVE, [0.7165, 0.7138, 0.6692, 0.5875]),
        ("decoupled 0", {"kondo": 3.2}, [0, 0, 0, 0]),
        ("hybridized 0", {"kondo": 4.0}, [0.8522, 0.8522, 0.8462, 0.8462]),
    ],
)
def test_the_hybridization_of_every_site_has_the_singular_values_of_independent_implementations(start, keys, values):
    """K = -1, T = 0.005 on 12 x 12: two independent implementations."""
    order = Order(solved(start, **keys))
    assert order.hybridization.shape == (2, 4)
    for site in order.hybridization:
        assert site == pytest.approx(values, abs=1e-4)


def test_a_decoupled_state_without_moments_is_the_spin_liquid_with_metal_and_says_why(liquid):
    found = named(liquid)
    assert found.name == LIQUID
    assert found.evidence[0].startswith("no hybridization")
    for words in ("bond correlators of the spinons 1 to 1", "moments: spins", "smallest excitation"):
        assert any(words in text for text in found.evidence), words


def test_a_gapped_hybridized_state_at_half_filling_is_a_kondo_insulator():
    solution = solved("hybridized 0", kondo=4.0)
    assert named(solution).name == "Kondo insulator"
    assert gap(solution).total > 0.1 * T
    assert Order(solution).density == pytest.approx([1, 1], abs=1e-9)


def test_a_hybridized_state_that_conserves_charge_is_a_heavy_fermi_liquid_without_any_pairing(heavy):
    assert named(heavy).name == "heavy Fermi liquid"
    assert max(Order(heavy).pairing) < 1e-10
    assert Order(heavy).normal_amplitude > 0.1
    assert Order(heavy).nematicity < 1e-4


def test_the_electrons_of_the_doped_kitaev_form_pair_in_a_triplet_that_breaks_c3():
    solution = solved("hybridized 0", offset="c3", **VAN_HOVE)
    singlet, triplet = Order(solution).pairing
    assert triplet > 5 * singlet > 0
    assert named(solution).name == "nematic triplet superconductor"


@pytest.mark.parametrize(
    ("start", "exchange", "name"),
    [
        ("ferromagnet", -1.0, "ferromagnet with metal"),
        ("Neel antiferromagnet", 1.0, "Néel antiferromagnet with metal"),
        ("decoupled 0", 0.0, "disordered local moments with metal"),
    ],
)
def test_heisenberg_exchange_makes_the_magnet_of_its_sign_and_none_leaves_the_moments_disordered(start, exchange, name):
    solution = solved(start, kitaev=0.0, spin_layer__heisenberg_meV=exchange, form="so4", points=4)
    assert solution.status == "minimum"
    assert named(solution).name == name


def test_what_is_not_converged_is_undetermined():
    material = dimensionless(**VAN_HOVE)
    settings = Settings(mixing_steps=1, newton_steps=1)
    solution = solve(material, only_starts=[named_start(material, "hybridized 0")], settings=settings)
    assert named(solution).name == "undetermined"
    assert "not converged" in named(solution).evidence[0]


def test_a_spin_liquid_melts_above_the_temperature_of_its_bonds():
    """The so4 form binds a bond with K/8 only: at T = K/2 the spinons have none."""
    hot = solved("decoupled 0", kitaev=-0.3, form="so4", points=4, temperature=0.15)
    assert named(hot).name == "disordered local moments with metal"


# ---- moments, bonds, pairing -------------------------------------------------------------------------------------


@pytest.mark.parametrize("direction", [(0, 0, 1), (1, 0, 0), (-1, 0, 0), (0, 0.6, -0.8)])
@pytest.mark.parametrize("form", ["kitaev", "so4"])
def test_a_strong_field_polarises_all_spins_and_electrons_against_it(direction, form):
    """Zeeman energy +g mu_B B.S: the ground state has S = s = -1/2 along the field."""
    tesla = 20 * T / (2 * BOHR_MAGNETON) * np.array(direction)
    keys = {"kitaev": 0.0, "spin_layer__heisenberg_meV": 1e-3, "points": 2, "form": form}
    order = Order(solved("ferromagnet", magnetic_field__tesla=tesla.tolist(), **keys))
    for moments in (order.spin_moment, order.electron_moment):
        assert moments == pytest.approx(np.tile(-0.5 * np.array(direction), (2, 1)), abs=1e-6)


@pytest.mark.parametrize("kitaev", [-1.0, 0.5])
def test_every_bond_of_the_spin_liquid_has_the_published_energy(kitaev):
    """<sigma sigma> = 0.5249 on a bond: Phys. Rev. Lett. 98, 247201 (2007), "Exact results for spin dynamics and
    fractionalization in the Kitaev model"; S = sigma/2, and the energy is negative for either sign of K."""
    solution = solved("decoupled 0", kitaev=kitaev, points=24, offset="c3", temperature=0.002)
    energies = Order(solution).bond_energies
    assert list(energies) == ["x", "y", "z"]
    for bond in energies.values():
        assert bond == pytest.approx([-0.5249 / 4 * abs(kitaev) * T], rel=2e-4)
    assert Order(solution).nematicity < 1e-9


def test_bond_energies_sum_to_the_exchange_energy_of_the_quadratic_form(heavy):
    p = np.where(heavy.model.hybridization, 0.0, heavy.p)
    total = sum(sum(bonds) for bonds in Order(heavy).bond_energies.values())
    assert total == pytest.approx(p @ heavy.model.v @ p / 2, rel=1e-10)


def test_the_energy_of_a_stronger_bond_is_lower_and_shows_as_nematicity():
    order = Order(solved("decoupled 0", kitaev=[-1.0, -1.0, -1.5], points=12, offset="c3"))
    x, y, z = (order.bond_energies[kind][0] for kind in "xyz")
    assert x == pytest.approx(y)
    assert z < 1.5 * x
    assert order.nematicity == pytest.approx((x - z) / abs(x + y + z))


def gaussian_bond(model, pair, normal):
    """Correlators of electrons with <c_A c_B> = pair and <c+_A c_B> = normal, (2, 2) each, on the z bond alone."""
    inverse = [2 * np.vstack([spinor(site), spinor(site).conj()]).conj().T for site in (0, 1)]
    fermions = np.block([[pair, -normal.conj()], [normal, -pair.conj()]])
    block = 1j * inverse[0] @ fermions @ inverse[1].T
    assert np.abs(block.imag).max() < 1e-14
    correlators = np.zeros((len(model.lattice_vectors), 16, 16))
    home = np.flatnonzero(~model.lattice_vectors.any(axis=1))[0]
    a, b = majorana(0, ELECTRON, 0), majorana(1, ELECTRON, 0)
    correlators[home, a : a + 4, b : b + 4] = block.real
    correlators[home, b : b + 4, a : a + 4] = -block.real.T
    return correlators


def test_pairing_of_a_hand_made_state_is_split_into_its_singlet_and_its_d_vector(liquid):
    """<c_s c_s'> = (psi + d.sigma) i sigma_y: Rev. Mod. Phys. 63, 239 (1991), "Phenomenological theory of
    unconventional superconductivity"."""
    psi, d = 0.02 - 0.05j, np.array([0.03j, -0.01, 0.02 + 0.04j])
    sigma = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
    i_sigma_y = 1j * sigma[1]
    pair = (psi * np.eye(2) + np.tensordot(d, sigma, 1)) @ i_sigma_y
    normal = np.array([[0.2, 0.1j], [0.05, -0.15 + 0.1j]])
    order = Order(replace(liquid, correlators=gaussian_bond(liquid.model, pair, normal)))
    assert order.pairing == pytest.approx((abs(psi), np.linalg.norm(d)), rel=1e-12)
    assert order.normal_amplitude == pytest.approx(0.2)
    assert np.array_equal(i_sigma_y, SINGLET)
    assert pytest.approx(TRIPLET) == sigma @ i_sigma_y


# ---- gauge -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("copy", [1, 2, 3])
def test_order_parameters_gap_and_label_are_the_same_in_every_gauge_copy(liquid, copy):
    signs = liquid.model.gauge_signs[copy]
    assert (signs < 0).any()
    state = evaluate(liquid.model, liquid.zone, signs * liquid.phi)
    other = replace(liquid, phi=signs * liquid.phi, p=state.p, correlators=state.correlators)
    here, there = Order(liquid), Order(other)
    for name in ("hybridization", "spin_moment", "electron_moment", "density", "pairing", "normal_amplitude"):
        assert getattr(there, name) == pytest.approx(getattr(here, name), abs=1e-12), name
    for kind, energies in here.bond_energies.items():
        assert there.bond_energies[kind] == pytest.approx(energies, rel=1e-3)
    assert named(other).name == named(liquid).name
    assert gap(other).spinons == pytest.approx(gap(liquid).spinons, abs=1e-6 * T)
    assert gap(other).electrons == pytest.approx(gap(liquid).electrons, abs=1e-6 * T)


def test_a_random_local_gauge_rotation_of_the_spinons_changes_no_order_parameter(heavy):
    """f -> u f with u in SU(2) mixes the four spinon Majoranas of a site by an O(4) matrix that leaves S alone."""
    rotation = np.eye(16)
    for site, angle in ((0, 0.7), (1, -1.9)):
        for mu, nu in ((0, 3), (1, 2)):  # exp(angle * gauge generator z)
            i, j = majorana(site, SPINON, mu), majorana(site, SPINON, nu)
            rotation[np.ix_([i, j], [i, j])] = [[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]]
    turned = replace(heavy, correlators=rotation @ heavy.correlators @ rotation.T)
    here, there = Order(heavy), Order(turned)
    for name in ("hybridization", "spin_moment", "electron_moment", "pairing", "nematicity"):
        assert getattr(there, name) == pytest.approx(getattr(here, name), abs=1e-9), name
    for kind, energies in here.bond_energies.items():
        assert there.bond_energies[kind] == pytest.approx(energies, rel=1e-9)


# ---- spectrum ----------------------------------------------------------------------------------------------------


def honeycomb_energies(k):
    """g(k), (Nk,), at wave vectors in units of the reciprocal vectors."""
    return np.abs(honeycomb.bloch_factor(*(2 * np.pi * k.T)))


@pytest.mark.parametrize("filling", [1.0, 0.75])
def test_bands_of_free_electrons_are_those_of_the_honeycomb_lattice(filling):
    solution = free_electrons(filling)
    k, distance, corners = path(solution, 60)
    found = bands(solution, k)
    g = T * honeycomb_energies(k)[:, None]
    mu = solution.chemical_potential_meV
    particles = np.repeat(np.hstack([g, -g]) - mu, 2, axis=1)
    expected = np.sort(np.hstack([particles, -particles]), axis=1)
    # the eight states of most conduction weight: where a spinon level meets an electron level they may mix
    electrons = np.sort(np.argsort(found.conduction, axis=1)[:, 8:], axis=1)
    assert np.take_along_axis(found.energy, electrons, axis=1) == pytest.approx(expected, abs=1e-8 * T)
    assert found.conduction.sum(axis=1) == pytest.approx(8)
    assert distance[0] == corners[0] == 0
    assert distance[-1] == pytest.approx(corners[-1])
    assert honeycomb_energies(k[np.searchsorted(distance, np.array(corners) - 1e-9)]) == pytest.approx([3, 0, 1, 3])


def test_the_path_has_the_lengths_of_the_hexagonal_zone():
    """Gamma-K is 4 pi/3a, K-M half of it, M-Gamma 2 pi/(sqrt(3) a): from memory."""
    _, distance, corners = path(free_electrons(), 100)
    lengths = [4 * np.pi / 3, 2 * np.pi / 3, 2 * np.pi / np.sqrt(3)]
    assert np.diff(corners) == pytest.approx(lengths)
    assert len(distance) == pytest.approx(101, abs=2)
    assert (np.diff(distance) > 0).all()


def test_weights_lie_between_0_and_1_and_count_every_state_once(heavy):
    found = bands(heavy, np.random.default_rng(5).random((40, 2)))
    for weight in (found.conduction, found.particle):
        assert weight.min() > -1e-12
        assert weight.max() < 1 + 1e-12
    assert found.conduction.sum(axis=1) == pytest.approx(np.full(40, 8))
    assert found.particle.sum(axis=1) == pytest.approx(np.full(40, 4))
    assert (found.particle <= found.conduction + 1e-12).all()
    assert 0.05 < np.median(found.conduction) < 0.95, "hybridized states belong to both layers"


def test_quasiparticle_energies_come_in_pairs_of_opposite_sign_at_k_and_minus_k(heavy):
    k = np.random.default_rng(6).random((20, 2))
    assert bands(heavy, k).energy == pytest.approx(-bands(heavy, -k).energy[:, ::-1], abs=1e-9 * T)


@pytest.mark.parametrize("filling", [1.0, 0.75])
def test_the_density_of_states_of_free_electrons_is_that_of_the_honeycomb_band(filling):
    """Four electron states per cell (two sites, two spins), a van Hove peak at +-t from the Dirac point."""
    solution = free_electrons(filling)
    width, mu = 0.05 * T, solution.chemical_potential_meV
    energy = np.linspace(-4.5 * T, 4.5 * T, 361)
    electrons, spinons = density_of_states(solution, energy, 80, width)
    g, weight = honeycomb.energy_quadrature(200)
    x = (energy[:, None, None] + mu - T * np.array([g, -g])) / width
    expected = 4 * (np.exp(-(x**2) / 2) @ weight).mean(axis=1) / (width * np.sqrt(2 * np.pi))
    assert electrons == pytest.approx(expected, abs=2e-3 * expected.max())
    assert np.trapezoid(electrons, energy) == pytest.approx(4, rel=1e-4)
    assert np.trapezoid(spinons, energy) == pytest.approx(4, rel=1e-4)
    inner = np.abs(energy + mu) < 2 * T
    assert abs(energy[inner][electrons[inner].argmax()] + mu) == pytest.approx(T, abs=0.05 * T)


def test_the_density_of_states_at_van_hove_filling_peaks_at_the_fermi_level():
    solution = free_electrons(0.75, points=12)
    energy = np.linspace(-0.5 * T, 0.5 * T, 101)
    electrons, _ = density_of_states(solution, energy, 80, 0.03 * T)
    assert energy[electrons.argmax()] == pytest.approx(0, abs=0.02 * T)


def test_the_dirac_points_have_no_gap_and_a_sublattice_offset_opens_half_of_it():
    """E = sqrt(t^2 g^2 + (Delta/2)^2): the smallest excitation at n = 1 is Delta/2, at the K points."""
    assert gap(free_electrons()).electrons < 1e-6 * T
    offset = free_electrons(conduction_layer__sublattice_offset_meV=0.3)
    assert gap(offset).electrons == pytest.approx(0.15 * T, rel=1e-6)
    k, distance, corners = path(offset, 60)
    found = bands(offset, k[[np.searchsorted(distance, corners[1] - 1e-9)]])
    assert np.abs(found.energy[found.conduction > 0.5]) == pytest.approx(np.full(8, 0.15 * T), rel=1e-6)
    assert gap(offset).total == min(gap(offset).electrons, gap(offset).spinons)


def test_electrons_with_a_fermi_line_have_no_gap():
    assert gap(free_electrons(0.9)).electrons < 1e-6 * T


@pytest.mark.parametrize("strong", [0, 1, 2])
@pytest.mark.parametrize("excess", [-0.1, 0.04, 0.1])
def test_the_spinons_are_gapped_once_one_bond_exceeds_the_sum_of_the_others(strong, excess):
    """|K_z| > |K_x| + |K_y|, gap (|K_z| - |K_x| - |K_y|)/2 for S = 1/2: Ann. Phys. 321, 2 (2006), "Anyons in an
    exactly solved model and beyond"."""
    kitaev = np.array([-1.0, -0.8, -0.8])
    kitaev[0] -= 0.6 + excess
    solution = solved("decoupled 0", kitaev=np.roll(kitaev, strong).tolist(), points=12, offset="c3")
    assert gap(solution).spinons / T == pytest.approx(max(excess, 0.0) / 2, abs=1e-4)


def test_a_band_structure_covers_the_spectrum_and_its_columns_have_one_row_per_state(heavy):
    found = band_structure(heavy, 40, 12)
    assert found.window_meV >= np.abs(found.bands.energy).max()
    columns = found.columns()
    assert {len(column) for column in columns.values()} == {found.bands.energy.size}
    assert found.gap_meV == pytest.approx(gap(heavy).total)
    assert json.loads(json.dumps(found.to_dict(), allow_nan=False))["dos_width_meV"] == found.width_meV
    narrow = band_structure(heavy, 40, 12, 200.0)
    assert narrow.energy_meV[[0, -1]].tolist() == [-200, 200]


def test_the_path_of_a_two_cell_lattice_folds_the_bands_of_the_primitive_one():
    """Every band energy of the 1x1 cell at a wave vector of the primitive zone is one of the doubled cell there."""
    one = free_electrons()
    two = solved("decoupled 0", kitaev=-1e-3, cell="1x2", points=4, offset="c3", temperature=0.002)
    energies = [bands(solution, path(solution, 30)[0]) for solution in (one, two)]
    for small, large in zip(energies[0].energy[:, :4], energies[1].energy, strict=True):
        assert np.abs(small[:, None] - large).min(axis=1).max() < 1e-3 * T


# ---- summary -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("start", ["decoupled 0", "hybridized 0"])
def test_a_summary_is_json_without_nan_and_agrees_with_the_solution(start):
    solution = solved(start, kondo=4.0, points=4)
    summary = summarize(solution)
    again = json.loads(json.dumps(summary, allow_nan=False))
    assert again["free_energy_meV_per_cell"] == solution.free_energy_meV_per_cell
    assert list(again["multipliers_meV"]) == list(solution.model.constraint_names)
    assert again["multipliers_meV"]["density"] == -again["chemical_potential_meV"]
    zero = again["zero_modes"]
    assert zero["count"] == zero["broken_generators"] + zero["gauge_directions"] + zero["unexplained"]
    assert again["chern_number"] is None
    assert again["chern_number_reason"]


def test_a_summary_of_what_did_not_converge_is_json_too():
    material = dimensionless(points=2, **VAN_HOVE)
    settings = Settings(mixing_steps=0, newton_steps=0)
    start = Start("noise", np.random.default_rng(1).standard_normal(build_model(material).n_channels))
    summary = summarize(solve(material, only_starts=[start], settings=settings))
    assert summary["status"] == "not-converged"
    assert summary["zero_modes"] is None
    json.dumps(summary, allow_nan=False)
