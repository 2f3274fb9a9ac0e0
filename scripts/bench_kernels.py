"""Speed of the compiled kernels beside numpy.linalg.eigh and the plain numpy twins.

    .venv/bin/python scripts/bench_kernels.py [--rounds 9] [--sizes 8,16,8+8,32,48] [--threads 2]

Everything runs in one process with one BLAS thread, in turns: each round calls every candidate once, and medians over
the rounds are compared, so that a busy machine slows all of them alike. Times are CPU times per wave vector in
microseconds, except the gain by threads, a ratio of elapsed times. That needs as many free cores; hashing, which
shares nothing between threads, shows how many there are.

Fields are random in all channels, so nothing is degenerate or zero. n = 16, 32 and 48 are magnetic cells of one, two
and three primitive cells with exchange in the so4 form; n = 8 is their spin layer alone, 8+8 the cell of n = 16 without
hybridization. The response includes a new eigen-decomposition; that of its twin is kept from the evaluation and not
counted. Channels of the response are chosen at random.
"""

import argparse
import hashlib
import platform
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

import numba
import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_info, threadpool_limits

from kondomf.material import material_from_dict
from kondomf.meanfield import evaluate as twin
from kondomf.meanfield.kernels import entries, evaluation, response
from kondomf.meanfield.zone import ZoneRule, uniform
from kondomf.model import MeanFieldModel, build_model

T = 1000.0
"""Hopping t in meV."""
TEMPERATURES = 1e-3, 5e-2
"""k_B T / t."""
CHANNELS = 44, 110
GRIDS = {"8": 24, "16": 24, "8+8": 24, "32": 16, "48": 12}
"""Points of the midpoint grid, half of which is a zone rule; large cells need fewer."""
CELLS = {"8": "1x1", "16": "1x1", "8+8": "1x1", "32": "1x2", "48": [[3, 0], [0, 1]]}
Candidates = dict[str, Callable[[], object]]


class SpinLayer(MeanFieldModel):
    """The eight spinon Majoranas of the smallest cell."""

    @property
    def n_majorana(self) -> int:
        return 8


@dataclass(frozen=True)
class Case:
    """Fields (N,) of a model on a zone rule."""

    model: MeanFieldModel
    zone: ZoneRule
    phi: NDArray[np.float64]

    def at(self, temperature: float) -> "Case":
        """The same at k_B T / t."""
        return replace(self, model=replace(self.model, temperature=T * temperature))

    def bloch_matrices(self) -> NDArray[np.complex128]:
        return twin.bloch_matrix(self.model, self.phi, self.model.phases(self.zone.k))


