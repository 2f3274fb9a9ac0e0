"""Weighted least squares of one model of the amplitudes, its factors eliminated.

The factors s_g enter linearly and follow from the shape a(x): s_g = sum w^2 y a / sum w^2 a^2 over the points of the
group g. What is left, w (y - s_g(x) a(x)), is minimised over the few parameters x from every local minimum of a grid.

Source: SIAM J. Numer. Anal. 10, 413 (1973), "The differentiation of pseudo-inverses and nonlinear least squares
problems whose variables separate".
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.measured.amplitudes import AmplitudeData
from kondomf.measured.shapes import Shape
from kondomf.oscillations import thermal_argument

Array = NDArray[np.float64]

_STEP = 1e-4
"""Step of finite differences in the coordinates, which are of order one."""
_SINGULAR = 1e10
"""Condition number of the Jacobian above which nothing is determined."""
MOST_MINIMA = 5
"""Local minima of the grid from which the search goes on."""
TRIAL_DAMPING = (0.0, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0)
"""Exponents p X(T_D) at the median field from which a Dingle temperature is searched."""


@dataclass(frozen=True)
class Parameter:
    """A fitted parameter; error: its standard error, None if the data leave it undetermined or it is at its bound."""

    name: str
    value: float
    error: float | None
    unit: str

    def __str__(self) -> str:
        if self.error is None:
            return f"{self.name} {self.value:.4g} {self.unit} (error undetermined)"
        return f"{self.name} {self.value:.4g} ± {self.error:.2g} {self.unit}"


@dataclass(frozen=True)
class Problem:
    """A shape and the data it is fitted to; weights: 1/error, or ones, (N,); common_scale: one factor for all fields.

    Coordinates x of the search: logarithm of the first parameter, and the exponent p X(T_D) at the median field, which
    stays finite where the mass goes to zero.
    """

    shape: Shape
    data: AmplitudeData
    weights: Array
    common_scale: bool

    @property
    def parameter_count(self) -> int:
        return len(self.shape.parameters) + (1 if self.common_scale else self.data.fields_T.size)

    @property
    def group(self) -> NDArray[np.intp]:
        """Index of each point's factor, (N,)."""
        return np.zeros(self.data.field_T.size, dtype=np.intp) if self.common_scale else self.data.field_index

    @property
    def grid(self) -> Array:
        """First coordinates over which the search extends, ascending."""
        return np.log(self.shape.grid(self.data.field_T, self.data.temperature_K))

    def values(self, x: Array) -> Array:
        """First parameter and, if fitted, T_D."""
        first = np.exp(x[0])
        rate = self.shape.harmonic * thermal_argument(1.0, np.median(self.data.field_T), self.shape.mass(first))
        return np.array([first, *(x[1:] / rate)])

    def raw(self, x: Array) -> Array:
        return self.shape.amplitude(self.values(x), self.data.field_T, self.data.temperature_K)

    def scales(self, raw: Array) -> Array:
        """Best factor of each group; zero where the shape vanishes."""
        largest = raw.max() or 1.0
        weighted, group = self.weights * raw / largest, self.group
        norm = np.bincount(group, weighted**2)
        overlap = np.bincount(group, weighted * self.weights * self.data.amplitude)
        return np.divide(overlap, norm, out=np.zeros_like(norm), where=norm > 0) / largest

    def misfit(self, raw: Array) -> Array:
        """Weighted residual (N,) of a shape at its best factors."""
        return self.weights * (self.data.amplitude - self.scales(raw)[self.group] * raw)

    def residual(self, x: Array) -> Array:
        return self.misfit(self.raw(x))


@dataclass(frozen=True)
class Minimum:
    """Where a search ended: coordinates x, weighted sum of squares, and whether the steps converged."""

    x: Array
    squares: float
    converged: bool


@dataclass(frozen=True)
class ModelFit:
    """Best fit of one model.

    alternatives: first parameter of other minima that the data do not exclude (chi-squared higher by less than 4);
    scales: factor for each distinct field, (N_B,); curve: fitted amplitudes at the data, (N,); squares: chi-squared, or
    the residual sum of squares in the unit of the data if no errors are known; parameter_count: factors included; aicc:
    corrected Akaike criterion; resolved: would the first parameter raise chi-squared by more than 4 if it vanished?
    upper_limit: where it does so from above, None if resolved or if the data set no limit.
    """

    shape: Shape
    fields_T: Array
    parameters: tuple[Parameter, ...]
    alternatives: tuple[float, ...]
    scales: Array
    curve: Array
    squares: float
    parameter_count: int
    aicc: float
    converged: bool
    resolved: bool
    upper_limit: float | None

    @property
    def texts(self) -> list[str]:
        """The parameters in words."""
        if self.resolved:
            return [str(parameter) for parameter in self.parameters]
        rest = [f"{p.name} undetermined" if self.shape.own_mass else str(p) for p in self.parameters[1:]]
        return [f"{self.parameters[0].name} not told apart from zero", *rest]

    def amplitude(self, field_T: float, temperature_K: Array) -> Array:
        """Curve at one of the fitted fields and temperatures (N,), in the unit of the data."""
        values = np.array([parameter.value for parameter in self.parameters])
        raw = self.shape.amplitude(values, np.full(temperature_K.shape, field_T), temperature_K)
        return np.asarray(self.scales[np.searchsorted(self.fields_T, field_T)] * raw)

    def to_dict(self) -> dict[str, Any]:
        return {
            "parameters": {p.name: {"value": p.value, "error": p.error, "unit": p.unit} for p in self.parameters},
            "resolved": self.resolved,
            "upper_limit": self.upper_limit,
            "alternatives": list(self.alternatives),
            "scales": dict(zip(map(str, self.fields_T.tolist()), self.scales.tolist(), strict=True)),
            "sum_of_squares": self.squares,
            "parameter_count": self.parameter_count,
            "aicc": self.aicc,
            "converged": self.converged,
        }


