"""Laws of the amplitude fits: what was put in comes out, with honest errors and cautious verdicts."""

import json
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.figure import Figure
from scipy.optimize import brentq

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.measured import AmplitudeData, Hybridized, LifshitzKosevich, fit_amplitudes, read_amplitudes
from kondomf.measured.search import Problem, excess, minima, standard_errors
from kondomf.oscillations import amplitude_table, unhybridized_frequency_T
from kondomf.report.fit import draw_fit

MODEL = FourBandModel(
    b_meV=0.3, dirac_energy_meV=600.0, hbar_v_meV_angstrom=6582.0, heavy_level_meV=0.0, cell_area_angstrom2=24.0
)
"""Invented electrons of mass 0.1055 m_e and frequency 273 T."""
TEMPERATURES = (1.0, 2.0, 3.0, 4.0, 6.0, 9.0, 13.0, 20.0)
NOISE = 0.01
"""Standard error over the largest amplitude."""


def points(fields=(10.0, 15.0), temperatures=TEMPERATURES):
    return tuple(array.ravel() for array in np.meshgrid(fields, temperatures, indexing="ij"))


def synthetic(shape, values, seed, fields=(10.0, 15.0), temperatures=TEMPERATURES, noise=NOISE, errors=True):
    """Amplitudes of a model, the largest 3, with normal noise of the same standard error everywhere."""
    field, temperature = points(fields, temperatures)
    exact = shape.amplitude(np.array(values), field, temperature)
    error = np.full(field.size, 3 * noise)
    amplitude = np.abs(3 * exact / exact.max() + np.random.default_rng(seed).normal(0, error))
    return AmplitudeData(
        field_T=field, temperature_K=temperature, amplitude=amplitude, amplitude_error=error if errors else None
    )


def lifshitz_kosevich(dingle=False, observable="magnetization", harmonic=1):
    return LifshitzKosevich(observable, harmonic, dingle)


def hybridized(dingle=False, observable="magnetization", harmonic=1):
    return Hybridized(observable, harmonic, dingle, MODEL)


# ---- reading -----------------------------------------------------------------------------------------------------

TABLE = """# torque of an invented sample
amplitude, temperature_K, field_T

3.0, 1.0, 10
2.5, 4.0, 10
# a comment between rows
1.5, 8.0, 10
0.0, 20.0, 10
"""


@pytest.fixture
def write(tmp_path):
    def write(text):
        path = tmp_path / "amplitudes.csv"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


def test_columns_are_found_by_name_and_comments_and_blank_lines_are_skipped(write):
    data = read_amplitudes(write(TABLE))
    assert data.field_T.tolist() == [10] * 4
    assert data.temperature_K.tolist() == [1, 4, 8, 20]
    assert data.amplitude.tolist() == [3, 2.5, 1.5, 0]
    assert (data.amplitude_error, data.ignored) == (None, ())


def test_errors_are_read_and_columns_that_are_not_are_named(write):
    """Byte-order mark, quoted header and Windows line ends, as spreadsheets write them."""
    text = '\ufeff"field_T","temperature_K","amplitude","amplitude_error","run"\r\n' + "10,1.5,2,0.1,first\r\n" * 4
    data = read_amplitudes(write(text))
    assert data.amplitude_error.tolist() == [0.1] * 4
    assert data.ignored == ("run",)


