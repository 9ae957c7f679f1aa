"""Damaged files for every reader: what is read is refused in words or taken, and nothing else.

`test_fuzz.py` runs a thousand cases each; `tests/benchmarks/test_fuzz_cost.py` ten thousand with
the time and memory that each takes.
"""

from __future__ import annotations

import copy
import functools
import io
import json
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple
from urllib.parse import quote

import numpy as np
from hypothesis import strategies as st

from lozenge_engine import address, bundle, store
from lozenge_engine.bundle import Bundle
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.estimates import estimates
from lozenge_engine.ownset import own_set
from lozenge_engine.pipeline import versions
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.pointfile import parse_points
from lozenge_engine.presets import FIRST, Preset, dumps, parse, shipped
from lozenge_engine.realisation import realise
from lozenge_engine.relationfile import read_members, read_relation

Reader = Callable[[bytes], object]

ODD_VALUES: tuple[Any, ...] = (
    None, True, -1, 0, 2**63, 10**400, -0.0, 1e308, 5e-324, 1.5, "", "nan", "\ud800", "\x00",
    "é" * 500,
    [], {}, [[[[[]]]]], {"a": {"a": {}}}, [0.0] * 300, "../../etc/passwd",
)  # fmt: skip
ODD_BYTES = (
    b"\x00", b"\xff\xfe", b"\xed\xa0\x80", b"[" * 400, b'{"a":' * 400, b"9" * 5000, b"1e999",
    b"NaN",
    b"PK\x03\x04", b"SQLite format 3\x00", b'"', b"\n", b",,,,", b"%00", b"&" * 300,
)  # fmt: skip


class Damaged(NamedTuple):
    """Bytes that are told by their damage."""

    data: bytes
    damage: tuple[tuple[str, int, int], ...]

    def __repr__(self) -> str:
        """Without the bytes, which may be many."""
        return f"{len(self.data)} bytes after {self.damage}"


class Target(NamedTuple):
    """One reader and a sound file for it."""

    sound: bytes
    read: Reader


@functools.cache
def _results() -> bytes:
    """A sound results file of two densities, two realisations each."""
    setup = Setup(points=PointSource(density=60.0), region_count=2, half_width=0.4, separation=0.1)
    plan = CampaignPlan(axes=(Axis(name="density", values=(40.0, 60.0)),), realisations=2)
    preset = Preset(title="Small", sentence="A small one.", setup=setup, campaign=plan)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "sound.sqlite"
        with store.create(path, preset) as results:
            for g in range(2):
                for r in range(2):
                    results.add(realise(results.design, g, r), elapsed=1.0)
        with store.inspect(path) as results:
            estimates(results)
        return path.read_bytes()


def _read_results(data: bytes) -> object:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "odd.sqlite"
        path.write_bytes(data)
        with store.inspect(path) as results:
            return estimates(results)


def _relation(suffix: str) -> Reader:
    """Reads a causal set as a file of one kind, and checks its order."""

    def read(data: bytes) -> object:
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / f"odd{suffix}"
            path.write_bytes(data)
            return own_set(read_relation(path), close=True)

    return read


def _read_members(data: bytes) -> object:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "odd.csv"
        path.write_bytes(data)
        return read_members(path, elements=40)


def _square(*pairs: tuple[int, int]) -> bytes:
    """A relation of six elements as a NumPy file."""
    table = np.zeros((6, 6), dtype=bool)
    for i, j in pairs:
        table[i, j] = True
    file = io.BytesIO()
    np.save(file, table)
    return file.getvalue()


def _address(data: bytes) -> object:
    found = address.read_query(data.decode("latin-1"))
    assert isinstance(found.preset, Preset)
    return found