def model_of(size: str) -> MeanFieldModel:
    """Layers with t = |K| = 1000 meV, J_K = 2 t, exchange in the so4 form."""
    model = build_model(
        material_from_dict(
            {
                "name": "benchmark",
                "spin_layer": {"lattice_constant_angstrom": 1.0, "kitaev_meV": -T},
                "conduction_layer": {"lattice_constant_angstrom": 1.0, "hopping_meV": T, "filling": 0.9},
                "kondo": {"coupling_meV": 2 * T},
                "mean_field": {"exchange_form": "so4", "cell": CELLS[size], "temperature_meV": 1.0},
            }
        )
    )
    if size != "8":
        return model
    kept = np.flatnonzero((model.species == 0).all(axis=1))
    table = model.table[kept].copy()
    table[:, :2] -= 4 * (table[:, :2] // 8)  # sixteen Majoranas, four spinons among the first and the second eight
    rest = model.h[kept], model.v[np.ix_(kept, kept)], model.c[:, kept], model.target, model.constraint_names
    return SpinLayer(model.cell, table, *rest, model.temperature)


def case_of(size: str) -> Case:
    model = model_of(size)
    phi = T * np.random.default_rng(0).standard_normal(model.n_channels) / 2
    if size == "8+8":
        phi[model.hybridization] = 0.0
    return Case(model, uniform(GRIDS[size], "midpoint"), phi)


def medians(candidates: Candidates, rounds: int, clock: Callable[[], float] = time.process_time) -> dict[str, float]:
    """Median time in seconds of each candidate, called in turns."""
    times: dict[str, list[float]] = {name: [] for name in candidates}
    for _ in range(rounds):
        for name, call in candidates.items():
            began = clock()
            call()
            times[name].append(clock() - began)
    return {name: float(np.median(values)) for name, values in times.items()}


def report(size: str, temperature: float, rounds: int, threads: int) -> None:
    """Print a line for the baseline and for each kernel."""
    case = case_of(size).at(temperature)
    arguments = case.model, case.zone, case.phi
    order = np.random.default_rng(1).permutation(case.model.n_channels)
    choices = {f"response {count}": order[:count] for count in CHANNELS if count <= len(order)}

    def kernels(threads: int) -> Candidates:
        calls = {
            name: partial(response.response, *arguments, channels, threads=threads)
            for name, channels in choices.items()
        }
        return {"evaluation": partial(evaluation.evaluate, *arguments, threads=threads)} | calls

    baseline: Candidates = {"eigh": partial(np.linalg.eigh, case.bloch_matrices())}
    state = twin.evaluate(*arguments, keep=True)
    plain: Candidates = {"evaluation": partial(twin.evaluate, *arguments)}
    for name, channels in choices.items():
        plain[name] = partial(twin.response, case.model, case.zone, state, channels)

    used = medians(baseline | kernels(1) | named("twin of", plain), rounds)
    elapsed = medians(named("one", kernels(1)) | named("several", kernels(threads)), rounds, time.perf_counter)
    unit = 1e-6 * len(case.zone.k)
    start = f"{size:>4} {temperature:7.0e} {len(case.zone.k):4}"
    print(f"{start}   {'eigh':12} {used['eigh'] / unit:8.2f}")
    for name in plain:
        ratios = (
            used[name] / used["eigh"],
            used["eigh"] / used[name],
            used[f"twin of {name}"] / used[name],
            elapsed[f"one {name}"] / elapsed[f"several {name}"],
        )
        print(f"{start}   {name:12} {used[name] / unit:8.2f}", *(f"{ratio:9.2f}" for ratio in ratios), flush=True)


def named(prefix: str, candidates: Candidates) -> Candidates:
    return {f"{prefix} {name}": call for name, call in candidates.items()}


def machine() -> str:
    names = [line.split(":")[1].strip() for line in _lines("/proc/cpuinfo") if line.startswith("model name")]
    cpu = f"{len(names)} x {names[0]}" if names else platform.processor() or platform.machine()
    blas = ", ".join(f"{pool['internal_api']} {pool['version']}" for pool in threadpool_info())
    wide = "avx512f" if any("avx512f" in line for line in _lines("/proc/cpuinfo")) else "no avx512f"
    return f"{cpu} ({wide}); numpy {np.__version__}, numba {numba.__version__}, {blas}"


def _lines(path: str) -> list[str]:
    return Path(path).read_text().splitlines() if Path(path).exists() else []


def gain_of_hashing(threads: int, rounds: int) -> float:
    """Elapsed time of hashing something `threads` times in one thread, by that in so many: the cores that are free."""
    data = bytes(2**24)

    def hashing(workers: int) -> None:
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(lambda _: hashlib.sha256(data).digest(), range(threads)))

    elapsed = medians({"one": partial(hashing, 1), "several": partial(hashing, threads)}, rounds, time.perf_counter)
    return elapsed["one"] / elapsed["several"]


def prepare() -> None:
    """Compile or load the kernels and say how long that took."""
    for name, entry in zip(("evaluation", "response"), entries(), strict=True):
        how = "loaded" if entry.ready() else "compiled"
        began = time.process_time()
        entry.compile()
        print(f"{name} kernel {how} in {time.process_time() - began:.2f} s of CPU time")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--rounds", type=int, default=9)
    parser.add_argument("--sizes", default=",".join(GRIDS), help="numbers of Majoranas")
    parser.add_argument("--threads", type=int, default=2, help="for the last column")
    options = parser.parse_args()
    print(machine())
    prepare()
    gain = gain_of_hashing(options.threads, options.rounds)
    print("CPU times are per wave vector, in us; the last column is elapsed time with one thread by that with", end=" ")
    print(f"{options.threads}.\nHashing in as many threads gains {gain:.2f} at present.\n")
    titles = "by eigh", "eigh by", "twin by", "threads"
    print(f"{'n':>4} {'T/t':>7} {'k':>4}   {'':12} {'us':>8}", *(f"{title:>9}" for title in titles))
    with threadpool_limits(1, user_api="blas"):
        for size in options.sizes.split(","):
            for temperature in TEMPERATURES:
                report(size, temperature, options.rounds, options.threads)


if __name__ == "__main__":
    main()
