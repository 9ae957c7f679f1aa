"""A cache of stage outputs, shared by the computations of one process."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable, Hashable
from typing import Any, TypeVar

import numpy as np

__all__ = ["ONE_THREAD", "Stages"]

T = TypeVar("T")


ONE_THREAD = 10**9
"""More elements than any set has: searches that run beside other work keep to one thread."""


class Stages:
    """Least-recently-used cache of stage outputs, limited in bytes.

    A key names everything that its value depends on, so that entries never go stale.

    Parameters
    ----------
    limit_bytes : int
        Bytes of arrays kept, at most; the newest entry always stays.
    compiled : bool
        Whether compiled loops may be used where the result is the same to the bit; set it once
        `lozenge_engine.kernels.order.warm` has returned.
    threads_from : int
        Elements above which the search for modes uses all cores, or LOZENGE_THREADS of them.
        Threads that wait for a busy core spin: beside other work one thread is up to six times
        faster (measured, DEVELOPERS.md).
    """

    def __init__(
        self,
        *,
        limit_bytes: int = 1_500_000_000,
        compiled: bool = False,
        threads_from: int = 2500,
    ) -> None:
        self.limit_bytes = limit_bytes
        self.compiled = compiled
        self.threads_from = threads_from
        self._entries: OrderedDict[Hashable, tuple[Any, int]] = OrderedDict()
        self._lock = threading.Lock()

    def get(self, key: Hashable, make: Callable[[], T]) -> tuple[T, bool]:
        """Value of a key, made if it is missing, and whether the cache served it.

        Two threads may make the same value at once; both get an equal one.

        Parameters
        ----------
        key : hashable
            Names everything that the value depends on.
        make : callable
            Makes the value; its arrays, also in nested tuples, become read-only.

        Returns
        -------
        value : object
            What the key stands for.
        cached : bool
            Whether it was there.
        """
        with self._lock:
            if key in self._entries:
                self._entries.move_to_end(key)
                value: T = self._entries[key][0]
                return value, True
        value = make()
        self.put(key, value)
        return value, False

    def put(self, key: Hashable, value: object) -> None:
        """Store a value, dropping the least recently used ones beyond the limit.

        Parameters
        ----------
        key : hashable
            Names everything that the value depends on.
        value : object
            Its arrays, also in nested tuples, become read-only and count by their bytes.
        """
        _freeze(value)
        with self._lock:
            self._entries[key] = (value, _array_bytes(value))
            self._entries.move_to_end(key)
            total = sum(size for _, size in self._entries.values())
            while total > self.limit_bytes and len(self._entries) > 1:
                total -= self._entries.popitem(last=False)[1][1]

    def peek(self, key: Hashable) -> Any | None:
        """Value of a key, which counts as a use, or None.

        Parameters
        ----------
        key : hashable
            As in `put`.

        Returns
        -------
        object or None
            The value.
        """
        with self._lock:
            if key not in self._entries:
                return None
            self._entries.move_to_end(key)
            return self._entries[key][0]


def _freeze(value: object) -> None:
    """Make arrays in nested tuples read-only: results share them with the cache."""
    if isinstance(value, np.ndarray):
        value.setflags(write=False)
    elif isinstance(value, tuple):
        for part in value:
            _freeze(part)


def _array_bytes(value: object) -> int:
    """Bytes of the arrays in nested tuples."""
    if isinstance(value, np.ndarray):
        return value.nbytes
    if isinstance(value, tuple):
        return sum(_array_bytes(part) for part in value)
    return 64
