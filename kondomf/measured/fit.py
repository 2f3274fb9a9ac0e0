"""From an amplitude table to a first verdict: Lifshitz-Kosevich or hybridized?"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaincc

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.measured.amplitudes import AmplitudeData
from kondomf.measured.search import (
    Minimum,
    ModelFit,
    Parameter,
    Problem,
    excess,
    minima,
    standard_errors,
    upper_limit,
)
from kondomf.measured.shapes import Hybridized, LifshitzKosevich, Shape
from kondomf.oscillations.curves import UNITS
from kondomf.units import BOLTZMANN

Array = NDArray[np.float64]

UNDECIDED, STRONG = 4.0, 10.0
"""AICc differences below which both models stand, above which the worse one has hardly any support: common practice."""
MISFIT = 1e-3
"""Probability of a larger chi-squared below which a model is said not to describe the data."""
FEWEST_TEMPERATURES = 3


@dataclass(frozen=True)
class FitResult:
    """Both models fitted to the same amplitudes, and what that says.

    error: standard errors used, (N,), given or estimated (then `errors_given` is False); dingle: was T_D fitted?
    """

    data: AmplitudeData
    model: FourBandModel
    observable: str
    harmonic: int
    common_scale: bool
    dingle: bool
    errors_given: bool
    error: Array
    lifshitz_kosevich: ModelFit
    hybridized: ModelFit

    @property
    def fits(self) -> tuple[ModelFit, ModelFit]:
        return self.lifshitz_kosevich, self.hybridized

    @property
    def aicc_difference(self) -> float:
        """AICc of Lifshitz-Kosevich minus that of the hybridized model: positive if the latter is favoured."""
        return self.lifshitz_kosevich.aicc - self.hybridized.aicc

    @property
    def better(self) -> ModelFit:
        return min(self.fits, key=lambda fit: fit.aicc)

    def probability(self, fit: ModelFit) -> float | None:
        """Probability of a larger chi-squared if the model holds; None if no errors were given."""
        freedom = self.data.amplitude.size - fit.parameter_count
        return float(gammaincc(freedom / 2, fit.squares / 2)) if self.errors_given else None

    @property
    def favoured(self) -> str | None:
        """Name of the favoured model, None if undecided, if neither describes the data or if a search failed."""
        probability = self.probability(self.better)
        decided = abs(self.aicc_difference) >= UNDECIDED and all(fit.converged for fit in self.fits)
        return self.better.shape.name if decided and (probability is None or probability >= MISFIT) else None

    @property
    def verdict(self) -> str:
        """One sentence."""
        better, difference = self.better.shape.name, abs(self.aicc_difference)
        failed = [fit.shape.name for fit in self.fits if not fit.converged]
        if failed:
            return f"no verdict: the fit did not converge for: {', '.join(failed)}"
        probability = self.probability(self.better)
        if probability is not None and probability < MISFIT:
            return (
                f"no verdict: neither model describes the data within their errors (the {better} model comes closer; "
                f"probability {probability:.1g})"
            )
        if difference < UNDECIDED:
            text = f"undecided: both models describe these data about equally well (AICc differs by {difference:.2g})"
            return text if self.hybridized.resolved else f"{text}; they do not require a hybridization"
        word = "strongly favoured" if difference > STRONG else "favoured"
        names = ("Lifshitz-Kosevich with a free mass", "the hybridized model with the given E_D, v, u and ε_f")
        first, second = names if better == LifshitzKosevich.name else names[::-1]
        return f"{first} is {word} over {second} (AICc lower by {difference:.3g})"

    @property
    def notes(self) -> list[str]:
        """What the verdict rests on and what limits it."""
        observable = self.observable.replace("_", " ")
        notes = [
            f"the amplitudes are taken as those of the {observable}; transport depends differently on temperature and "
            "cannot be fitted yet",
            "b is a mean-field quantity, held constant although it changes with temperature and field; the "
            "other parameters of the four-band model are held at their values. No coupling is inferred here",
        ]
        if not self.errors_given:
            notes.append(
                f"no errors were given: one of {self.error[0]:.2g} for all amplitudes is estimated from the scatter "
                f"about the {self.better.shape.name} model, so that its own misfit cannot be seen"
            )
        if not self.dingle:
            notes.append("no Dingle temperature: it is only told apart from the factors by several fields of one scale")
        return [*notes, *self._warnings()]

    def _warnings(self) -> list[str]:
        notes = []
        hybridized, lk = self.hybridized, self.lifshitz_kosevich.parameters[0]
        if not hybridized.resolved and self.favoured != LifshitzKosevich.name:
            limit = hybridized.upper_limit
            where = "the data set no upper limit" if limit is None else f"it is at most {limit:.3g} meV"
            notes.append(f"b is not told apart from zero: {where} (chi-squared higher by 4)")
        if hybridized.alternatives:
            others = ", ".join(f"{value:.3g}" for value in hybridized.alternatives)
            notes.append(f"b = {others} meV describes the data nearly as well: measure further temperatures")
        mass = hybridized.shape.mass(0.0)
        if self.favoured == LifshitzKosevich.name and lk.error is not None and abs(lk.value - mass) > 3 * lk.error:
            notes.append(
                f"the fitted mass differs from the {mass:.4g} m_e of the four-band model: check its E_D and velocity "
                "against the measured frequency before dismissing a hybridization"
            )
        if self.data.ignored:
            notes.append(f"columns not read: {', '.join(self.data.ignored)}")
        return notes

    def rows(self) -> list[tuple[str, str]]:
        """Table for people: name and text."""
        data, model = self.data, self.model
        fields = ", ".join(f"{field:g}" for field in data.fields_T)
        low, high = data.temperature_K.min(), data.temperature_K.max()
        rows = [
            ("data", f"{data.amplitude.size} amplitudes at {fields} T, {low:g} to {high:g} K, from {data.source}"),
            ("observable", f"harmonic {self.harmonic} of the {self.observable.replace('_', ' ')}"),
            ("factors", "one for all fields" if self.common_scale else "a free one for each field"),
        ]
        for fit in self.fits:
            rows.append((fit.shape.name, ", ".join(fit.texts)))
            rows.append(("", self._quality(fit)))
        rows.append(
            (
                "held fixed",
                f"E_D = {model.dirac_energy_meV:.6g} meV, ε_f = {model.heavy_level_meV:.4g} meV, v = "
                f"{model.electron_velocity_m_per_s:.4g} m/s, u = {model.spinon_velocity_m_per_s:.3g} m/s "
                f"(mass {self.hybridized.shape.mass(0.0):.4g} m_e)",
            )
        )
        at = "" if model.temperature_meV is None else f" at {model.temperature_meV / BOLTZMANN:.3g} K"
        rows.append(("b of the model", f"{model.b_meV:.4g} meV{at}, not used"))
        rows.append(("AICc difference", f"{self.aicc_difference:.4g} (Lifshitz-Kosevich minus hybridized)"))
        return [*rows, ("verdict", self.verdict), *(("note", note) for note in self.notes)]

    def _quality(self, fit: ModelFit) -> str:
        freedom = self.data.amplitude.size - fit.parameter_count
        if self.errors_given:
            probability = self.probability(fit) or 0.0
            p = f"p = {probability:.2g}" if probability > 1e-99 else "p < 1e-99"
            return f"chi-squared {fit.squares:.4g} for {freedom} degrees of freedom ({p})"
        return f"residual {np.sqrt(fit.squares / freedom):.3g} per amplitude, {freedom} degrees of freedom"

    def to_dict(self) -> dict[str, Any]:
        """Numbers and words that JSON can hold."""
        return {
            "source": self.data.source,
            "model": self.model.to_dict(),
            "observable": self.observable,
            "harmonic": self.harmonic,
            "common_scale": self.common_scale,
            "errors_given": self.errors_given,
            "data_count": self.data.amplitude.size,
            "lifshitz_kosevich": self.lifshitz_kosevich.to_dict(),
            "hybridized": self.hybridized.to_dict(),
            "aicc_difference": self.aicc_difference,
            "favoured": self.favoured,
            "verdict": self.verdict,
            "notes": self.notes,
        }

    def columns(self) -> dict[str, Array]:
        """One row per data point: name of the column -> (N,); amplitudes in the unit of the data."""
        return {
            "field_T": self.data.field_T,
            "temperature_K": self.data.temperature_K,
            "amplitude": self.data.amplitude,
            "amplitude_error": self.error,
            "lifshitz_kosevich": self.lifshitz_kosevich.curve,
            "hybridized": self.hybridized.curve,
        }


def fit_amplitudes(
    data: AmplitudeData,
    model: FourBandModel,
    *,
    observable: str = "magnetization",
    harmonic: int = 1,
    common_scale: bool = False,
) -> FitResult:
    """Fit a Lifshitz-Kosevich mass and, in the four-band model, a hybridization to the same amplitudes, and compare.

    model: gives E_D, v, epsilon_f and u, held fixed; its b is not used. observable: magnetization or grand_potential.
    harmonic: number p of the harmonic measured. common_scale: all fields share one calibration, so that the dependence
    on field counts and, from two fields on, a Dingle temperature is fitted in both models; else each field has a free
    factor. Without errors in `data` one error, equal for all amplitudes, is estimated from the better model.

    AICc = chi^2 + 2 k + 2 k (k + 1) / (N - k - 1) for k parameters, N ln(S / N) for chi^2 and k + 1 for k where the
    error is estimated.
    Source: Biometrika 76, 297 (1989), "Regression and time series model selection in small samples".

    Raises InputError: another observable, harmonic below 1, E_D = 0, fewer than 3 temperatures, all amplitudes zero,
    too few data for the number of parameters.
    """
    dingle = common_scale and data.fields_T.size > 1
    _check_arguments(data, model, observable, harmonic)
    given = data.amplitude_error is not None
    weights = np.ones(data.amplitude.size) if data.amplitude_error is None else 1 / data.amplitude_error
    shapes: tuple[Shape, Shape] = (
        LifshitzKosevich(observable, harmonic, dingle),
        Hybridized(observable, harmonic, dingle, model),
    )
    problems = [Problem(shape, data, weights, common_scale) for shape in shapes]
    _check_count(data, problems[0].parameter_count, given)
    found = [minima(problem) for problem in problems]
    variance = 1.0
    if not given:
        # A fit of exact amplitudes leaves rounding errors, which set the floor.
        floor = np.finfo(float).eps * float((data.amplitude**2).sum())
        freedom = data.amplitude.size - problems[0].parameter_count
        variance = max(min(each[0].squares for each in found), floor) / freedom
    fits = [_model_fit(problem, each, variance, given) for problem, each in zip(problems, found, strict=True)]
    error = np.full(weights.shape, np.sqrt(variance)) if data.amplitude_error is None else data.amplitude_error
    return FitResult(data, model, observable, harmonic, common_scale, dingle, given, error, *fits)


def _model_fit(problem: Problem, found: list[Minimum], variance: float, given: bool) -> ModelFit:
    best, data = found[0], problem.data
    raw = problem.raw(best.x)
    scale = problem.scales(raw)
    values, errors = problem.values(best.x), standard_errors(problem, best.x, variance)
    described = zip(problem.shape.parameters, values, errors, strict=True)
    parameters = tuple(Parameter(name, float(value), error, unit) for (name, unit), value, error in described)
    near = [other for other in found[1:] if other.squares < best.squares + 4 * variance]
    resolved = best.x[0] > problem.grid[0] and excess(problem, best, problem.grid[0], 4 * variance) > 0
    return ModelFit(
        shape=problem.shape,
        fields_T=data.fields_T,
        parameters=parameters,
        alternatives=tuple(float(problem.values(other.x)[0]) for other in near),
        scales=np.broadcast_to(scale, data.fields_T.shape).copy(),
        curve=scale[problem.group] * raw,
        squares=best.squares,
        parameter_count=problem.parameter_count,
        aicc=_aicc(best.squares, data, problem.parameter_count, given),
        converged=best.converged,
        resolved=bool(resolved),
        upper_limit=None if resolved else upper_limit(problem, best, 4 * variance),
    )


def _aicc(squares: float, data: AmplitudeData, parameter_count: int, given: bool) -> float:
    count = data.amplitude.size
    k = parameter_count if given else parameter_count + 1
    floor = np.finfo(float).eps * float((data.amplitude**2).sum())
    misfit = squares if given else count * float(np.log(max(squares, floor) / count))
    return misfit + 2 * k + 2 * k * (k + 1) / (count - k - 1)


def _check_arguments(data: AmplitudeData, model: FourBandModel, observable: str, harmonic: int) -> None:
    if observable not in UNITS:
        raise InputError(f"observable = {observable!r}: give one of {', '.join(UNITS)}; transport cannot be fitted yet")
    if harmonic < 1:
        raise InputError(f"harmonic = {harmonic}: give 1 for the fundamental or a larger whole number")
    if model.dirac_energy_meV == 0:
        raise InputError("the model has its Dirac point at the Fermi level and does not oscillate: give a doped model")
    temperatures = np.unique(data.temperature_K).size
    if temperatures < FEWEST_TEMPERATURES:
        raise InputError(f"{data.source}: {temperatures} different temperatures; give at least {FEWEST_TEMPERATURES}")
    if not data.amplitude.any():
        raise InputError(f"{data.source}: all amplitudes are zero; give a table with a signal")


def _check_count(data: AmplitudeData, parameter_count: int, given: bool) -> None:
    """Two more data than parameters, the estimated error included, keep the AICc finite."""
    needed = parameter_count + (2 if given else 3)
    if data.amplitude.size < needed:
        raise InputError(
            f"{data.source}: {data.amplitude.size} amplitudes for {parameter_count} parameters; give at least {needed}"
            ", or round nearly equal fields to one value, or let all fields share one scale"
        )
