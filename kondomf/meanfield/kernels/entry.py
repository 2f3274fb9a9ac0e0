"""Kernels that Python calls: compiled for one signature and kept on disk.

numba stamps what it keeps with the one source file of the function, so that a change in another file of this package
would leave it stale, and code for different CPUs that share a directory goes by the same names. Here the names hold a
digest of all sources and of the CPU: no two processes ever write different code to one file, and since numba moves
finished files into place, none reads half of one.
"""

import hashlib
from collections.abc import Callable
from contextlib import suppress
from functools import cache, cached_property
from pathlib import Path
from typing import Any

from numba import njit
from numba.core.caching import FunctionCache, IndexDataCacheFile

OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy"}
"""Options of all kernels: threads run them side by side, a division by zero is no exception."""


@cache
def _sources() -> bytes:
    """Digest of the sources of this package."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return digest.digest()


class _Cache(FunctionCache):
    """numba's store of one function's code. Files that cannot be read or written are no error."""

    def __init__(self, function: Callable[..., Any], codegen: Any) -> None:
        super().__init__(function)
        self._codegen = codegen
        stamp = hashlib.sha256(_sources() + repr(codegen.magic_tuple()).encode()).hexdigest()[:16]
        self._cache_file = IndexDataCacheFile(self.cache_path, f"{self._impl.filename_base}-{stamp}", stamp)

    def holds(self, signature: Any) -> bool:
        """True if the code for this signature is there."""
        try:
            name = self._cache_file._load_index().get(self._index_key(signature, self._codegen))
            return name is not None and Path(self._cache_file._data_path(name)).is_file()
        except Exception:  # whatever a damaged file makes pickle raise
            return False

    def load_overload(self, sig: Any, target_context: Any) -> Any:
        try:
            return super().load_overload(sig, target_context)
        except Exception:
            with suppress(OSError):
                self.flush()
            return None

    def save_overload(self, sig: Any, data: Any) -> None:
        with suppress(OSError):
            super().save_overload(sig, data)


class Entry:
    """A compiled function with fixed argument types. Where no directory can be written, it lives in memory only."""

    def __init__(self, function: Callable[..., Any], arguments: tuple[Any, ...]) -> None:
        self._dispatcher = njit(**OPTIONS)(function)
        self._arguments = arguments
        self.compiled = False

    @cached_property
    def _store(self) -> _Cache | None:
        try:
            return _Cache(self._dispatcher.py_func, self._dispatcher.targetctx.codegen())
        except (RuntimeError, OSError):  # no directory that can be written
            return None

    def kept(self) -> bool:
        """True if the compiled code is on disk."""
        return self._store is not None and self._store.holds(self._arguments)

    def ready(self) -> bool:
        """True if a call need not wait for the compiler; does not compile."""
        return self.compiled or self.kept()

    def compile(self) -> None:
        """Load the code from disk, or compile it and keep it there."""
        if self.compiled:
            return
        if self._store is not None:
            self._dispatcher._cache = self._store
        self._dispatcher.compile(self._arguments)
        self.compiled = True

    def __call__(self, *arguments: Any) -> Any:
        self.compile()
        return self._dispatcher(*arguments)


def entry(*arguments: Any) -> Callable[[Callable[..., Any]], Entry]:
    """Decorator: the function as an `Entry` with arguments of these numba types."""
    return lambda function: Entry(function, arguments)