def minima(problem: Problem) -> list[Minimum]:
    """Distinct local minima, the lowest first."""
    from scipy.optimize import least_squares

    found: list[Minimum] = []
    grid, margin = problem.grid, np.log(10)
    for start in _starts(problem, grid):
        bounds = ([grid[0] - margin, 0.0][: start.size], [grid[-1] + margin, np.inf][: start.size])
        fit = least_squares(problem.residual, start, bounds=bounds, xtol=1e-10, ftol=1e-10)
        if all(np.abs(fit.x - other.x).max() > 1e-2 for other in found):
            found.append(Minimum(fit.x, 2 * float(fit.cost), fit.status > 0))
    return sorted(found, key=lambda minimum: minimum.squares)


def _starts(problem: Problem, grid: Array) -> list[Array]:
    """Coordinates at the local minima of the grid, each at the best of the trial T_D; the lowest first.

    The shape is computed without a Dingle temperature and damped by R_D, which is exact for Lifshitz-Kosevich and the
    leading order for the hybridized model.
    """
    field, count = problem.data.field_T, len(problem.shape.parameters)
    dampings = np.array(TRIAL_DAMPING if problem.shape.dingle else (0.0,))
    factors = np.exp(-dampings[:, None] * np.median(field) / field)
    squares, starts = [], []
    for first in grid:
        raw = problem.raw(np.array([first, 0.0])[:count])
        trials = [float((problem.misfit(raw * factor) ** 2).sum()) for factor in factors]
        squares.append(min(trials))
        starts.append(np.array([first, dampings[np.argmin(trials)]])[:count])
    height = np.array([np.inf, *squares, np.inf])
    lowest = np.flatnonzero((height[1:-1] <= height[:-2]) & (height[1:-1] <= height[2:]))
    return [starts[i] for i in sorted(lowest, key=lambda i: squares[i])[:MOST_MINIMA]]


def standard_errors(problem: Problem, x: Array, variance: float) -> list[float | None]:
    """Standard errors of the parameters from (J^T J)^-1, J the Jacobian in coordinates and factors.

    variance: of a weighted amplitude. A T_D at its bound 0 counts as known.
    """
    scale = problem.scales(problem.raw(x))
    free = [i for i in range(x.size) if i == 0 or x[i] > _STEP]
    slopes = [scale[problem.group] * _slope(problem.raw, x, i) for i in free]
    factors = np.where(problem.group[:, None] == np.arange(scale.size), problem.raw(x)[:, None], 0.0)
    jacobian = problem.weights[:, None] * np.column_stack([*slopes, factors])
    norm = np.linalg.norm(jacobian, axis=0)
    errors: list[float | None] = [None] * x.size
    if not np.all(norm > 0) or np.linalg.cond(jacobian / norm) > _SINGULAR:
        return errors
    covariance = variance * np.linalg.inv((jacobian / norm).T @ (jacobian / norm)) / np.outer(norm, norm)
    change = np.stack([_slope(problem.values, x, i) for i in free], axis=1)
    spread = change @ covariance[: len(free), : len(free)] @ change.T
    for i in free:
        errors[i] = float(np.sqrt(spread[i, i]))
    return errors


def _slope(function: Callable[[Array], Array], x: Array, i: int) -> Array:
    """Central difference of an array-valued function in the coordinate i."""
    shift = np.where(np.arange(x.size) == i, _STEP, 0.0)
    return np.asarray((function(x + shift) - function(x - shift)) / (2 * _STEP))


def excess(problem: Problem, best: Minimum, first: float, rise: float) -> float:
    """Sum of squares at the first coordinate `first`, T_D fitted again, minus the best one and minus `rise`.

    This judges b where standard errors do not: for small b the amplitude depends on b^2.
    """
    from scipy.optimize import least_squares

    def residual(rest: Array) -> Array:
        return problem.residual(np.array([first, *rest]))

    if best.x.size == 1:
        return float((residual(best.x[1:]) ** 2).sum()) - best.squares - rise
    return 2 * float(least_squares(residual, best.x[1:], bounds=([0.0], [np.inf])).cost) - best.squares - rise


def upper_limit(problem: Problem, best: Minimum, rise: float) -> float | None:
    """First value above the best one at which the sum of squares is higher by `rise`; None if there is none."""
    from scipy.optimize import brentq

    last = float(best.x[0])
    for first in problem.grid[problem.grid > last]:
        if excess(problem, best, first, rise) > 0:
            return float(np.exp(brentq(lambda x: excess(problem, best, x, rise), last, first, xtol=1e-3)))
        last = float(first)
    return None
