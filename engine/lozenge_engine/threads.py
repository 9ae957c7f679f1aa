"""How many threads the linear algebra uses.

NumPy and SciPy bring a BLAS each, whose idle threads spin: two pools of two threads on two cores
made the second stage 30 times slower than one thread (measured, DEVELOPERS.md).  So SciPy's copy,
which only sees small matrices, gets one thread, and NumPy's gets more only for large products.
"""

from __future__ import annotations

import functools
import os
import threading
from collections.abc import Iterator
from contextlib import contextmanager

from threadpoolctl import LibController, ThreadpoolController

__all__ = ["blas_threads"]


@functools.cache
def _controller() -> ThreadpoolController:
    """The thread pools loaded now; NumPy's and SciPy's are by then."""
    import scipy.linalg  # noqa: F401  (its BLAS has to be loaded to be found)

    return ThreadpoolController()


def _is_scipys(library: LibController) -> bool:
    """Whether a BLAS is the copy inside SciPy's wheel."""
    return "scipy" in (library.filepath or "").rsplit(os.sep, 2)[-2]


@contextmanager
def blas_threads(count: int | None) -> Iterator[None]:
    """Give NumPy's BLAS `count` threads and SciPy's own copy one.

    Parameters
    ----------
    count : int or None
        Threads for NumPy's BLAS, >= 1; None for as many as before all open requests.

    Yields
    ------
    None
        The numbers hold for the whole process; the latest open request wins, and what was there
        before comes back when the last one closes.
    """
    libraries = [x for x in _controller().lib_controllers if x.user_api == "blas"]
    entry = (object(), count)
    with _LOCK:
        if not _OPEN:
            _BASE[:] = [library.num_threads for library in libraries]
        _OPEN.append(entry)
        _apply(libraries)
    try:
        yield
    finally:
        with _LOCK:
            _OPEN.remove(entry)
            _apply(libraries)


_LOCK = threading.Lock()
_OPEN: list[tuple[object, int | None]] = []
"""Requests that are open in any thread; the latest of them holds."""
_BASE: list[int] = []
"""Threads of each library before the first of them."""


def _apply(libraries: list[LibController]) -> None:
    """Set what the latest open request asks for, or what was there before all of them."""
    for library, base in zip(libraries, _BASE, strict=True):
        wanted = base
        if _OPEN:
            wanted = 1 if _is_scipys(library) else (_OPEN[-1][1] or base)
        if library.num_threads != wanted:
            library.set_num_threads(wanted)
