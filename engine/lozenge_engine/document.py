"""JSON documents from outside, read strictly, and files written whole or not at all."""

from __future__ import annotations

import contextlib
import json
import math
import os
import re
import secrets
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any, NoReturn

from lozenge_engine.errors import InputError, refuse

__all__ = [
    "MAX_BYTES",
    "check_writable",
    "parse_json",
    "path_text",
    "read_bytes",
    "shown",
    "write_bytes",
]

MAX_BYTES = 1_000_000
"""Largest document that is read."""
MAX_DEPTH = 16
"""Deepest nesting that is looked at."""

Key = str | int


class _Duplicates(dict[str, Any]):
    """An object in which a key came twice."""

    twice: str = ""


def path_text(path: Iterable[Key]) -> str:
    """Write the path of a key, like ``regions.list[1].half_width``.

    Parameters
    ----------
    path : iterable of str or int
        Keys and list indices from the top.

    Returns
    -------
    str
        One line; keys with unusual characters are quoted; ``the preset`` for the top itself.
    """
    text = ""
    for key in path:
        if isinstance(key, int):
            text += f"[{key}]"
        elif re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]{0,59}", key):
            text += f".{key}"
        else:
            text += f".{shown(key)}"
    return text.removeprefix(".") or "the preset"


def shown(value: object) -> str:
    """Write a value of a document as JSON on one short line.

    Parameters
    ----------
    value : object
        What was found in a document.

    Returns
    -------
    str
        At most 60 ASCII characters.
    """
    text = json.dumps(value, ensure_ascii=True, default=repr)
    return text if len(text) <= 60 else text[:57] + "..."


def read_bytes(path: Path, *, limit: int = MAX_BYTES) -> bytes:
    """Read a small file, whose size is looked at before it is read.

    Parameters
    ----------
    path : Path
        The file.
    limit : int
        Most bytes that are read.

    Returns
    -------
    bytes
        Its contents.

    Raises
    ------
    InputError
        If there is no such file, it is a directory, larger than the limit or unreadable.
    """
    where = str(path)
    try:
        size = path.stat().st_size
        if size > limit:
            raise _too_large(where, size, limit)
        with path.open("rb") as file:
            data = file.read(limit + 1)
    except FileNotFoundError as error:
        raise refuse(
            where, given="no such file", allowed="a preset file", do="check the path"
        ) from error
    except IsADirectoryError as error:
        raise refuse(
            where, given="a directory", allowed="a preset file", do="name a file in it"
        ) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise refuse(
            where, given=reason, allowed="a readable file", do="check the path and its rights"
        ) from error
    if len(data) > limit:
        raise _too_large(where, len(data), limit)
    return data


def _too_large(where: str, size: int, limit: int) -> InputError:
    return refuse(
        where,
        given=f"{size / 1e6:.1f} MB or more",
        allowed=f"at most {limit / 1e6:g} MB",
        do="give a preset file: points belong into their own CSV file",
    )


def parse_json(text: str | bytes) -> Any:
    """Parse JSON strictly: no duplicate keys, no NaN or infinity, no lone surrogates.

    Parameters
    ----------
    text : str or bytes
        The document; bytes are UTF-8, a byte order mark is skipped.

    Returns
    -------
    dict, list, str, int, float, bool or None
        The document.

    Raises
    ------
    InputError
        With the path of the offending key, or the line and column where it is no JSON.
    """
    if len(text) > MAX_BYTES:
        raise _too_large("the preset", len(text), MAX_BYTES)
    if isinstance(text, bytes):
        try:
            text = text.decode("utf-8")
        except UnicodeDecodeError as error:
            raise refuse(
                "the preset",
                given=f"bytes that are not UTF-8, the first at {error.start}",
                allowed="JSON in UTF-8",
                do="save it as UTF-8 or get the file again",
            ) from error
    text = text.removeprefix("\ufeff")
    try:
        document = json.loads(text, object_pairs_hook=_object)
    except json.JSONDecodeError as error:
        raise _no_json(text, error) from error
    except RecursionError as error:
        raise _too_deep("the preset") from error
    except ValueError as error:  # a whole number of more than 4300 digits
        raise refuse(
            "the preset",
            given="a whole number of thousands of digits",
            allowed="numbers that a double holds",
            do="shorten it",
        ) from error
    _check_values(document)
    return document


def _object(pairs: Sequence[tuple[str, Any]]) -> dict[str, Any]:
    """Build an object; one with a key that came twice remembers it, for `_check_values`."""
    made = dict(pairs)
    if len(made) == len(pairs):
        return made
    marked = _Duplicates(made)
    keys = [key for key, _ in pairs]
    marked.twice = next(key for k, key in enumerate(keys) if key in keys[:k])
    return marked