@pytest.mark.parametrize(
    ("old", "new", "parts"),
    [
        (
            "temperature_K",
            "temperature",
            ["line 2", "no column temperature_K", "among amplitude, temperature, field_T"],
        ),
        ("temperature_K", "field_T", ["line 2", "no column temperature_K"]),
        ("temperature_K, field_T", "temperature_K, field_T, field_T", ["line 2", "field_T appears 2 times"]),
        ("2.5, 4.0", "2.5, four", ["line 5", "temperature_K = 'four' is no number", "kelvin"]),
        ("2.5, 4.0", "2.5,", ["line 5", "temperature_K = ''"]),
        ("2.5, 4.0", "2.5, nan", ["line 5", "temperature_K = nan", "above zero"]),
        ("2.5, 4.0", "2.5, -4.0", ["line 5", "temperature_K = -4", "above zero"]),
        ("2.5, 4.0", "2.5, 0", ["line 5", "temperature_K = 0", "above zero"]),
        ("8.0, 10", "8.0, 0", ["line 7", "field_T = 0", "above zero"]),
        ("8.0, 10", "8.0, -10", ["line 7", "field_T = -10", "tesla"]),
        ("8.0, 10", "8.0, inf", ["line 7", "field_T = inf"]),
        ("1.5, 8.0", "-1.5, 8.0", ["line 7", "amplitude = -1.5", "zero or above"]),
        ("1.5, 8.0", "1,5, 8.0", ["line 7", "4 cells for 3 columns", "decimals with a point"]),
        ("1.5, 8.0, 10\n", "", ["3 rows", "at least 4"]),
        (TABLE, "# nothing\n\n", ["no data", "field_T,temperature_K,amplitude"]),
    ],
)
def test_a_bad_table_is_refused_with_place_value_and_remedy(write, old, new, parts):
    assert old in TABLE
    path = write(TABLE.replace(old, new))
    with pytest.raises(InputError) as caught:
        read_amplitudes(path)
    for part in (str(path), *parts):
        assert part in str(caught.value)


@pytest.mark.parametrize("error", ["-0.1", "0"])
def test_an_error_that_is_not_positive_is_refused(write, error):
    text = "field_T,temperature_K,amplitude,amplitude_error\n" + "10,1,2,0.1\n" * 3 + f"10,1,2,{error}\n"
    with pytest.raises(InputError, match=r"line 5: amplitude_error = .* above zero"):
        read_amplitudes(write(text))


def test_a_file_that_cannot_be_read_is_refused_with_its_name(write, tmp_path):
    with pytest.raises(InputError, match=r"nowhere\.csv does not exist"):
        read_amplitudes(tmp_path / "nowhere.csv")
    with pytest.raises(InputError, match="cannot read"):
        read_amplitudes(tmp_path)
    with pytest.raises(InputError, match="not UTF-8"):
        read_amplitudes(write(TABLE.replace("torque", "Drehmoment für").encode("latin-1")))


def test_data_given_by_hand_are_checked_too():
    good = {"field_T": [10.0] * 4, "temperature_K": [1.0, 2, 3, 4], "amplitude": [4.0, 3, 2, 1]}
    assert AmplitudeData(**good).fields_T.tolist() == [10]
    with pytest.raises(InputError, match="row 2: field_T = -1"):
        AmplitudeData(**{**good, "field_T": [10.0, -1, 10, 10]})
    with pytest.raises(InputError, match="equal length"):
        AmplitudeData(**{**good, "amplitude": [1.0, 2]})


# ---- shapes and search -------------------------------------------------------------------------------------------


def test_mass_of_a_worked_textbook_amplitude():
    """R_T = 1/2 where X = 14.69 m T / B solves X / sinh X = 1/2; Magnetic Oscillations in Metals (1984), chapter 2."""
    half = brentq(lambda x: x / np.sinh(x) - 0.5, 1, 5)
    mass, field = 0.08, 12.0
    kelvin = half * field / (14.69 * mass)
    found = lifshitz_kosevich().amplitude(np.array([mass]), np.array([field]), np.array([kelvin]))
    assert found == pytest.approx(0.5, rel=1e-3)
    temperature = kelvin * np.array([0.2, 0.5, 1, 1.5, 2, 3])
    x = 14.69 * mass * temperature / field
    data = AmplitudeData(field_T=np.full(6, field), temperature_K=temperature, amplitude=7 * x / np.sinh(x))
    parameter = fit_amplitudes(data, MODEL).lifshitz_kosevich.parameters[0]
    assert parameter.value == pytest.approx(mass, rel=3e-4)


