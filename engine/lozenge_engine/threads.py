"""How many threads the linear algebra uses.

NumPy and SciPy bring a BLAS each, whose idle threads spin: two pools of two threads on two cores
made the second stage 30 times slower than one thread (measured, DEVELOPERS.md).  So SciPy's copy,
which only sees small matrices, gets one thread, and NumPy's gets more only for large products.
"""

from __future__ import annotations

import functools
import os
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager

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
        Threads for NumPy's BLAS; None leaves it as it is.
    """
    controller = _controller()
    with ExitStack() as stack:
        for library in controller.lib_controllers:
            wanted = 1 if _is_scipys(library) else count
            if wanted is not None and library.user_api == "blas":
                previous = library.num_threads
                if previous != wanted:
                    library.set_num_threads(wanted)
                    stack.callback(library.set_num_threads, previous)
        yield
