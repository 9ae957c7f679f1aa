"""Bundles: what goes in comes out, and what else a zip file may hold is refused."""

from __future__ import annotations

import io
import json
import stat
import struct
import tracemalloc
import warnings
import zipfile
from collections.abc import Callable

import pytest

from lozenge_engine import bundle
from lozenge_engine.bundle import Bundle
from lozenge_engine.errors import InputError
from lozenge_engine.pipeline import versions
from lozenge_engine.presets import FIRST, shipped

FIGURES = {"scaling.svg": b"<svg/>", "slopes.tex": b"\\toprule"}


@pytest.fixture(scope="module")
def made() -> Bundle:
    return Bundle(shipped()[FIRST], "kind,seed\npoisson,1\n", versions(), FIGURES)


def rewritten(data: bytes, change: Callable[[dict[str, bytes]], None]) -> bytes:
    """The same zip with other members."""
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        parts = {name: archive.read(name) for name in archive.namelist()}
    change(parts)
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, part in parts.items():
            archive.writestr(name, part)
    return out.getvalue()


def test_what_goes_in_comes_out(made: Bundle) -> None:
    assert bundle.unpack(bundle.pack(made)) == made


def test_equal_contents_make_equal_bytes(made: Bundle) -> None:
    other = made._replace(figures=dict(reversed(FIGURES.items())))
    assert bundle.pack(made) == bundle.pack(other)


def test_a_bundle_without_samples_and_figures_is_one(made: Bundle) -> None:
    bare = made._replace(samples="", figures={})
    assert bundle.unpack(bundle.pack(bare)) == bare


@pytest.mark.parametrize(
    "name",
    ["../preset.json", "/etc/passwd", "figures/../x.svg", "figures/a/b.svg", "figures/x.exe",
     "figures\\x.svg", "extra.txt", "figures/X.SVG"],
)  # fmt: skip
def test_other_names_are_refused(made: Bundle, name: str) -> None:
    data = rewritten(bundle.pack(made), lambda parts: parts.update({name: b"x"}))
    with pytest.raises(InputError, match="the bundle"):
        bundle.unpack(data)


def test_a_file_that_is_not_in_the_contents_is_refused(made: Bundle) -> None:
    data = rewritten(bundle.pack(made), lambda parts: parts.update({"figures/more.svg": b"x"}))
    with pytest.raises(InputError, match=r"figures/more\.svg"):
        bundle.unpack(data)


@pytest.mark.parametrize("name", ["preset.json", "samples.csv", "contents.json"])
def test_a_missing_file_is_refused(made: Bundle, name: str) -> None:
    def drop(parts: dict[str, bytes]) -> None:
        del parts[name]

    with pytest.raises(InputError, match=name):
        bundle.unpack(rewritten(bundle.pack(made), drop))


def test_a_changed_sample_is_refused(made: Bundle) -> None:
    def change(parts: dict[str, bytes]) -> None:
        parts["samples.csv"] = parts["samples.csv"].replace(b"1", b"2")

    with pytest.raises(InputError, match=r"samples\.csv, which has changed"):
        bundle.unpack(rewritten(bundle.pack(made), change))


def test_a_newer_version_is_refused_in_words(made: Bundle) -> None:
    def change(parts: dict[str, bytes]) -> None:
        contents = json.loads(parts["contents.json"])
        parts["contents.json"] = json.dumps(contents | {"lozenge_bundle": 2}).encode()

    with pytest.raises(InputError, match="version 2"):
        bundle.unpack(rewritten(bundle.pack(made), change))


@pytest.mark.parametrize(
    "contents",
    [b"", b"[]", b"{}", b'{"lozenge_bundle": true}', b'{"lozenge_bundle": 1}', b"\xff",
     b'{"lozenge_bundle": 1, "files": {"preset.json": 3}, "versions": {}}',
     b'{"lozenge_bundle": 1, "files": {}, "versions": {}}', b"[" * 5000],
)  # fmt: skip
def test_contents_of_another_form_are_refused(made: Bundle, contents: bytes) -> None:
    data = rewritten(bundle.pack(made), lambda parts: parts.update({"contents.json": contents}))
    with pytest.raises(InputError):
        bundle.unpack(data)


def test_a_link_is_refused(made: Bundle) -> None:
    out = io.BytesIO(bundle.pack(made))
    with zipfile.ZipFile(out, "a") as archive:
        link = zipfile.ZipInfo("figures/link.svg")
        link.external_attr = (stat.S_IFLNK | 0o777) << 16
        archive.writestr(link, "/etc/passwd")
    with pytest.raises(InputError, match="a folder or a link"):
        bundle.unpack(out.getvalue())


def test_a_name_that_comes_twice_is_refused(made: Bundle) -> None:
    out = io.BytesIO(bundle.pack(made))
    with warnings.catch_warnings(), zipfile.ZipFile(out, "a") as archive:
        warnings.simplefilter("ignore")
        archive.writestr("preset.json", b"{}")
    with pytest.raises(InputError, match="twice"):
        bundle.unpack(out.getvalue())


def test_a_bomb_is_refused_without_unpacking_it(made: Bundle) -> None:
    bomb = rewritten(
        bundle.pack(made), lambda parts: parts.update({"figures/bomb.svg": bytes(200_000_000)})
    )
    tracemalloc.start()
    try:
        with pytest.raises(InputError, match="more than"):
            bundle.unpack(bomb)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 5_000_000


def test_a_bomb_that_lies_about_its_size_is_cut_off(made: Bundle) -> None:
    data = rewritten(
        bundle.pack(made), lambda parts: parts.update({"samples.csv": bytes(30_000_000)})
    )
    # The central directory's record claims ten bytes.
    at = data.rindex(b"samples.csv") - 46
    lie = bytearray(data)
    lie[at + 24 : at + 28] = struct.pack("<I", 10)
    tracemalloc.start()
    try:
        with pytest.raises(InputError):
            bundle.unpack(bytes(lie))
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 5_000_000


def test_every_truncation_is_refused(made: Bundle) -> None:
    data = bundle.pack(made)
    for size in range(0, len(data), 97):
        with pytest.raises(InputError):
            bundle.unpack(data[:size])


def test_a_figure_of_another_kind_is_refused_when_it_is_packed(made: Bundle) -> None:
    with pytest.raises(InputError, match=r"a file"):
        bundle.pack(made._replace(figures={"run.sh": b"x"}))