@pytest.mark.parametrize("observable", ["magnetization", "grand_potential"])
@pytest.mark.parametrize("harmonic", [1, 2])
def test_without_hybridization_both_shapes_are_the_same_function(observable, harmonic):
    """Up to a factor and to corrections of order k_B T / E_D and (B / F)^2, with a Dingle temperature."""
    field, temperature = points()
    mass = hybridized().mass(0.0)
    textbook = lifshitz_kosevich(True, observable, harmonic).amplitude(np.array([mass, 0.8]), field, temperature)
    exact = hybridized(True, observable, harmonic).amplitude(np.array([1e-6, 0.8]), field, temperature)
    ratio = exact / textbook
    assert ratio / ratio.mean() == pytest.approx(np.ones(field.size), abs=3e-4)


def test_hybridized_shape_is_the_amplitude_table_of_the_model_with_that_b():
    field, temperature = points()
    table = amplitude_table(replace(MODEL, b_meV=0.7), np.unique(field), np.unique(temperature))
    found = hybridized().amplitude(np.array([0.7]), field, temperature)
    assert found == pytest.approx(table.amplitude.ravel(), rel=1e-12)


@pytest.mark.parametrize("common_scale", [False, True])
def test_eliminated_factors_are_those_of_linear_least_squares(common_scale):
    data = synthetic(lifshitz_kosevich(), [0.1], seed=3)
    problem = Problem(lifshitz_kosevich(), data, 1 / (1 + data.temperature_K), common_scale)
    raw = problem.raw(np.log([0.13]))
    matrix = np.where(problem.group[:, None] == np.arange(problem.group.max() + 1), raw[:, None], 0)
    solved, squares, *_ = np.linalg.lstsq(problem.weights[:, None] * matrix, problem.weights * data.amplitude)
    assert problem.scales(raw) == pytest.approx(solved, rel=1e-12)
    assert (problem.residual(np.log([0.13])) ** 2).sum() == pytest.approx(squares[0], rel=1e-12)


@pytest.mark.parametrize(("shape", "values"), [(lifshitz_kosevich(True), (0.12, 0.7)), (hybridized(True), (0.9, 0.7))])
def test_no_point_of_a_grid_lies_below_the_fit(shape, values):
    data = synthetic(shape, values, seed=5)
    problem = Problem(shape, data, 1 / data.amplitude_error, True)
    best = minima(problem)[0]
    assert best.converged
    for first in problem.grid[::3]:
        for damping in (0.0, 0.5, 2.0):
            assert best.squares <= (problem.residual(np.array([first, damping])) ** 2).sum()


def test_standard_errors_are_the_scatter_over_many_noises():
    """Pulls (fit - truth) / error over 60 noises have mean square 1 +- 0.18; three of these are allowed."""
    shape, truth = lifshitz_kosevich(dingle=True), np.array([0.12, 0.9])
    pulls = []
    for seed in range(60):
        data = synthetic(shape, truth, seed)
        problem = Problem(shape, data, 1 / data.amplitude_error, True)
        best = minima(problem)[0]
        pulls.append((problem.values(best.x) - truth) / standard_errors(problem, best.x, 1.0))
    assert (np.array(pulls) ** 2).mean(axis=0) == pytest.approx([1, 1], abs=0.55)


# ---- fits and verdicts -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("b", "common_scale", "seed"), [(0.5, False, 1), (1.2, False, 2), (0.5, True, 3), (1.2, True, 4)]
)
def test_hybridization_put_in_comes_out_and_is_favoured(b, common_scale, seed):
    values = [b, 0.7] if common_scale else [b]
    result = fit_amplitudes(synthetic(hybridized(common_scale), values, seed), MODEL, common_scale=common_scale)
    for parameter, value in zip(result.hybridized.parameters, values, strict=True):
        assert abs(parameter.value - value) < 3 * parameter.error < 0.9 * value
    assert result.hybridized.resolved
    assert result.favoured == "hybridized"
    assert result.aicc_difference > 4
    assert result.verdict.startswith("the hybridized model with the given E_D, v, u and ε_f is")


