"""One run at a time on a results file."""

from __future__ import annotations

import contextlib
import os
import sqlite3
from pathlib import Path

from lozenge_engine.errors import InputError, refuse
from lozenge_engine.resultsfile import in_words, primary_code

__all__ = ["FileLock"]


class FileLock:
    """The right to write a results file; the system takes it back when its process dies.

    Parameters
    ----------
    path : Path
        The results file, absolute, behind symbolic links.  The lock is one of SQLite on the empty
        ``FILE.lock`` beside it; one that is left over after a kill is in nobody's way.

    Raises
    ------
    InputError
        If another run holds it, or the folder takes no files.
    """

    def __init__(self, path: Path) -> None:
        self._file = path.with_name(path.name + ".lock")
        for _ in range(100):
            before = self._created()
            self._connection = self._locked(path)
            # Another run may have removed the file between its opening and its locking.
            if before is not None and before == self._node():
                return
            self._connection.close()
        raise self._refused(path)

    def _created(self) -> int | None:
        """Make the file unless it is there; which one it is."""
        try:
            os.close(os.open(self._file, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        except FileExistsError:
            pass  # and never open it other than through SQLite: see `open_file`
        except OSError as error:
            raise refuse(
                str(self._file),
                given=f"a path that cannot be written ({error.strerror})",
                allowed="a results file in a folder that takes files",
                do="change the rights of the folder, or choose another path",
            ) from error
        return self._node()

    def _node(self) -> int | None:
        try:
            return self._file.stat().st_ino
        except FileNotFoundError:
            return None

    def _locked(self, path: Path) -> sqlite3.Connection:
        with in_words(self._file):
            connection = sqlite3.connect(
                self._file, timeout=0.0, isolation_level=None, check_same_thread=False
            )
            try:
                connection.execute("BEGIN EXCLUSIVE")
            except sqlite3.Error as error:
                connection.close()
                if primary_code(error) != sqlite3.SQLITE_BUSY:
                    raise
                raise self._refused(path) from error
        return connection

    @staticmethod
    def _refused(path: Path) -> InputError:
        return refuse(
            str(path),
            given="a results file that another run is writing",
            allowed="one run at a time",
            do="wait for that run or pause it; its results can be looked at meanwhile",
        )

    def release(self) -> None:
        """Give the right back; to be called once."""
        with contextlib.suppress(OSError):
            self._file.unlink()
        self._connection.close()
