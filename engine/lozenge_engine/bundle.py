"""Bundles: one zip with a preset, the samples that were computed from it, versions and figures.

A bundle comes from somebody else.  It is read in memory and never unpacked to the disk; every
member has to be named in its table of contents, with its size and hash.
"""

from __future__ import annotations

import hashlib
import io
import json
import re
import stat
import zipfile
import zlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

from lozenge_engine.document import parse_json, read_bytes, shown, write_bytes
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.presets import Preset, dumps, parse

__all__ = ["FORMAT", "MAX_BYTES", "SUFFIX", "Bundle", "pack", "read", "unpack", "write"]

FORMAT = 1
SUFFIX = ".zip"
MAX_BYTES = 60_000_000
"""Of the zip file, and of all that it holds when unpacked."""
MAX_MEMBERS = 64
CONTENTS = "contents.json"
PRESET = "preset.json"
SAMPLES = "samples.csv"
LIMITS = {CONTENTS: 100_000, PRESET: 1_000_000, SAMPLES: 50_000_000}
FIGURE = re.compile(r"figures/[a-z0-9][a-z0-9-]{0,60}\.(?:svg|pdf|png|csv|tex|txt)")
FIGURE_LIMIT = 10_000_000
CHUNK = 1 << 16
EPOCH = (1980, 1, 1, 0, 0, 0)
"""Time of all members: equal contents make equal bytes."""


class Bundle(NamedTuple):
    """What a bundle holds.

    Attributes
    ----------
    preset : Preset
        With the sender's numbers, if it holds any.
    samples : str
        Samples of its campaign as CSV, as `lozenge results --csv` writes them; empty for none.
    versions : mapping of str to str
        Of Python, the libraries and the program that made it.
    figures : mapping of str to bytes
        Figures and tables by their names, without a folder; never opened here.
    """

    preset: Preset
    samples: str
    versions: Mapping[str, str]
    figures: Mapping[str, bytes]