@pytest.mark.parametrize(
    ("observable", "harmonic"), [("magnetization", 1), ("magnetization", 2), ("grand_potential", 1)]
)
@pytest.mark.parametrize("common_scale", [False, True])
def test_mass_put_in_comes_out_and_lifshitz_kosevich_is_favoured(observable, harmonic, common_scale):
    """The mass is not that of the four-band model, which is said."""
    shape = lifshitz_kosevich(common_scale, observable, harmonic)
    values = [0.14, 0.7] if common_scale else [0.14]
    data = synthetic(shape, values, seed=4)
    result = fit_amplitudes(data, MODEL, observable=observable, harmonic=harmonic, common_scale=common_scale)
    for parameter, value in zip(result.lifshitz_kosevich.parameters, values, strict=True):
        assert abs(parameter.value - value) < 3 * parameter.error < 0.9 * value
    assert result.favoured == "Lifshitz-Kosevich"
    assert "strongly favoured" in result.verdict
    assert any("differs from the 0.1055 m_e" in note for note in result.notes)


def test_electrons_without_hybridization_leave_the_models_undecided_with_an_upper_limit():
    """At b = 0 the hybridized model is Lifshitz-Kosevich; at the limit chi-squared is higher by 4."""
    data = synthetic(lifshitz_kosevich(), [hybridized().mass(0.0)], seed=6)
    result = fit_amplitudes(data, MODEL)
    assert result.favoured is None
    assert result.verdict.startswith("undecided")
    assert "do not require a hybridization" in result.verdict
    assert not result.hybridized.resolved
    problem = Problem(hybridized(), data, 1 / data.amplitude_error, False)
    limit = result.hybridized.upper_limit
    assert 0.02 < limit < 0.5
    assert (problem.residual(np.log([limit])) ** 2).sum() == pytest.approx(result.hybridized.squares + 4, abs=0.02)


def test_few_noisy_data_of_a_hybridized_sample_are_undecided():
    data = synthetic(hybridized(), [0.4], seed=7, fields=(15.0,), temperatures=(1.0, 3.0, 6.0, 9.0, 14.0), noise=0.05)
    result = fit_amplitudes(data, MODEL)
    assert (result.favoured, result.verdict[:9]) == (None, "undecided")


def test_data_that_neither_model_describes_get_no_verdict():
    field, temperature = points()
    amplitude = 2 + np.cos(temperature)
    data = AmplitudeData(
        field_T=field, temperature_K=temperature, amplitude=amplitude, amplitude_error=np.full(field.size, 0.02)
    )
    result = fit_amplitudes(data, MODEL)
    assert result.favoured is None
    assert result.verdict.startswith("no verdict: neither model")


def test_a_flat_amplitude_at_low_temperature_allows_a_small_and_a_large_hybridization():
    """For k_B T well below b the amplitude saturates; below its thermal damping it does so without b too."""
    low = (0.05, 0.1, 0.15, 0.2)
    data = synthetic(lifshitz_kosevich(), [0.1055], seed=8, fields=(15.0,), temperatures=low, noise=0.02)
    result = fit_amplitudes(data, MODEL)
    assert max(result.hybridized.alternatives) > 1
    assert (result.hybridized.resolved, result.hybridized.upper_limit) == (False, None)
    assert any("nearly as well" in note for note in result.notes)
    assert any("no upper limit" in note for note in result.notes)


def test_a_mass_that_vanishes_takes_its_dingle_temperature_along_and_the_fit_still_converges():
    """An amplitude that rises with temperature is beyond Lifshitz-Kosevich, whose best mass is zero."""
    data = synthetic(hybridized(True), [4.0, 0.5], seed=20)
    result = fit_amplitudes(data, MODEL, common_scale=True)
    assert result.lifshitz_kosevich.converged
    assert result.lifshitz_kosevich.texts == ["mass not told apart from zero", "Dingle temperature undetermined"]
    assert result.favoured == "hybridized"
    assert abs(result.hybridized.parameters[0].value - 4.0) < 3 * result.hybridized.parameters[0].error


