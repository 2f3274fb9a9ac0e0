"""Who computes evaluations and responses: plain numpy, or the compiled kernels, which take a moment to load."""

import os
from dataclasses import dataclass

from numpy.typing import NDArray

from kondomf.meanfield import evaluate as plain
from kondomf.meanfield.evaluate import Array, Evaluation
from kondomf.meanfield.kernels import worthwhile
from kondomf.meanfield.zone import ZoneRule
from kondomf.model import MeanFieldModel

LARGE = 7e4
"""Matrices times n^2 in one call from which a second thread helps."""
PER_START = 200
"""Matrices per wave vector that one start of a search takes, responses counted by their time."""
POINT_PRICE = 1e7
"""Work of one of many points from which they are computed by kernels, ready or not: some seconds in plain numpy."""


@dataclass(frozen=True)
class Engine:
    """Plain numpy or compiled kernels on some threads. The two differ by rounding, the number of threads by nothing."""

    compiled: bool = False
    threads: int = 1

    def evaluate(self, model: MeanFieldModel, zone: ZoneRule, phi: Array) -> Evaluation:
        """Correlators and grand potential of the fields phi (N,)."""
        if not self.compiled:
            return plain.evaluate(model, zone, phi, keep=True)
        from kondomf.meanfield.kernels import evaluation

        return evaluation.evaluate(model, zone, phi, threads=self._threads(model, zone))

    def response(self, model: MeanFieldModel, zone: ZoneRule, state: Evaluation, channels: NDArray) -> Array:
        """Pi_pq = dP_p/dphi_q among `channels`, (Nc, Nc), 1/meV, at the fields of a state that this engine gave."""
        if not self.compiled:
            return plain.response(model, zone, state, channels)
        from kondomf.meanfield.kernels import response

        return response.response(model, zone, state.phi, channels, threads=self._threads(model, zone))

    def _threads(self, model: MeanFieldModel, zone: ZoneRule) -> int:
        return self.threads if len(zone.k) * model.n_majorana**2 >= LARGE else 1


NUMPY = Engine()


def search_work(model: MeanFieldModel, zone: ZoneRule, starts: int) -> float:
    """Work of a search as matrices times n^2."""
    return float(PER_START * starts * len(zone.k) * model.n_majorana**2)


def engine_for(work: float) -> Engine:
    """The engine with which `work`, in matrices times n^2, is done soonest: small work waits for no compiler."""
    return Engine(worthwhile(work), len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else 1)


def engine_of_point(work: float) -> Engine:
    """The engine for one of many points: by its work alone, so that it is the same on every machine; one thread."""
    return Engine(work >= POINT_PRICE)