@functools.cache
def targets() -> dict[str, Target]:
    """All readers of files and addresses that come from outside, by name."""
    preset = shipped()[FIRST]
    packed = Bundle(preset, "kind,seed\npoisson,1\n", versions(), {"a.svg": b"<svg/>"})
    links = [(0, 1), (1, 3), (0, 2), (2, 4), (4, 5)]
    market = "%%MatrixMarket matrix coordinate pattern general\n6 6 5\n" + "".join(
        f"{i + 1} {j + 1}\n" for i, j in links
    )
    pairs = "earlier,later\n" + "".join(f"{i},{j}\n" for i, j in links)
    lists = "region,element\n" + "".join(f"{'AB'[k % 2]},{k}\n" for k in range(12))
    table = "t,x\n" + "".join(f"{0.01 * k},{0.007 * k - 0.3}\n" for k in range(40))
    return {
        "preset": Target(dumps(preset).encode(), parse),
        "address": Target(address.query_of(preset).encode(), _address),
        "bundle": Target(bundle.pack(packed), bundle.unpack),
        "results": Target(_results(), _read_results),
        "relation array": Target(_square(*links), _relation(".npy")),
        "relation market": Target(market.encode(), _relation(".mtx")),
        "relation table": Target(pairs.encode(), _relation(".csv")),
        "relation regions": Target(lists.encode(), _read_members),
        "points": Target(table.encode(), lambda data: parse_points(data, name="odd.csv")),
    }


def read_or_refused(name: str, data: bytes) -> str:
    """Read damaged bytes; gives the refusal's words, or nothing if they were taken."""
    try:
        targets()[name].read(data)
    except InputError as error:
        return str(error) or "refused without words"
    return ""


@st.composite
def damaged(draw: st.DrawFn, name: str) -> Damaged:
    """A sound file with up to four damages: cut, flipped, removed, doubled, put in."""
    data = targets()[name].sound
    damage = []
    for _ in range(draw(st.integers(1, 4))):
        size = len(data)
        low = draw(st.integers(0, size))
        high = min(size, low + draw(st.integers(0, 60)))
        kind = draw(st.sampled_from(["cut", "flip", "remove", "double", "odd", "any"]))
        damage.append((kind, low, high))
        if kind == "cut":
            data = data[:low]
        elif kind == "flip" and low < size:
            data = (
                data[:low] + bytes([data[low] ^ (1 << draw(st.integers(0, 7)))]) + data[low + 1 :]
            )
        elif kind == "remove":
            data = data[:low] + data[high:]
        elif kind == "double":
            data = data[:high] + data[low:]
        elif kind == "odd":
            data = data[:low] + draw(st.sampled_from(ODD_BYTES)) + data[high:]
        else:
            data = data[:low] + draw(st.binary(max_size=40)) + data[high:]
    return Damaged(data, tuple(damage))


@st.composite
def odd_presets(draw: st.DrawFn) -> Damaged:
    """A preset in which some values are of another kind or size."""
    document = json.loads(targets()["preset"].sound)
    for _ in range(draw(st.integers(1, 3))):
        part: Any = document
        while isinstance(part, dict | list) and part:
            keys = sorted(part) if isinstance(part, dict) else range(len(part))
            key = draw(st.sampled_from(list(keys)))
            if not isinstance(part[key], dict | list) or draw(st.booleans()):
                part[key] = copy.deepcopy(draw(st.sampled_from(ODD_VALUES)))
                break
            part = part[key]
    return Damaged(json.dumps(document).encode("utf-8", "surrogatepass"), ())


@st.composite
def odd_addresses(draw: st.DrawFn) -> Damaged:
    """An address in which some values are of another kind or size."""
    pairs = [pair.split("=") for pair in targets()["address"].sound.decode().split("&")]
    for _ in range(draw(st.integers(1, 3))):
        value = draw(st.one_of(st.sampled_from(ODD_VALUES).map(repr), st.text(max_size=20)))
        pairs[draw(st.integers(0, len(pairs) - 1))][1] = quote(value, errors="surrogatepass")
    return Damaged("&".join("=".join(pair) for pair in pairs).encode(), ())