def pack(bundle: Bundle) -> bytes:
    """Write a bundle as the bytes of a zip file.

    Parameters
    ----------
    bundle : Bundle
        What goes into it.

    Returns
    -------
    bytes
        Equal for equal contents, with the same zlib.

    Raises
    ------
    InputError
        If it would be too large to be read again, or a figure has another kind of name.

    Notes
    -----
    Cost: about 20 ns and three bytes of memory for each byte.
    """
    parts = {PRESET: dumps(bundle.preset).encode()}
    if bundle.samples:
        parts[SAMPLES] = bundle.samples.encode()
    parts |= {f"figures/{name}": data for name, data in sorted(bundle.figures.items())}
    for name, data in parts.items():
        _check_member(name, len(data))
    if len(parts) >= MAX_MEMBERS:
        raise refuse(
            "the bundle",
            given=f"{len(parts)} files",
            allowed=f"at most {MAX_MEMBERS - 1}",
            do="leave figures out",
        )
    contents = {
        "lozenge_bundle": FORMAT,
        "versions": dict(sorted(bundle.versions.items())),
        "files": {
            name: {"bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}
            for name, data in parts.items()
        },
    }
    parts = {CONTENTS: (json.dumps(contents, indent=2) + "\n").encode(), **parts}
    if sum(map(len, parts.values())) > MAX_BYTES:
        raise _too_large("the bundle")
    made = io.BytesIO()
    with zipfile.ZipFile(made, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, data in parts.items():
            member = zipfile.ZipInfo(name, EPOCH)
            member.compress_type = zipfile.ZIP_DEFLATED
            member.external_attr = (stat.S_IFREG | 0o644) << 16
            archive.writestr(member, data)
    return made.getvalue()


def write(path: Path, bundle: Bundle) -> None:
    """Write a bundle, whole or not at all.

    Parameters
    ----------
    path : Path
        The file.
    bundle : Bundle
        What goes into it.

    Raises
    ------
    InputError
        As for `pack`, or if the file cannot be written.
    """
    write_bytes(path, pack(bundle))


def read(path: Path) -> Bundle:
    """Read a bundle from its file.

    Parameters
    ----------
    path : Path
        At most 60 MB.

    Returns
    -------
    Bundle
        Checked.

    Raises
    ------
    InputError
        As for `unpack`, or if the file cannot be read.
    """
    return unpack(read_bytes(path, limit=MAX_BYTES))


def unpack(data: bytes) -> Bundle:
    """Read a bundle from the bytes of a zip file.

    Parameters
    ----------
    data : bytes
        The file.

    Returns
    -------
    Bundle
        Its members are those of its table of contents, each with the size and hash named there.

    Raises
    ------
    InputError
        If it is no bundle, is damaged, of a newer version, larger than allowed, or holds what a
        bundle does not hold: folders, links, paths, other files, a preset that is refused.

    Notes
    -----
    Cost: at most `MAX_BYTES` of memory beyond the file, whatever the zip claims.
    """
    if len(data) > MAX_BYTES:
        raise _too_large("the bundle")
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            members = _members(archive)
            contents = _contents(_taken(archive, members[CONTENTS]))
            parts = _parts(archive, members, contents["files"])
    except (zipfile.BadZipFile, zlib.error, EOFError, OSError, ValueError) as error:
        if isinstance(error, InputError):
            raise
        raise _no_bundle(f"no readable zip file ({error})") from error
    except (NotImplementedError, RuntimeError) as error:
        raise _no_bundle(f"a zip file of another kind ({error})") from error
    try:
        samples = parts.get(SAMPLES, b"").decode("utf-8")
    except UnicodeDecodeError as error:
        raise _no_bundle("samples that are no UTF-8 text") from error
    return Bundle(
        parse(parts[PRESET]),
        samples,
        contents["versions"],
        {
            name.removeprefix("figures/"): part
            for name, part in parts.items()
            if name.startswith("figures/")
        },
    )


# ---------------------------------------------------------------- members


def _members(archive: zipfile.ZipFile) -> dict[str, zipfile.ZipInfo]:
    """The members by name, when a bundle may hold them all."""
    listed = archive.infolist()
    if len(listed) > MAX_MEMBERS:
        raise _no_bundle(f"{len(listed)} files, more than {MAX_MEMBERS}")
    members: dict[str, zipfile.ZipInfo] = {}
    for member in listed:
        name = member.filename
        kind = stat.S_IFMT(member.external_attr >> 16)
        if kind not in (0, stat.S_IFREG) or member.is_dir():
            raise _no_bundle(f"{shown(name)}, which is a folder or a link")
        if member.flag_bits & 0x1:
            raise _no_bundle(f"{shown(name)}, which is encrypted")
        if member.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED):
            raise _no_bundle(f"{shown(name)}, compressed by another method")
        if name in members:
            raise _no_bundle(f"{shown(name)} twice")
        _check_member(name, member.file_size)
        members[name] = member
    if sum(member.file_size for member in listed) > MAX_BYTES:
        raise _too_large("the bundle, unpacked,")
    missing = [name for name in (CONTENTS, PRESET) if name not in members]
    if missing:
        raise _no_bundle(f"a zip file without {missing[0]}")
    return members


def _check_member(name: str, size: int) -> None:
    """Refuse a name that a bundle does not hold, or a file larger than such a file may be."""
    if name not in LIMITS and not FIGURE.fullmatch(name):
        raise _no_bundle(f"a file {shown(name)}")
    if size > LIMITS.get(name, FIGURE_LIMIT):
        raise _too_large(name)


def _taken(archive: zipfile.ZipFile, member: zipfile.ZipInfo) -> bytes:
    """Unpack one member, no further than the size that it claims."""
    found = bytearray()
    with archive.open(member) as file:
        while chunk := file.read(CHUNK):
            found += chunk
            if len(found) > member.file_size:
                raise _no_bundle(f"{member.filename}, which is larger than it claims")
    return bytes(found)


def _contents(data: bytes) -> dict[str, Any]:
    """The table of contents, in the form that `pack` gives it."""
    found = parse_json(data)
    if not isinstance(found, dict) or not isinstance(found.get("lozenge_bundle"), int):
        raise _no_bundle(f"a {CONTENTS} without lozenge_bundle")
    if found["lozenge_bundle"] != FORMAT:
        raise refuse(
            "the bundle",
            given=f"version {shown(found['lozenge_bundle'])}",
            allowed=f"version {FORMAT}",
            do="open it with the version of Lozenge that made it, or a newer one",
        )
    files, versions = found.get("files"), found.get("versions")
    sound = isinstance(files, dict) and all(
        isinstance(entry, dict)
        and type(entry.get("bytes")) is int
        and isinstance(entry.get("sha256"), str)
        for entry in files.values()
    )
    named = isinstance(versions, dict) and all(isinstance(v, str) for v in versions.values())
    if not (sound and named):
        raise _no_bundle(f"a {CONTENTS} of another form")
    return found


def _parts(
    archive: zipfile.ZipFile, members: Mapping[str, zipfile.ZipInfo], files: Mapping[str, Any]
) -> dict[str, bytes]:
    """Every member but the contents, each as the contents describe it."""
    if {*files} != {*members} - {CONTENTS}:
        odd = sorted({*files} ^ ({*members} - {CONTENTS}))[0]
        raise _no_bundle(f"files that are not those of its {CONTENTS} ({shown(odd)})")
    parts = {}
    for name, entry in files.items():
        part = _taken(archive, members[name])
        if len(part) != entry["bytes"] or hashlib.sha256(part).hexdigest() != entry["sha256"]:
            raise _no_bundle(f"{name}, which has changed since the bundle was made")
        parts[name] = part
    return parts


def _no_bundle(given: str) -> InputError:
    return refuse(
        "the bundle",
        given=given,
        allowed=f"a bundle as it was made: {CONTENTS}, {PRESET}, {SAMPLES} and figures",
        do="get the file again",
    )


def _too_large(where: str) -> InputError:
    limit = LIMITS.get(where, MAX_BYTES if where.startswith("the bundle") else FIGURE_LIMIT)
    return refuse(
        where,
        given=f"more than {limit / 1e6:g} MB",
        allowed=f"at most {limit / 1e6:g} MB",
        do="send the results file itself for more samples than that",
    )
