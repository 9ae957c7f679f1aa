"""The state of the page as the query of a web address, and back.

One key for each value, by the name that a preset file gives it, all of them written:
``v=1&title=...&kind=poisson&density=1000.0&seed=22&count=2&...``.  What is read goes through the
same schema and the same checks as a preset file.  A value that is refused is named and left at the
value of the preset that the program opens with; the others hold.
"""

from __future__ import annotations

import functools
import json
import re
from collections.abc import Iterator, Mapping
from typing import Any, NamedTuple
from urllib.parse import parse_qsl, urlencode

from lozenge_engine.config import Rule, Setup
from lozenge_engine.document import shown
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.presets import FIRST, Preset, dumps, parse, shipped

__all__ = ["FORMAT", "LONGEST", "Arrival", "query_of", "read_query"]

FORMAT = 1
LONGEST = 8000
"""Characters of a query, at most; browsers and servers take more."""
VERSION_KEY = "v"
LIST_KEY = "list"
REGION = ("t0", "x0", "half_width", "boost")
TEXTS = ("title", "sentence")
SECTIONS = ("points", "mass", "regions", "truncation", "order", "averaging", "sweeps", "view")
NUMBER = re.compile(r"-?(?:0|[1-9]\d{0,30})(?:\.\d{1,30})?(?:[eE][-+]?\d{1,3})?")
WORDS = {"true": True, "false": False, "null": None}
Path = tuple[str, ...]


class Arrival(NamedTuple):
    """What an address says.

    Attributes
    ----------
    preset : Preset
        Checked; without the sender's numbers.
    faults : tuple of str
        What could not be taken, each with what is allowed.
    """

    preset: Preset
    faults: tuple[str, ...]


def query_of(preset: Preset) -> str:
    """Write a screen as the query of an address.

    Parameters
    ----------
    preset : Preset
        Its campaign, its other sections and the sender's numbers are left out.

    Returns
    -------
    str
        Without the question mark; equal screens give equal queries.
    """
    document = json.loads(dumps(preset))
    pairs = [(VERSION_KEY, str(FORMAT))]
    if document.get("invented"):
        pairs.append(("invented", "true"))
    pairs += [(name, document[name]) for name in TEXTS]
    names = {path: key for key, path in _keys().items()}
    for path, value in _leaves(document):
        if path == ("regions", "list"):
            text = ";".join(",".join(map(_written, map(r.get, REGION))) for r in value)
            pairs.append((LIST_KEY, text))
        else:
            pairs.append((names[path], value if isinstance(value, str) else _written(value)))
    return urlencode(pairs, safe=",;")


def read_query(query: str) -> Arrival:
    """Read the query of an address.

    Parameters
    ----------
    query : str
        Without the question mark, from anywhere; at most 8 000 characters.

    Returns
    -------
    Arrival
        The preset that the program opens with, changed by every value that can be taken.

    Raises
    ------
    InputError
        If it is too long, of a newer version, or no query at all; nothing can be taken then.

    Notes
    -----
    Cost: about 3 ms; up to 0.2 s for an address that is refused as a whole.
    """
    given = _pairs(query)
    base = json.loads(_base())
    faults: list[str] = []
    values: dict[Path, Any] = {}
    for name, text in given.items():
        try:
            values[_path(name)] = _value(name, text)
        except InputError as error:
            faults.append(str(error))
    if ("regions", "list") in values:
        for path in [path for path in values if path[:2] == ("regions", "row")]:
            faults.append(f"{path[-1]}: given beside a list of regions; allowed is one of the two")
            del values[path]
    while True:
        try:
            return Arrival(parse(json.dumps(_document(base, values))), tuple(faults))
        except InputError as error:
            refused = _culprits(base, values, str(error))
            faults.append(str(error))
            for path in refused:
                del values[path]


@functools.cache
def _base() -> str:
    """The document of the preset that the program opens with, under no name."""
    base = json.loads(dumps(shipped()[FIRST]))
    for part in ("campaign", "evidence", "sender"):
        base.pop(part, None)
    base |= {"title": "From an address", "sentence": "No preset is named.", "invented": False}
    return json.dumps(base)


# ---------------------------------------------------------------- names


@functools.cache
def _keys() -> dict[str, Path]:
    """The path of every key: the last name of the path where only one path ends with it."""
    custom = Rule(kind="fixed_number")
    setups = (Setup(), Setup(truncation_mode="custom", patch_rule=custom, region_rule=custom))
    paths: dict[Path, None] = {}
    for setup in setups:
        document = json.loads(dumps(Preset(title="-", sentence="-", setup=setup)))
        paths |= dict.fromkeys(path for path, _ in _leaves(document))
    paths |= dict.fromkeys(_optional())
    last = [path[-1] for path in paths]
    return {
        path[-1] if last.count(path[-1]) == 1 or len(path) == 1 else ".".join(path[-2:]): path
        for path in paths
    }


