"""`lozenge run PRESET --evidence`: what the evidence page shows, as a table and as JSON."""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping
from dataclasses import asdict, fields, is_dataclass
from pathlib import Path
from typing import Any

import numpy as np

from lozenge_dashboard.evidence_text import rows
from lozenge_dashboard.evidence_work import ORDER, TASKS, Ask, first_plan
from lozenge_dashboard.records import EvidenceScene
from lozenge_dashboard.run import STANDARD_OUTPUT, own_points, put, with_points
from lozenge_engine.agreement import plain
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.errors import InputError
from lozenge_engine.presets import Preset
from lozenge_engine.stages import ONE_THREAD, Stages

__all__ = ["FIELDS", "run_studies"]

FIELDS: Mapping[str, str] = {
    "cutstudy": "cuts",
    "thresholds": "thresholds",
    "modeshape": "mode",
    "statecheck": "state",
    "mutual": "mutual",
    "due": "due",
}
"""Field of the scene that each task fills."""


def run_studies(
    preset: Preset,
    *,
    folder: Path | None = None,
    points: Path | None = None,
    json_file: Path | None = None,
) -> bool:
    """Compute everything that the evidence page shows of a preset, and print it.

    Parameters
    ----------
    preset : Preset
        Its section evidence says what is asked; without one what the page begins with.
    folder : Path or None
        Where the preset's file lies; own points that it names are looked for there.
    points : Path or None
        A CSV file of own points that takes the place of the sprinkling.
    json_file : Path or None
        A file to write the numbers to; ``-`` for the standard output instead of the table.

    Returns
    -------
    bool
        Whether nothing was refused.

    Raises
    ------
    InputError
        If the points, the preset or the path cannot be taken.
    """
    if json_file is not None and json_file != STANDARD_OUTPUT:
        check_writable(json_file)
    own = own_points(preset, folder, points)
    preset = with_points(preset, own)
    plan = preset.evidence or first_plan(preset.setup)
    ask = Ask(preset.setup, plan, own)
    scene, refused = _computed(ask)
    document = {
        "plan": asdict(plan),
        **{field: _plain(getattr(scene, field)) for field in FIELDS.values()},
        "refused": refused,
    }
    text = json.dumps(document, indent=1, ensure_ascii=True, allow_nan=False) + "\n"
    if json_file == STANDARD_OUTPUT:
        put(text)
    else:
        if json_file is not None:
            write_bytes(json_file, text.encode())
        put(_table(preset, scene, refused))
    return not refused


def _computed(ask: Ask) -> tuple[EvidenceScene, dict[str, str]]:
    """All records, one after the other, and why there is none."""
    stages = Stages(threads_from=ONE_THREAD)
    scene = EvidenceScene(ask.setup, ask.plan)
    refused: dict[str, str] = {}
    for k, name in enumerate(ORDER):
        _progress(f"{name} ({k + 1} of {len(ORDER)}) …")
        try:
            record = TASKS[name](
                ask, stages=stages, report=lambda _stage, _part: None, publish=lambda _record: None
            )
        except InputError as error:
            refused[name] = str(error)
            continue
        scene = scene._replace(**{FIELDS[name]: record})
    _progress("")
    return scene, refused


def _progress(text: str) -> None:
    """What is computed, on a terminal."""
    if sys.stderr.isatty():
        sys.stderr.write(f"\r\x1b[K{text}")
        sys.stderr.flush()


def _table(preset: Preset, scene: EvidenceScene, refused: Mapping[str, str]) -> str:
    """Name, value and how it was made, in columns."""
    found = rows(scene)
    wide = [max((len(row[k]) for row in found), default=0) for k in (0, 1)]
    wide = [min(wide[0], 60), min(wide[1], 40)]
    lines = [f"{preset.title}\n\n"]
    lines += [f"{a:<{wide[0]}}  {b:<{wide[1]}}  {c}".rstrip() + "\n" for a, b, c in found]
    lines += [f"not computed, {name}: {why}\n" for name, why in refused.items()]
    lines.append(
        "\nErrors are one standard error of the scatter between sprinklings, or of the twin's "
        "sets; none covers the choice of the rule.\n"
    )
    return "".join(lines)


def _plain(value: Any) -> Any:
    """Records and arrays as plain JSON values; what is not finite is null, i is (0, 1)."""
    if hasattr(value, "canonical_json"):
        return json.loads(value.canonical_json())
    if is_dataclass(value) and not isinstance(value, type):
        value = {field.name: getattr(value, field.name) for field in fields(value)}
    elif hasattr(value, "_asdict"):
        value = value._asdict()
    elif isinstance(value, np.ndarray):
        value = value.tolist()
    if isinstance(value, Mapping):
        return {_key(key): _plain(part) for key, part in value.items()}
    if isinstance(value, tuple | list | set | frozenset):
        return [_plain(part) for part in value]
    if isinstance(value, complex):
        return [_plain(value.real), _plain(value.imag)]
    return plain(value.item() if hasattr(value, "item") else value)


def _key(key: object) -> str:
    """A key of JSON."""
    return ", ".join(map(str, key)) if isinstance(key, tuple) else str(key)
