"""Check the engine's public docstrings with numpydoc, on the imported objects.

On the objects, because the fields of dataclasses and named tuples are parameters there, which a
reader of the source text takes for unknown ones.  The checks are those of
[tool.numpydoc_validation].  A one-line docstring may do for what takes no parameters; a reactive
parameter is documented by its own doc.  That every module has a docstring is ruff's affair.
"""

from __future__ import annotations

import importlib
import inspect
import pkgutil
import sys
import tomllib
from collections.abc import Iterator
from functools import cached_property
from pathlib import Path
from types import ModuleType

import param
from numpydoc.docscrape import NumpyDocString
from numpydoc.validate import validate

import lozenge_engine

ROOT = Path(__file__).resolve().parents[1]


def modules() -> Iterator[ModuleType]:
    yield lozenge_engine
    for found in pkgutil.walk_packages(lozenge_engine.__path__, "lozenge_engine."):
        yield importlib.import_module(found.name)


def public_members(owner: type) -> Iterator[str]:
    for name, value in vars(owner).items():
        if not name.startswith("_") and (
            inspect.isfunction(value)
            or isinstance(value, property | cached_property | classmethod | staticmethod)
        ):
            yield name


def public_names(module: ModuleType) -> Iterator[str]:
    """Import paths of the functions and classes in __all__, and of their public members."""
    for name in getattr(module, "__all__", ()):
        value = inspect.unwrap(getattr(module, name))
        if not (inspect.isclass(value) or inspect.isfunction(value)):
            continue
        yield f"{module.__name__}.{name}"
        if inspect.isclass(value):
            for member in public_members(value):
                yield f"{module.__name__}.{name}.{member}"


def undocumented_fields(owner: type) -> set[str]:
    """Names of fields that the class documents neither in a section nor by their own doc."""
    text = NumpyDocString(inspect.getdoc(owner) or "")
    entries = [*text["Parameters"], *text["Attributes"]]
    documented = {name for entry in entries for name in entry.name.split(", ")}
    if issubclass(owner, param.Parameterized):
        documented |= {name for name, value in owner.param.objects().items() if value.doc}
    protocol = getattr(owner, "_is_protocol", False)
    return set() if protocol else set(inspect.signature(owner).parameters) - documented


def complaints(name: str, checks: set[str]) -> Iterator[str]:
    report = validate(name)
    codes = {code for code, _ in report["errors"]}
    waived = set()
    if "PR01" not in codes and "\nParameters\n" not in report["docstring"]:
        waived |= {"RT01", "YD01"}
    value = pkgutil.resolve_name(name)
    if inspect.isclass(value) and "PR01" in codes and not undocumented_fields(value):
        waived.add("PR01")
    for code, message in report["errors"]:
        if code in checks - waived:
            yield f"{report['file']}:{report['file_line']}: {name}: {code} {message}"


def main() -> int:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text())
    checks = set(settings["tool"]["numpydoc_validation"]["checks"])
    names, found = [], []
    for module in modules():
        if not hasattr(module, "__all__") and not hasattr(module, "__path__"):
            found.append(f"{module.__file__}: no __all__: which of its names are public?")
        names += public_names(module)
    for name in names:
        found += complaints(name, checks)
    print(*found, f"{len(names)} docstrings, {len(found)} complaints", sep="\n")
    return bool(found)


if __name__ == "__main__":
    sys.exit(main())