def _optional() -> Iterator[Path]:
    """Paths of the values that a preset file leaves out where they say nothing."""
    from lozenge_engine.schema import load_schema

    properties: Any = load_schema()["properties"]
    for section in ("points", "view"):
        schema = properties[section]
        if "$ref" in schema:
            schema = load_schema()["$defs"][schema["$ref"].rsplit("/", 1)[1]]
        for key in schema["properties"]:
            yield section, key


def _leaves(document: Mapping[str, Any]) -> Iterator[tuple[Path, Any]]:
    """Path and value of everything in the sections of a screen; a list of regions is one value."""
    stack: list[tuple[Path, Any]] = [((name,), document[name]) for name in reversed(SECTIONS)]
    while stack:
        path, value = stack.pop()
        if isinstance(value, dict):
            stack += [((*path, key), part) for key, part in reversed(value.items())]
        else:
            yield path, value


# ---------------------------------------------------------------- text -> values


def _pairs(query: str) -> dict[str, str]:
    """Names and texts of a query of this version."""
    if len(query) > LONGEST:
        raise refuse(
            "the address",
            given=f"{len(query)} characters",
            allowed=f"at most {LONGEST}",
            do="copy the address again, or save a preset file instead",
        )
    try:
        found = parse_qsl(
            query, keep_blank_values=True, strict_parsing=True, errors="strict", max_num_fields=200
        )
    except ValueError as error:
        raise refuse(
            "the address",
            given=shown(query),
            allowed="the address as the page wrote it",
            do="copy it again",
        ) from error
    given = dict(found)
    if len(given) < len(found):
        twice = next(name for k, (name, _) in enumerate(found) if name in dict(found[:k]))
        raise refuse(
            "the address", given=f"{shown(twice)} twice", allowed="each once", do="copy it again"
        )
    version = given.pop(VERSION_KEY, None)
    if version != str(FORMAT):
        raise refuse(
            "the address",
            given="no version" if version is None else f"version {shown(version)}",
            allowed=f"version {FORMAT}",
            do="open it with the version of Lozenge that made it",
        )
    return given


def _path(name: str) -> Path:
    if name == LIST_KEY:
        return "regions", "list"
    if name in (*TEXTS, "invented"):
        return (name,)
    path = _keys().get(name)
    if path is None:
        raise refuse(
            "the address",
            given=f"{shown(name)}, which is not known here",
            allowed="the names that the page writes",
            do="copy the address again",
        )
    return path


def _value(name: str, text: str) -> Any:
    """A value of the kind that its text has; whether it may be so the schema decides."""
    if name in TEXTS:
        return text
    if name == LIST_KEY:
        return [_region(k, part) for k, part in enumerate(text.split(";"))]
    if text in WORDS:
        return WORDS[text]
    return _number(text) if NUMBER.fullmatch(text) else text


def _number(text: str) -> int | float:
    return float(text) if {*text} & {*".eE"} else int(text)


def _region(k: int, text: str) -> dict[str, Any]:
    parts = text.split(",")
    if len(parts) != len(REGION) or not all(map(NUMBER.fullmatch, parts)):
        raise refuse(
            f"{LIST_KEY}, entry {k + 1}",
            given=shown(text),
            allowed="t0,x0,half_width,boost",
            do="give four numbers",
        )
    return dict(zip(REGION, map(_number, parts), strict=True))


def _written(value: Any) -> str:
    """A number in its shortest form, or one of the words of JSON."""
    return json.dumps(value)


# ---------------------------------------------------------------- values -> preset


def _document(base: Mapping[str, Any], values: Mapping[Path, Any]) -> dict[str, Any]:
    """The base with some values changed."""
    document: dict[str, Any] = json.loads(json.dumps(base))
    if ("regions", "list") in values:
        document["regions"] = {}
    if values.get(("truncation", "mode")) == "custom" or any(len(p) == 3 for p in values
                                                            if p[0] == "truncation"):  # fmt: skip
        rules = {key: _plain_rule() for key in ("patch_rule", "region_rule")}
        document["truncation"] = {"mode": "custom", **rules}
    for path, value in values.items():
        part = document
        for key in path[:-1]:
            part = part.setdefault(key, {})
        part[path[-1]] = value
    return document


def _plain_rule() -> dict[str, Any]:
    rule = Rule()
    return {"kind": rule.kind, "alpha": rule.alpha, "number": rule.number}


def _culprits(base: Mapping[str, Any], values: Mapping[Path, Any], error: str) -> list[Path]:
    """What to leave out of values that are refused: one of them if that is enough."""
    named = [path for path in values if error.startswith((".".join(path), f"{path[-1]}:"))]
    if named:
        return [max(named, key=len)]
    for path in reversed(list(values)):
        rest = {other: value for other, value in values.items() if other != path}
        try:
            parse(json.dumps(_document(base, rest)))
        except InputError:
            continue
        return [path]
    together = [path for path in values if path[0] == "regions"]
    return together or list(values)
