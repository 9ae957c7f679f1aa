"""The sections of a preset document and the settings that they stand for."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping
from dataclasses import asdict
from typing import Any

from lozenge_engine.config import Averaging, PointSource, Rule, Setup, SweepPlan
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import Region
from lozenge_engine.placement import gaps
from lozenge_engine.plan import Axis, CampaignPlan, Target

__all__ = [
    "DEFAULT",
    "at",
    "campaign_of",
    "campaign_section",
    "evidence_of",
    "evidence_section",
    "sections_of",
    "setup_of",
]

DEFAULT = Setup()


def sections_of(setup: Setup) -> dict[str, Any]:
    """Write settings as plain values, in the order of the file.

    Parameters
    ----------
    setup : Setup
        In canonical form.

    Returns
    -------
    dict
        Sections points, mass, regions, truncation, order, averaging and sweeps.
    """
    return {
        "points": {k: v for k, v in setup.points.plain().items() if v is not None},
        "mass": _float(setup.mass),
        "regions": _regions_document(setup),
        "truncation": _truncation_document(setup),
        "order": _float(setup.order),
        "averaging": asdict(setup.averaging),
        "sweeps": asdict(setup.sweeps),
    }


def _float(x: float) -> float:
    """A float without a negative zero, so that 0 is always written in the same way."""
    return float(x) + 0.0


def _regions_document(setup: Setup) -> dict[str, Any]:
    if setup.region_list is None:
        return {
            "row": {
                "count": setup.region_count,
                "half_width": _float(setup.half_width),
                "separation": _float(setup.separation),
            }
        }
    return {"list": [{k: _float(v) for k, v in asdict(r).items()} for r in setup.region_list]}


def _truncation_document(setup: Setup) -> dict[str, Any]:
    if setup.truncation_mode == "custom":
        return {
            "mode": "custom",
            "patch_rule": asdict(setup.patch_rule),
            "region_rule": asdict(setup.region_rule),
        }
    return {
        "mode": setup.truncation_mode,
        "alpha": _float(setup.alpha),
        "number": setup.number,
    }


@contextlib.contextmanager
def at(where: str) -> Iterator[None]:
    """Put a path before the text of a refusal that is raised inside.

    Parameters
    ----------
    where : str
        The file or the section.

    Yields
    ------
    None
        Nothing.
    """
    try:
        yield
    except InputError as error:
        raise InputError(f"{where}: {error}") from error


def setup_of(document: Mapping[str, Any]) -> Setup:
    """Build the checked values section by section, so that a refusal can name its section.

    Parameters
    ----------
    document : mapping
        A preset document that fits the schema.

    Returns
    -------
    Setup
        Its engine and sweep settings.

    Raises
    ------
    InputError
        If the engine cannot take the values together, such as regions that overlap.
    """
    with at("points"):
        points = PointSource(**_whole(document["points"], "seed", "oversampling"))
    with at("sweeps"):
        sweeps = SweepPlan(
            **_whole(
                document["sweeps"],
                "density_points",
                "size_points",
                "separation_points",
                "smallest_region",
            )
        )
    return Setup(
        points=points,
        mass=float(document["mass"]),
        order=float(document["order"]),
        averaging=Averaging(**_whole(document["averaging"], "sprinklings")),
        sweeps=sweeps,
        **_regions(document["regions"]),
        **_truncation(document["truncation"]),
    )


def _whole(section: Mapping[str, Any], *keys: str) -> dict[str, Any]:
    """Copy a section; 8.0, which JSON does not tell from 8, becomes 8."""
    return {k: int(v) if k in keys else v for k, v in section.items()}


def _regions(section: Mapping[str, Any]) -> dict[str, Any]:
    """The settings of a row or a list, checked by a setup that holds nothing else."""
    values: dict[str, Any]
    if "row" in section:
        row = section["row"]
        values = {
            "region_count": int(row["count"]),
            "half_width": float(row["half_width"]),
            "separation": float(row["separation"]),
        }
        with at("regions.row"):
            Setup(**values)
        return values
    regions = []
    for k, entry in enumerate(section["list"]):
        with at(f"regions.list[{k}]"):
            regions.append(Region(**entry))
    old = gaps(tuple(regions))
    mean = max(0.0, sum(old) / len(old)) if old else DEFAULT.separation
    values = {"region_list": tuple(regions), "separation": mean}
    with at("regions.list"):
        Setup(**values)
    return values


def _truncation(section: Mapping[str, Any]) -> dict[str, Any]:
    mode = section["mode"]
    if mode == "custom":
        return {
            "truncation_mode": mode,
            "patch_rule": Rule(**_whole(section["patch_rule"], "number")),
            "region_rule": Rule(**_whole(section["region_rule"], "number")),
        }
    return {
        "truncation_mode": mode,
        "alpha": float(section["alpha"]),
        "number": int(section["number"]),
    }


# ----------------------------------------------------------------------- campaign


def campaign_section(plan: CampaignPlan) -> dict[str, Any]:
    """Write a campaign's plan as plain values, in the order of the file.

    Parameters
    ----------
    plan : CampaignPlan
        What a campaign is to find out.

    Returns
    -------
    dict
        Keys axes, placements, realisations, target, budget and smallest_region.
    """
    return {
        "axes": [{"name": axis.name, "values": list(axis.values)} for axis in plan.axes],
        "placements": [list(shift) for shift in plan.placements],
        "realisations": plan.realisations,
        "target": None if plan.target is None else asdict(plan.target),
        "budget": plan.budget,
        "smallest_region": plan.smallest_region,
    }


def campaign_of(section: Mapping[str, Any]) -> CampaignPlan:
    """Build a campaign's plan, so that a refusal can name its key.

    Parameters
    ----------
    section : mapping
        The section ``campaign`` of a preset document that fits the schema.

    Returns
    -------
    CampaignPlan
        Checked in full.

    Raises
    ------
    InputError
        If the values do not go together, such as two axes of one name.
    """
    axes = []
    for k, entry in enumerate(section["axes"]):
        with at(f"campaign.axes[{k}]"):
            counts = entry["name"] == "region_count"
            values = (int(v) if counts else v for v in entry["values"])
            axes.append(Axis(name=entry["name"], values=tuple(values)))
    with at("campaign"):
        return CampaignPlan(
            axes=tuple(axes),
            placements=tuple((t, x) for t, x in section["placements"]),
            realisations=int(section["realisations"]),
            target=None if section["target"] is None else Target(**section["target"]),
            budget=section["budget"],
            smallest_region=int(section["smallest_region"]),
        )


# ----------------------------------------------------------------------- evidence


def evidence_section(plan: EvidencePlan) -> dict[str, Any]:
    """Write what is asked for as evidence as plain values, in the order of the file.

    Parameters
    ----------
    plan : EvidencePlan
        What the evidence page is to compute.

    Returns
    -------
    dict
        A key for each field of the plan.
    """
    return {k: list(v) if isinstance(v, tuple) else v for k, v in asdict(plan).items()}


def evidence_of(section: Mapping[str, Any]) -> EvidencePlan:
    """Build an evidence plan, so that a refusal can name its section.

    Parameters
    ----------
    section : mapping
        The section ``evidence`` of a preset document that fits the schema.

    Returns
    -------
    EvidencePlan
        Checked in full.

    Raises
    ------
    InputError
        If the values do not go together, such as the ends of the range of alpha.
    """
    counts = ("alphas", "realisations", "region", "rank")
    with at("evidence"):
        return EvidencePlan(**_whole(section, *counts) | {"rules": tuple(section["rules"])})
