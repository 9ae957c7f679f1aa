"""Files to and from the browser."""

from __future__ import annotations

import base64

import pytest
from tests.dashboard.scenes import SMALL, bare

from lozenge_dashboard.controls import PRESET_LIMIT
from lozenge_dashboard.exchange import Uploads, as_preset, check_size, file_name
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.presets import FIRST, ViewState, compare, dumps, parse, shipped


def part(data: bytes, *, first: bool, last: bool, purpose: str = "preset") -> dict[str, object]:
    """A message as the browser sends it."""
    return {
        "purpose": purpose,
        "name": "a.json",
        "size": 10,
        "first": first,
        "last": last,
        "data": base64.b64encode(data).decode(),
    }


def test_parts_are_joined_in_order() -> None:
    uploads = Uploads()
    assert uploads.take(part(b"ab", first=True, last=False)) is None
    assert uploads.take(part(b"cd", first=False, last=False)) is None
    upload = uploads.take(part(b"e", first=False, last=True))
    assert upload is not None
    assert upload.data == b"abcde"


def test_first_part_drops_what_an_earlier_file_left() -> None:
    uploads = Uploads()
    uploads.take(part(b"old", first=True, last=False))
    upload = uploads.take(part(b"new", first=True, last=True))
    assert upload is not None
    assert upload.data == b"new"


def test_too_large_files_are_refused_before_and_while_they_come() -> None:
    uploads = Uploads()
    with pytest.raises(InputError, match="at most"):
        uploads.take({**part(b"", first=True, last=True), "data": None})
    block = b"x" * (PRESET_LIMIT // 2 + 10)
    uploads.take(part(block, first=True, last=False))
    with pytest.raises(InputError, match="at most"):
        uploads.take(part(block, first=False, last=False))


def test_damaged_part_is_refused() -> None:
    with pytest.raises(InputError, match="damaged"):
        Uploads().take({**part(b"", first=True, last=True), "data": "%%%"})


def test_saved_screen_reads_back_and_agrees_with_itself() -> None:
    view = ViewState(theme="dark", focus="scaling", union_rule="direct_sum", scaling_axis="size")
    scene = bare()
    saved = as_preset(shipped()[FIRST], SMALL, view, scene.result)
    again = parse(dumps(saved))
    assert again.view == view
    assert again.setup.config() == SMALL.config()
    assert dumps(again) == dumps(saved)
    assert compare(again, scene.result).agrees


def test_file_name_comes_from_the_title() -> None:
    name = file_name(shipped()[FIRST])
    assert name.endswith(".json")
    assert name.replace("-", "").removesuffix(".json").isalnum()


def test_page_names_the_command_line_for_what_is_too_large() -> None:
    check_size(Setup(points=PointSource(density=10_000.0)))
    with pytest.raises(InputError, match="lozenge run"):
        check_size(Setup(points=PointSource(density=10_001.0)))
