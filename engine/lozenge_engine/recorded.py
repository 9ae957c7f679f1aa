"""What a campaign has recorded: an open results file."""

from __future__ import annotations

import contextlib
import json
import sqlite3
import threading
import zlib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any, Self

from lozenge_engine.checks import checked_number
from lozenge_engine.design import Design, design, identity
from lozenge_engine.differences import campaign_in, check_same
from lozenge_engine.document import parse_json
from lozenge_engine.errors import refuse
from lozenge_engine.filelock import FileLock
from lozenge_engine.pipeline import versions
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset, dumps, parse
from lozenge_engine.realisation import Record
from lozenge_engine.resultsfile import damaged, in_words, settle, snapshot, transaction
from lozenge_engine.table import Row, SampleRow, Table, arrays, rows_of, sprinkling_of

__all__ = ["Results", "versions_text"]


def versions_text() -> str:
    """The versions that run now, as JSON."""
    return json.dumps(versions(), sort_keys=True)


class Results:
    """An open results file; made by `create`, `resume` and `inspect`.  A context manager.

    All methods may be called from any thread; they take turns.

    Parameters
    ----------
    path : Path
        As it was given.
    connection : sqlite3.Connection
        From `lozenge_engine.resultsfile.open_file`; closed with the results.
    lock : FileLock or None
        None if they are read only; released with the results.

    Raises
    ------
    InputError
        From every method: if the file cannot be read or written, is damaged or was closed.
    """

    def __init__(self, path: Path, connection: sqlite3.Connection, lock: FileLock | None) -> None:
        self.path = path
        self._connection: sqlite3.Connection | None = connection
        self._lock = lock
        self._turn = threading.RLock()
        self._text = ""
        try:
            self._refresh()
            self._version = self._version_row()
        except BaseException:
            connection.close()
            raise

    # -- the campaign

    @property
    def preset(self) -> Preset:
        """The campaign's preset with the plan as it is now, another run's changes included."""
        self._refresh()
        return self._preset

    @property
    def design(self) -> Design:
        """The campaign's layout with the plan as it is now."""
        self._refresh()
        return self._design

    @property
    def writable(self) -> bool:
        """Whether realisations can be added."""
        return self._lock is not None

    @property
    def versions(self) -> dict[str, str]:
        """Versions of the program that runs now, or when only looking on, of the last one."""
        with self._sound("its versions"):
            ((text,),) = self._rows("SELECT document FROM versions WHERE id = ?", self._version)
            return self._versions_of(text)

    def computed_with(self) -> tuple[tuple[dict[str, str], int], ...]:
        """Versions of the programs that recorded realisations, and how many each; oldest first."""
        rows = self._rows(
            "SELECT document, count(*) FROM realisations JOIN versions"
            " ON versions.id = realisations.versions GROUP BY versions.id ORDER BY versions.id"
        )
        with self._sound("its versions"):
            return tuple((self._versions_of(text), count) for text, count in rows)

    @property
    def predicted(self) -> tuple[tuple[float, float], ...]:
        """Seconds and bytes that one realisation of each sprinkling was expected to take."""
        with self._sound("its predictions"):
            ((text,),) = self._rows("SELECT predicted FROM meta")
            return tuple((float(seconds), float(size)) for seconds, size in parse_json(text))

    def replan(self, plan: CampaignPlan) -> None:
        """Set other realisations, target, budget or smallest region.

        Parameters
        ----------
        plan : CampaignPlan
            With the same axes and placements.

        Raises
        ------
        InputError
            If the samples would not be the same.
        """
        with self._turn:
            changed = replace(self.preset, campaign=plan)
            check_same(self.path, self._preset, changed)
            with in_words(self.path), transaction(self._writing()):
                self._writing().execute("UPDATE meta SET preset = ?", (dumps(changed),))
            self._refresh()

    # -- writing

    def add(self, record: Record, *, elapsed: float) -> None:
        """Record a finished realisation: on the disk, whole, when this returns, or not at all.

        Parameters
        ----------
        record : Record
            From `lozenge_engine.realisation.realise` on this campaign's design.  One that is
            there already with the same numbers changes nothing, whatever time it took.
        elapsed : float
            Running time of the campaign so far in seconds, resumed runs together.

        Raises
        ------
        InputError
            If it is not of this campaign, is there already with other numbers, or the disk is
            full; all that was recorded before is kept.
        """
        elapsed = checked_number("elapsed", elapsed, low=0.0, high=1e15, allowed="seconds from 0")
        key, row, samples = rows_of(record, self._design)
        with self._turn, in_words(self.path), transaction(self._writing()):
            there = self._stored(key)
            if there is not None:
                self._check_equal(key, there, (row, samples))
                return
            connection = self._writing()
            connection.executemany(
                "INSERT INTO samples VALUES (?, ?, ?, ?, ?, ?)",
                [(*key, *sample, zlib.crc32(sample[2])) for sample in samples],
            )
            connection.execute(
                "INSERT INTO realisations (sprinkling, realisation, seed, elements,"
                " ordering_fraction, status, reason, seconds, elapsed, versions)"
                " VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                (*key, *row, float(record.seconds), elapsed, self._version),
            )
            connection.execute("UPDATE meta SET elapsed = max(elapsed, ?)", (elapsed,))

    def _stored(self, key: tuple[int, int]) -> tuple[Row, list[SampleRow]] | None:
        found = self._rows(
            "SELECT seed, elements, ordering_fraction, status, reason FROM realisations"
            " WHERE sprinkling = ? AND realisation = ?",
            *key,
        )
        if not found:
            return None
        samples = []
        for cell in sorted(self._design.sprinklings[key[0]].cells):
            samples += self._rows(
                "SELECT cell, trusted, numbers FROM samples"
                " WHERE sprinkling = ? AND realisation = ? AND cell = ?",
                *key,
                cell,
            )
        return found[0], samples

    @staticmethod
    def _check_equal(key: tuple[int, int], there: object, here: object) -> None:
        if there != here:
            raise refuse(
                f"realisation {key[1]} of sprinkling {key[0]}",
                given="other numbers than the file holds already",
                allowed="the same to the bit: a finished realisation is never changed",
                do="run with the libraries that the file was made with, or start a new file",
            )

    # -- reading

    @property
    def elapsed(self) -> float:
        """Running time of the campaign so far in seconds, resumed runs together."""
        with self._sound("its running time"):
            ((seconds,),) = self._rows("SELECT elapsed FROM meta")
            return float(seconds)

    def done(self) -> set[tuple[int, int]]:
        """Sprinkling and realisation of all that is recorded, failed ones included."""
        return set(self._rows("SELECT sprinkling, realisation FROM realisations"))

    def counts(self) -> tuple[tuple[int, int], ...]:
        """How many realisations of each sprinkling are recorded, and how many of them failed."""
        with self._state():
            every = dict(
                self._rows("SELECT sprinkling, count(*) FROM realisations GROUP BY sprinkling")
            )
            failed = dict(
                self._rows(
                    "SELECT sprinkling, count(*) FROM realisations"
                    " WHERE status = 'failed' GROUP BY sprinkling"
                )
            )
        count = len(self._design.sprinklings)
        return tuple((every.get(s, 0), failed.get(s, 0)) for s in range(count))

    def failures(self) -> tuple[tuple[str, int], ...]:
        """Why realisations failed and how many each; most frequent first."""
        found = self._rows(
            "SELECT reason, count(*) FROM realisations WHERE status = 'failed'"
            " GROUP BY reason ORDER BY count(*) DESC, reason"
        )
        return tuple((str(reason), count) for reason, count in found)

    def table(self, sprinkling: int) -> Table:
        """Read all samples of a sprinkling.

        Parameters
        ----------
        sprinkling : int
            Index of `Design.sprinklings`.

        Returns
        -------
        Table
            Of one moment, also while a run is writing.

        Raises
        ------
        InputError
            If there is no such sprinkling, or a sample is missing or does not have its checksum.

        Notes
        -----
        About 3 microseconds for each sample of one region.
        """
        cells = sprinkling_of(self._design, sprinkling).cells
        with self._state():
            realisations = self._rows(
                "SELECT realisation, seconds, elements, ordering_fraction FROM realisations"
                " WHERE sprinkling = ? AND status = 'done' ORDER BY realisation",
                sprinkling,
            )
            samples = [
                self._rows(
                    "SELECT realisation, trusted, numbers, checksum FROM samples"
                    " WHERE sprinkling = ? AND cell = ? ORDER BY realisation",
                    sprinkling,
                    cell,
                )
                for cell in cells
            ]
        regions = [len(self._design.cells[cell].config.regions) for cell in cells]
        with self._sound():
            return arrays(realisations, samples, regions=regions)

    # -- the end

    def close(self) -> None:
        """Close the file; after a run all of it is in this one file, free to be moved."""
        with self._turn:
            connection, self._connection = self._connection, None
            if connection is None:
                return
            try:
                if self._lock is not None:
                    settle(connection)
                with in_words(self.path):
                    connection.close()
            finally:
                if self._lock is not None:
                    self._lock.release()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # -- inside

    def _open(self) -> sqlite3.Connection:
        if self._connection is None:
            raise refuse(
                str(self.path), given="results that were closed", allowed="open ones", do="reopen"
            )
        return self._connection

    def _writing(self) -> sqlite3.Connection:
        if self._lock is None:
            raise refuse(
                str(self.path),
                given="results that were opened to look at",
                allowed="results that were created or resumed",
                do="resume them",
            )
        return self._open()

    @contextlib.contextmanager
    def _sound(self, what: str = "") -> Iterator[None]:
        """Say that the file is damaged where what it holds cannot be taken."""
        try:
            yield
        except (TypeError, ValueError, OverflowError) as error:
            said = f"{what}: {error}" if what else str(error)
            raise damaged(self.path, said) from error

    def _rows(self, query: str, *values: object) -> list[Any]:
        with self._turn, in_words(self.path):
            return self._open().execute(query, values).fetchall()

    @contextlib.contextmanager
    def _state(self) -> Iterator[None]:
        """All queries inside see one state of the file."""
        with self._turn, in_words(self.path), snapshot(self._open()):
            yield

    def _refresh(self) -> None:
        """Take in the preset if it is another than before."""
        with self._turn:
            if self._connection is None and self._text:
                return  # closed: as it was last
            found = self._rows("SELECT preset, identity FROM meta")
            if not found or not isinstance(found[0][0], str):
                raise damaged(self.path, "it has no preset")
            text, known = found[0]
            if text == self._text:
                return
            with self._sound("its preset"):
                preset = parse(text)
                layout = design(preset.setup, campaign_in(preset))
            if identity(layout.setup, layout.plan) != known:
                raise damaged(self.path, "its preset is not the one of its samples")
            self._text, self._preset, self._design = text, preset, layout

    def _version_row(self) -> int:
        """The row of the running versions, made if need be; read only, the last that was made."""
        if self._lock is None:
            with self._sound("its versions"):
                return int(self._rows("SELECT max(id) FROM versions")[0][0])
        text = versions_text()
        with self._turn, in_words(self.path), transaction(self._writing()):
            if not self._rows("SELECT 1 FROM versions WHERE document = ?", text):
                self._writing().execute("INSERT INTO versions (document) VALUES (?)", (text,))
        return int(self._rows("SELECT id FROM versions WHERE document = ?", text)[0][0])

    def _versions_of(self, text: str) -> dict[str, str]:
        document = parse_json(text)
        if not isinstance(document, dict):
            raise damaged(self.path, "its versions")
        return {str(key): str(value) for key, value in document.items()}
