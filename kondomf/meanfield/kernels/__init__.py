"""Compiled kernels: eight wave vectors at a time, one per lane of a vector register.

Importing this package is cheap; its modules import numba, which takes as long as some 10^4 small matrices.
"""

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from kondomf.meanfield.kernels.entry import Entry

WARM_PRICE = 5e6
"""Work that takes the plain evaluation as long as it takes to load the kernels."""
COLD_PRICE = 1e8
"""The same for compiling them."""


def worthwhile(work: float) -> bool:
    """True if work that a process has done without kernels, in matrices times n^2, would have paid for them.

    Whoever pays rent until it has added up to the price, and then buys, spends at most twice the least possible.
    Neither loads nor compiles the kernels.
    """
    return work >= WARM_PRICE and (work >= COLD_PRICE or ready())


def entries() -> tuple["Entry", "Entry"]:
    """The compiled functions of evaluation and response."""
    from kondomf.meanfield.kernels import evaluation, response

    return evaluation.evaluate_parts, response.response_parts


def ready() -> bool:
    """True if the kernels are compiled, here or on disk for this CPU. Does not compile."""
    return all(entry.ready() for entry in entries())


def kept() -> bool:
    """True if the compiled kernels are on disk, for this CPU and these sources."""
    return all(entry.kept() for entry in entries())


def compile_now() -> None:
    """Compile the kernels, or load them from disk."""
    for entry in entries():
        entry.compile()