def test_without_errors_one_is_estimated_from_the_better_model_and_said():
    truth = 3 * NOISE
    result = fit_amplitudes(synthetic(hybridized(), [0.8], seed=9, errors=False), MODEL)
    assert result.error == pytest.approx(np.full(16, truth), rel=0.35)
    assert result.favoured == "hybridized"
    assert abs(result.hybridized.parameters[0].value - 0.8) < 3 * result.hybridized.parameters[0].error
    assert any("no errors were given" in note for note in result.notes)
    with_errors = fit_amplitudes(synthetic(hybridized(), [0.8], seed=9), MODEL)
    assert not any("no errors were given" in note for note in with_errors.notes)
    scatter = result.error[0] / truth
    assert result.hybridized.parameters[0].error == pytest.approx(
        scatter * with_errors.hybridized.parameters[0].error, rel=1e-3
    )


def test_exact_amplitudes_give_back_the_hybridization_to_rounding():
    result = fit_amplitudes(synthetic(hybridized(), [0.6], seed=0, noise=0.0, errors=False), MODEL)
    assert result.hybridized.parameters[0].value == pytest.approx(0.6, rel=1e-6)
    assert np.isfinite(result.aicc_difference)
    assert result.favoured == "hybridized"


def test_unit_of_the_amplitudes_and_order_of_the_rows_do_not_matter():
    data = synthetic(hybridized(), [0.6], seed=10, temperatures=(2.0, 4.0, 7.0, 12.0))
    order = np.random.default_rng(11).permutation(data.amplitude.size)
    shuffled = AmplitudeData(
        field_T=data.field_T[order],
        temperature_K=data.temperature_K[order],
        amplitude=1e-9 * data.amplitude[order],
        amplitude_error=1e-9 * data.amplitude_error[order],
    )
    one, other = fit_amplitudes(data, MODEL), fit_amplitudes(shuffled, MODEL)
    assert other.aicc_difference == pytest.approx(one.aicc_difference, rel=1e-6)
    for mine, theirs in zip(one.fits, other.fits, strict=True):
        assert theirs.parameters[0].value == pytest.approx(mine.parameters[0].value, rel=1e-5)
        assert theirs.curve == pytest.approx(1e-9 * mine.curve[order], rel=1e-5)


def test_b_of_the_model_is_not_used():
    data = synthetic(hybridized(), [0.6], seed=12, temperatures=(2.0, 5.0, 10.0))
    one, other = (fit_amplitudes(data, replace(MODEL, b_meV=b)) for b in (0.0, 5.0))
    assert one.hybridized.parameters == other.hybridized.parameters


def test_aicc_is_chi_squared_plus_the_penalty(result):
    """Equal numbers of parameters cancel in the difference, so that it is the difference of chi-squared."""
    lk, other = result.fits
    assert (lk.parameter_count, other.parameter_count) == (3, 3)
    assert result.aicc_difference == pytest.approx(lk.squares - other.squares, rel=1e-10)
    assert lk.aicc == pytest.approx(lk.squares + 6 + 24 / (16 - 4), rel=1e-12)


def test_a_dingle_temperature_at_its_bound_has_no_error_and_the_mass_still_has_one():
    data = synthetic(lifshitz_kosevich(), [0.12], seed=14)
    data = replace(data, amplitude=data.amplitude * np.where(data.field_T > 12, 0.8, 1.0))
    problem = Problem(lifshitz_kosevich(True), data, np.ones(16), True)
    best = minima(problem)[0]
    assert best.x[1] < 1e-4
    mass_error, dingle_error = standard_errors(problem, best.x, 1.0)
    assert mass_error > 0
    assert dingle_error is None


def test_profile_of_b_falls_and_rises_through_the_best_fit():
    data = synthetic(hybridized(True), [0.8, 0.7], seed=15)
    problem = Problem(hybridized(True), data, 1 / data.amplitude_error, True)
    best = minima(problem)[0]
    assert excess(problem, best, best.x[0], 0.0) == pytest.approx(0, abs=1e-5)
    error = standard_errors(problem, best.x, 1.0)[0]
    for sign in (-1, 1):
        shifted = np.log(np.exp(best.x[0]) + sign * error)
        assert excess(problem, best, shifted, 0.0) == pytest.approx(1, abs=0.1)


