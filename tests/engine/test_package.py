"""The package as a whole: its version, and what importing it costs others."""

from __future__ import annotations

import os
import subprocess
import sys
from importlib import metadata
from pathlib import Path

import pytest

import lozenge_engine

SOURCE_ROOT = Path(lozenge_engine.__file__).parents[1]

IMPORT_ALL = """
import importlib, pkgutil, sys
import lozenge_engine as package
for module in pkgutil.walk_packages(package.__path__, "lozenge_engine."):
    importlib.import_module(module.name)
print(*sys.modules, sep="\\n")
"""


def test_version_is_that_of_the_installed_distribution() -> None:
    try:
        installed = metadata.version("lozenge")
    except metadata.PackageNotFoundError:
        if os.environ.get("CI") == "true":
            raise
        pytest.skip("not installed: the tests run from the source tree")
    assert lozenge_engine.__version__ == installed


def test_importing_every_engine_module_loads_no_drawing_library() -> None:
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", IMPORT_ALL],
        env={**os.environ, "PYTHONPATH": str(SOURCE_ROOT)},
        check=True,
        stdout=subprocess.PIPE,
        text=True,
    )
    loaded = set(done.stdout.split())
    assert {"numpy", "lozenge_engine.config", "lozenge_engine.kernels"} <= loaded
    assert not loaded & {"bokeh", "holoviews", "matplotlib", "panel"}