def _no_json(text: str, error: json.JSONDecodeError) -> InputError:
    """Say where the text stops being JSON, or that it ends too early."""
    if not text.strip():
        given = "an empty file"
    elif error.pos >= len(text.rstrip()) or error.msg.startswith("Unterminated string"):
        given = f"text that ends in the middle of a value, at line {error.lineno}"
    else:
        given = f"no JSON at line {error.lineno}, column {error.colno} ({error.msg})"
    return refuse(
        "the preset",
        given=given,
        allowed="one whole JSON object",
        do="correct it there, or get the file again",
    )


def _too_deep(where: str) -> InputError:
    return refuse(
        where,
        given="very deep nesting",
        allowed=f"at most {MAX_DEPTH} levels",
        do="remove what does not belong to a preset",
    )


def _check_values(document: object) -> None:
    """Refuse what JSON's grammar or Python's reader lets through and a preset cannot hold."""
    stack: list[tuple[tuple[Key, ...], object]] = [((), document)]
    while stack:
        path, value = stack.pop()
        if len(path) > MAX_DEPTH:
            raise _too_deep(path_text(path[:MAX_DEPTH]))
        if isinstance(value, _Duplicates):
            raise refuse(
                path_text((*path, value.twice)),
                given="this key twice",
                allowed="each key once",
                do="remove one of them",
            )
        if isinstance(value, dict):
            for key in value:
                _check_text(path, key)
            stack += [((*path, key), item) for key, item in reversed(value.items())]
        elif isinstance(value, list):
            stack += [((*path, k), item) for k, item in reversed(list(enumerate(value)))]
        elif isinstance(value, str):
            _check_text(path, value)
        elif isinstance(value, float) and not math.isfinite(value):
            _refuse_number(path, value)


def _check_text(path: tuple[Key, ...], text: str) -> None:
    try:
        text.encode("utf-8")
    except UnicodeEncodeError as error:
        raise refuse(
            path_text(path),
            given=f"text with half a surrogate pair, {shown(text)}",
            allowed="Unicode text",
            do="write the text again",
        ) from error


def _refuse_number(path: tuple[Key, ...], value: float) -> NoReturn:
    raise refuse(
        path_text(path),
        given="NaN" if math.isnan(value) else "a number beyond the range of doubles",
        allowed="a finite number",
        do="give a finite number",
    )


def check_writable(path: Path) -> None:
    """Check that a file can be written, without touching it.

    Parameters
    ----------
    path : Path
        The file that is going to be written.

    Raises
    ------
    InputError
        If its folder does not exist or takes no files, or the path is a directory.
    """
    trial = _neighbour(_target(path))
    try:
        trial.touch(exist_ok=False)
        trial.unlink()
    except (OSError, ValueError) as error:
        raise _unwritable(path, error) from error


def write_bytes(path: Path, data: bytes) -> None:
    """Write a file whole or not at all: a new file in the same folder takes its place.

    Parameters
    ----------
    path : Path
        The file; a symbolic link is followed.
    data : bytes
        Its contents.

    Raises
    ------
    InputError
        If it cannot be written; what was there stays as it was.
    """
    target = _target(path)
    trial = _neighbour(target)
    try:
        with trial.open("xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        if target.exists():
            trial.chmod(target.stat().st_mode & 0o7777)
        trial.replace(target)
    except (OSError, ValueError) as error:
        raise _unwritable(path, error) from error
    finally:
        with contextlib.suppress(OSError, ValueError):
            trial.unlink()


def _target(path: Path) -> Path:
    """The regular file that is meant, behind symbolic links, existing or not yet."""
    try:
        target = Path(os.path.realpath(path))
        special = target.exists() and not target.is_file()
    except (OSError, ValueError) as error:
        raise _unwritable(path, error) from error
    if special:
        kind = "a directory" if target.is_dir() else "a device or a pipe"
        raise refuse(str(path), given=kind, allowed="a file to write", do="give a file name")
    return target


def _neighbour(target: Path) -> Path:
    """A name in the same folder that nothing has."""
    return target.parent / f".lozenge-{secrets.token_hex(8)}.part"


def _unwritable(path: Path, error: Exception) -> InputError:
    reason = getattr(error, "strerror", None) or str(error)
    return refuse(
        str(path),
        given=f"a path that cannot be written ({reason})",
        allowed="a file in a folder that exists and takes files",
        do="choose another path",
    )