@pytest.mark.parametrize(
    ("change", "arguments", "message"),
    [
        ({}, {"observable": "conductivity"}, "'conductivity'.*magnetization.*transport cannot be fitted yet"),
        ({}, {"harmonic": 0}, "harmonic = 0"),
        ({"amplitude": np.zeros(16)}, {}, "all amplitudes are zero"),
        ({"temperature_K": np.tile([1.0, 2.0], 8)}, {}, "2 different temperatures; give at least 3"),
        ({"field_T": np.linspace(10, 11, 16)}, {}, "16 amplitudes for 17 parameters.*round nearly equal fields"),
    ],
)
def test_fits_that_make_no_sense_are_refused(change, arguments, message):
    data = replace(synthetic(lifshitz_kosevich(), [0.1], seed=16), **change)
    with pytest.raises(InputError, match=message):
        fit_amplitudes(data, MODEL, **arguments)


def test_four_amplitudes_suffice_with_errors_and_are_too_few_without():
    data = synthetic(lifshitz_kosevich(), [0.1], seed=17, fields=(10.0,), temperatures=(1.0, 4.0, 8.0, 12.0))
    assert fit_amplitudes(data, MODEL).favoured is None
    with pytest.raises(InputError, match="4 amplitudes for 2 parameters; give at least 5"):
        fit_amplitudes(replace(data, amplitude_error=None), MODEL)


def test_an_undoped_model_is_refused():
    undoped = replace(MODEL, dirac_energy_meV=0.0)
    assert unhybridized_frequency_T(undoped) == 0
    with pytest.raises(InputError, match="Dirac point at the Fermi level"):
        fit_amplitudes(synthetic(lifshitz_kosevich(), [0.1], seed=18), undoped)


# ---- what a person sees ------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def result():
    return fit_amplitudes(replace(synthetic(hybridized(), [0.8], seed=19), ignored=("run",)), MODEL)


def test_table_states_observable_parameters_verdict_and_limits(result):
    rows = dict(result.rows())
    assert rows["observable"] == "harmonic 1 of the magnetization"
    assert rows["hybridized"] == str(result.hybridized.parameters[0])
    assert rows["verdict"] == result.verdict
    notes = " ".join(text for name, text in result.rows() if name == "note")
    for part in ("transport", "mean-field quantity", "No coupling is inferred", "columns not read: run"):
        assert part in notes


def test_result_survives_json_and_its_columns_are_the_data_beside_both_curves(result):
    document = result.to_dict()
    again = json.loads(json.dumps(document))
    assert again["lifshitz_kosevich"] == document["lifshitz_kosevich"]
    assert (again["verdict"], again["favoured"]) == (result.verdict, "hybridized")
    assert document["hybridized"]["parameters"]["hybridization b"]["unit"] == "meV"
    columns = result.columns()
    assert {len(column) for column in columns.values()} == {16}
    chi_squared = (((columns["amplitude"] - columns["hybridized"]) / columns["amplitude_error"]) ** 2).sum()
    assert chi_squared == pytest.approx(result.hybridized.squares, rel=1e-10)
    rows = result.data.field_T == 15
    curve = result.hybridized.amplitude(15.0, result.data.temperature_K[rows])
    assert curve == pytest.approx(columns["hybridized"][rows], rel=1e-12)


def test_figure_has_a_panel_for_each_field_with_points_error_bars_and_two_curves(result, tmp_path):
    figure = Figure(layout="constrained")
    draw_fit(figure, result)
    figure.savefig(tmp_path / "fit.png")
    assert [axes.get_title("right") for axes in figure.axes] == ["10 T", "15 T"]
    for axes in figure.axes:
        assert axes.get_xlabel() == "temperature (K)"
        assert len(axes.lines) == 3
        assert len(axes.containers) == 1
    assert "magnetization" in figure.get_supylabel()
