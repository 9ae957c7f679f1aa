"""Whether a computation repeats the numbers that came with a preset."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

from lozenge_engine.geometry import region_letter

if TYPE_CHECKING:
    from lozenge_engine.result import Result

__all__ = ["TOLERANCE", "Agreement", "Sender", "compare_numbers", "plain"]

TOLERANCE = 1e-9
"""Entropies of the same points that differ by less are equal: what rounding may do on another
machine (the same bound holds against dense linear algebra)."""


class Agreement(NamedTuple):
    """Outcome of a comparison.

    Attributes
    ----------
    text : str
        What to tell the reader, without a full stop.
    agrees : bool
        Whether nothing differs that matters; other versions alone do not.
    largest_difference : float or None
        Largest difference of two entropies or informations, in nats; None if none was compared.
    """

    text: str
    agrees: bool
    largest_difference: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Sender:
    """What the sender of a preset computed from it.

    Parameters
    ----------
    numbers : mapping
        `Result.numbers()`.  Its hash of the points is held in `points_sha256` alone, its
        certificate is reduced to the verdict, and what is not finite becomes None.
    points_sha256 : str
        Hash of the sender's point set.
    versions : mapping of str to str
        Of Python, the libraries and the program.
    """

    numbers: Mapping[str, Any]
    points_sha256: str
    versions: Mapping[str, str]

    def __post_init__(self) -> None:
        numbers = {k: plain(v) for k, v in self.numbers.items() if k != "points_sha256"}
        verdict = numbers["certificate"]
        numbers["certificate"] = {"met": verdict["met"], "reasons": verdict.get("reasons", [])}
        object.__setattr__(self, "numbers", numbers)
        object.__setattr__(self, "versions", dict(self.versions))

    @classmethod
    def of(cls, result: Result) -> Sender:
        """Take the numbers of a finished result.

        Parameters
        ----------
        result : Result
            What was computed from the preset.

        Returns
        -------
        Sender
            The numbers to send.
        """
        return cls(
            numbers=result.numbers(),
            points_sha256=result.points_sha256,
            versions=result.versions,
        )


def plain(value: Any) -> Any:
    """Turn numbers into a JSON value in which what is not finite is null.

    Parameters
    ----------
    value : mapping, sequence, str, int, float, bool or None
        Nested as deep as it comes.

    Returns
    -------
    dict, list, str, int, float, bool or None
        The same with plain containers.
    """
    if isinstance(value, Mapping):
        return {k: plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def compare_numbers(there: Sender, here: Sender) -> Agreement:
    """Compare the sender's numbers with those computed here from the same preset.

    Parameters
    ----------
    there, here : Sender
        The sender's numbers and one's own.

    Returns
    -------
    Agreement
        The text reads "same points, S equal to 3e-13", or says what differs.
    """
    moved = _first_other_region(there.numbers["regions"], here.numbers["regions"])
    if moved:
        return Agreement(
            f"the sender's numbers belong to other regions ({moved}): the preset was changed "
            "after they were saved",
            agrees=False,
            largest_difference=None,
        )
    versions = _version_note(there.versions, here.versions)
    if there.points_sha256 != here.points_sha256:
        return Agreement(
            f"different points: {_points_note(there)} there, {_points_note(here)} here; their "
            f"numbers differ by scatter and are not compared{versions}",
            agrees=False,
            largest_difference=None,
        )
    counts = list(_count_notes(there.numbers, here.numbers))
    values = list(_values(there.numbers, here.numbers))
    differences = [abs(a - b) for _, a, b in values if a is not None and b is not None]
    largest = max(differences, default=None)
    notes = counts + _value_notes(values)
    if notes:
        more = f" and {len(notes) - 1} more numbers" if len(notes) > 1 else ""
        return Agreement(
            f"same points, but {notes[0]}{more}{versions}",
            agrees=False,
            largest_difference=largest,
        )
    equal = f"equal to {largest:.0e}" if largest else "equal in every digit"
    return Agreement(f"same points, S {equal}{versions}", agrees=True, largest_difference=largest)


def _points_note(sender: Sender) -> str:
    return f"{sender.numbers['elements']} elements with hash {sender.points_sha256[:12]}"


def _version_note(there: Mapping[str, str], here: Mapping[str, str]) -> str:
    """Which versions differ, as the end of a sentence; empty if none does."""
    notes = [
        f"{name} {there.get(name, 'none')} there, {here.get(name, 'none')} here"
        for name in sorted({*there, *here})
        if there.get(name) != here.get(name)
    ]
    return f"; versions differ: {', '.join(notes)}" if notes else ""


def _first_other_region(there: list[Mapping[str, Any]], here: list[Mapping[str, Any]]) -> str:
    """Name the first region whose geometry differs; empty if none does."""
    if len(there) != len(here):
        return f"{len(there)} there, {len(here)} here"
    for k, (a, b) in enumerate(zip(there, here, strict=True)):
        for key in ("t0", "x0", "half_width", "boost"):
            if not math.isclose(a[key], b[key], rel_tol=1e-9, abs_tol=1e-12):
                return f"{key} of {region_letter(k)} is {a[key]:g} there, {b[key]:g} here"
    return ""


def _count_notes(there: Mapping[str, Any], here: Mapping[str, Any]) -> Iterator[str]:
    """What differs among whole numbers and verdicts."""
    pairs = [("the patch's kept modes", there["patch_modes"], here["patch_modes"])]
    for k, (a, b) in enumerate(zip(there["regions"], here["regions"], strict=True)):
        letter = region_letter(k)
        pairs += [
            (f"elements of {letter}", a["elements"], b["elements"]),
            (f"kept modes of {letter}", a["kept_modes"], b["kept_modes"]),
            (f"the verdict on {letter}", a["status"], b["status"]),
        ]
    for rule in ("support", "direct_sum"):
        one, two = ((n["union"] or {}).get(rule, {}) for n in (there, here))
        name = f"of the union by {_words(rule)}"
        pairs += [
            (f"kept modes {name}", one.get("kept_modes"), two.get("kept_modes")),
            (f"the verdict {name}", one.get("status"), two.get("status")),
        ]
    one, two = ("met" if n["certificate"]["met"] else "not met" for n in (there, here))
    pairs.append(("the certificate", one, two))
    return (f"{name}: {a} there, {b} here" for name, a, b in pairs if a != b)


Value = tuple[str, float | None, float | None]


def _values(there: Mapping[str, Any], here: Mapping[str, Any]) -> Iterator[Value]:
    """All entropies and informations, with their names."""
    for k, (a, b) in enumerate(zip(there["regions"], here["regions"], strict=True)):
        yield f"S of {region_letter(k)}", a["entropy"], b["entropy"]
    for rule in ("support", "direct_sum"):
        words = _words(rule)
        one, two = ((n["union"] or {}).get(rule, {}) for n in (there, here))
        yield f"S of the union by {words}", one.get("entropy"), two.get("entropy")
        one, two = ((n["total_correlation"] or {}) for n in (there, here))
        yield f"total correlation by {words}", one.get(rule), two.get(rule)
        pairs = [
            {(p["a"], p["b"]): p[rule] for p in n["mutual_information"]} for n in (there, here)
        ]
        for a, b in sorted({*pairs[0], *pairs[1]}):
            name = f"I({region_letter(a)}:{region_letter(b)}) by {words}"
            yield name, pairs[0].get((a, b)), pairs[1].get((a, b))
        triples = [
            {tuple(t["members"]): t[rule] for t in n["tripartite_information"]}
            for n in (there, here)
        ]
        for members in sorted({*triples[0], *triples[1]}):
            letters = ":".join(region_letter(k) for k in members)
            yield f"I({letters}) by {words}", triples[0].get(members), triples[1].get(members)


def _value_notes(values: list[Value]) -> list[str]:
    """What differs among entropies and informations by more than rounding, the worst first."""
    notes: list[tuple[float, str]] = []
    for name, a, b in values:
        if a is None or b is None:
            if a is not b:
                shown = ["no number" if x is None else f"{x:.6g}" for x in (a, b)]
                notes.append((math.inf, f"{name}: {shown[0]} there, {shown[1]} here"))
        elif abs(a - b) > TOLERANCE:
            text = f"{name} differs by {abs(a - b):.1g} ({a:.6g} there, {b:.6g} here)"
            notes.append((abs(a - b), text))
    return [text for _, text in sorted(notes, key=lambda note: -note[0])]


def _words(rule: str) -> str:
    return rule.replace("_", " ")
