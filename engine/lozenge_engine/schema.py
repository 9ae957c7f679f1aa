"""The JSON Schema of preset files, and what its verdicts mean to the person who wrote one."""

from __future__ import annotations

import difflib
import functools
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from jsonschema import Draft202012Validator
from jsonschema.exceptions import ValidationError, best_match

from lozenge_engine.document import path_text, shown
from lozenge_engine.errors import InputError, refuse

__all__ = ["FORMAT", "FORMAT_KEY", "check_document", "folder", "load_schema"]

FORMAT = 1
"""The version of the preset format that is read and written."""
FORMAT_KEY = "lozenge_preset"
SCHEMA_NAME = "preset.schema.json"


def folder() -> Path:
    """Folder of the shipped presets: inside the installed package, or of the source tree.

    Returns
    -------
    Path
        It holds the presets and their schema.
    """
    here = Path(__file__).resolve()
    installed = here.parent / "_presets"
    return installed if installed.is_dir() else here.parents[2] / "presets"


@functools.cache
def load_schema() -> Mapping[str, Any]:
    """Read the schema.

    Returns
    -------
    mapping
        A JSON Schema, Draft 2020-12.
    """
    schema: dict[str, Any] = json.loads((folder() / SCHEMA_NAME).read_text(encoding="utf-8"))
    return schema


@functools.cache
def _validator() -> Any:
    return Draft202012Validator(load_schema())


def check_document(document: object) -> None:
    """Check a parsed document against the version and the schema of preset files.

    Parameters
    ----------
    document : object
        What `document.parse_json` returns.

    Raises
    ------
    InputError
        For the most telling disagreement, with the path of its key.
    """
    if isinstance(document, dict) and FORMAT_KEY in document:
        version = document[FORMAT_KEY]
        if isinstance(version, bool) or version != FORMAT:
            raise refuse(
                FORMAT_KEY,
                given=shown(version),
                allowed=f"{FORMAT}, the version of the format that this program reads",
                do="install the program that wrote the file, or save the preset again here",
            )
    error = best_match(_validator().iter_errors(document))
    if error is not None:
        raise _explained(error)


def _explained(error: ValidationError) -> InputError:
    """Turn the validator's finding into a refusal."""
    path = tuple(error.absolute_path)
    rule = error.validator
    if rule == "additionalProperties":
        known = list(error.schema["properties"])
        key = next(k for k in error.instance if k not in known)
        near = difflib.get_close_matches(key, known, n=1)
        return refuse(
            path_text((*path, key)),
            given="a key that is not known here",
            allowed=", ".join(known),
            do=f"write {near[0]} instead" if near else "remove it",
        )
    if rule == "required":
        key = next(k for k in error.validator_value if k not in error.instance)
        wanted = error.schema.get("properties", {}).get(key, {})
        return refuse(
            path_text((*path, key)), given="nothing", allowed=_allowed(wanted), do="add this key"
        )
    if not path:
        keys = ", ".join(error.schema["required"])
        return refuse(
            path_text(path),
            given=shown(error.instance),
            allowed=f"an object with the keys {keys}",
            do="give a preset file",
        )
    return refuse(
        path_text(path),
        given=shown(error.instance),
        allowed=_allowed(error.schema),
        do="remove it" if rule == "not" else _remedy(rule, path),
    )


def _remedy(rule: str, path: tuple[str | int, ...]) -> str:
    last = path_text(path[-1:]) if isinstance(path[-1], str) else "it"
    if rule == "oneOf":
        return "give one of them"
    return f"change {last}"


def _allowed(schema: Mapping[str, Any]) -> str:
    """Say in words what a part of the schema allows."""
    schema = _resolved(schema)
    if "const" in schema:
        return shown(schema["const"])
    if "enum" in schema:
        return ", ".join("null" if x is None else str(x) for x in schema["enum"])
    note: str = schema.get("description", "")
    kind = _kind(schema)
    return f"{kind} ({note})" if kind and note else kind or note or "another value"


_KINDS = {
    "integer": "a whole number",
    "number": "a number",
    "string": "text",
    "boolean": "true or false",
    "object": "an object",
    "array": "a list",
    "null": "null",
}


def _kind(schema: Mapping[str, Any]) -> str:
    """Type and range in words."""
    types = schema.get("type", ())
    types = [types] if isinstance(types, str) else types
    text = " or ".join(_KINDS[t] for t in types)
    low, high = schema.get("minimum"), schema.get("maximum")
    if low is None and "exclusiveMinimum" in schema:
        return f"{text} above {schema['exclusiveMinimum']} and up to {high}"
    if low is not None and high is not None:
        return f"{text} from {low} to {high}"
    if "maxItems" in schema:
        return f"{text} of {schema.get('minItems', 0)} to {schema['maxItems']} entries"
    if "maxLength" in schema:
        return f"{text} of {schema.get('minLength', 0)} to {schema['maxLength']} characters"
    return text


def _resolved(schema: Mapping[str, Any]) -> Mapping[str, Any]:
    """Follow a reference into the schema's own definitions."""
    reference = schema.get("$ref")
    if reference is None:
        return schema
    target: Mapping[str, Any] = load_schema()
    for key in reference.removeprefix("#/").split("/"):
        target = target[key]
    return {**target, **{k: v for k, v in schema.items() if k != "$ref"}}
