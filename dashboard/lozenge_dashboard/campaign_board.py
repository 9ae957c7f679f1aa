"""The panes of the campaign page, and the prediction of a new campaign in words."""

from __future__ import annotations

import math
import os
import re
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NamedTuple, cast

from bokeh.document import Document

from lozenge_dashboard.campaign_column import CampaignControls
from lozenge_dashboard.campaign_text import EMPTY, columns, line_html, rows, words_html
from lozenge_dashboard.campaigns import Campaigns, Status, Watch
from lozenge_dashboard.frames import WIDE, Frames, Sheet
from lozenge_dashboard.palette import Look, ThemeName
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.views.effort import CAMPAIGN_VIEWS
from lozenge_engine.errors import InputError
from lozenge_engine.forecast import Forecast, forecast
from lozenge_engine.notation import duration, thousands
from lozenge_engine.presets import Preset
from lozenge_engine.workers import cores

__all__ = [
    "NO_FORECAST",
    "Asked",
    "CampaignBoard",
    "forecast_words",
    "foreseen",
    "read_file",
    "refusal_words",
    "sharing_words",
    "tried",
    "worker_caution",
]

WRAPPED = re.compile(r"axes: given (.*: given .*); allowed is at least one .*", re.DOTALL)
"""The refusal of a plan around that of its first point."""

SHEET = Sheet("Campaign", "Points as a table", "campaign.css", "off", unfolded=True)

NO_FORECAST: dict[str, Any] = {
    "text": "",
    "brief": "",
    "peak": 0.0,
    "rows": [],
    "note": "",
    "left_out": [],
    "error": "",
}


class Asked(NamedTuple):
    """What the address of the page names."""

    preset: Preset
    file: str
    theme: ThemeName
    note: str = ""
    """That something of the address is not known."""


class CampaignBoard(Frames):
    """All panes of one campaign page.

    Parameters
    ----------
    receive : callable
        Called with every message of the column.
    receive_view : callable
        Called with a view's name and a message of its head.
    state : dict
        First state of the column.
    """

    def __init__(
        self,
        receive: Callable[[dict[str, Any]], None],
        receive_view: Callable[[str, dict[str, Any]], None],
        *,
        state: dict[str, Any],
    ) -> None:
        self.controls = CampaignControls(receive, state=state, **WIDE)
        super().__init__(
            SHEET, CAMPAIGN_VIEWS, controls=self.controls, receive_view=receive_view, words=True
        )
        self._table_of: Watch | None = None

    def show(
        self,
        watch: Watch | None,
        status: Status,
        choices: CampaignChoices,
        look: Look,
        document: Document,
    ) -> None:
        """Draw what was read, or say that nothing is open."""
        self.say(watch, status)
        if watch is None:
            for frame in self.frames.values():
                frame.say(status.text or EMPTY, error=status.failed)
            return
        if watch is not self._table_of:
            self._table_of = watch
            table = [list(row) for row in rows(watch)]
            if table != self.table.rows:
                self.table.param.update(columns=columns(watch), rows=cast(Any, table))
        for frame in self.frames.values():
            frame.show(watch, choices, look, document, settled=True)

    def say(self, watch: Watch | None, status: Status) -> None:
        """Write the line of readings and the words below the figures."""
        self.line.object = line_html(watch, status)
        words = words_html(watch, status)
        if self.words is not None:
            self.words.object = f"<div class='words'>{words}</div>" if words else ""


# ---------------------------------------------------------------- the prediction


def foreseen(preset: Preset, *, workers: int) -> Forecast:
    """Predict a campaign; workers beyond the processors take memory and save no time.

    Parameters
    ----------
    preset : Preset
        Its campaign.
    workers : int
        Realisations at a time.

    Returns
    -------
    Forecast
        For `workers`, in the time of as many as there are processors.
    """
    found = forecast(preset, workers=min(workers, cores()))
    more = (workers - found.workers) * max(row.peak_bytes for row in found.rows)
    return found._replace(workers=workers, peak_bytes=found.peak_bytes + more)


def _machine_bytes() -> float:
    """Memory of this machine; infinite where it does not say."""
    try:
        return float(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES"))
    except (AttributeError, ValueError, OSError):
        return math.inf


def worker_caution(workers: int, peak: float, *, memory: float | None = None) -> str:
    """What speaks against a number of workers on this machine.

    Parameters
    ----------
    workers : int
        Asked for.
    peak : float
        Bytes that the campaign is predicted to take at most.
    memory : float or None
        Bytes that the machine has; None to ask it.

    Returns
    -------
    str
        Empty if nothing does.
    """
    said, have = [], cores()
    memory = _machine_bytes() if memory is None else memory
    if workers > have:
        said.append(f"{have} core{'' if have == 1 else 's'} here: more workers are not faster")
    if peak > memory:
        said.append(f"{_bytes(peak)} of memory predicted, {_bytes(memory)} here: take fewer")
    return "; ".join(said)


def forecast_words(forecast: Forecast) -> dict[str, Any]:
    """A prediction in words, for the column.

    Parameters
    ----------
    forecast : Forecast
        Of the new campaign.

    Returns
    -------
    dict
        `text`, `brief`, `peak` (bytes), `rows` (one for each sprinkling), `note` and `left_out`.
    """
    total = sum(row.realisations for row in forecast.rows)
    s = "" if forecast.workers == 1 else "s"
    have = cores()
    on = f" on {have} core{'' if have == 1 else 's'}" if forecast.workers > have else ""
    text = (
        f"About {duration(forecast.seconds)} with {forecast.workers} worker{s}{on}: "
        f"{thousands(total)} realisations, {_bytes(forecast.peak_bytes)} of memory at most."
    )
    rows = [
        f"density {thousands(round(row.density))}: {thousands(row.realisations)} × "
        f"{duration(row.seconds)}, from {thousands(round(row.elements[0]))} elements per region"
        for row in forecast.rows
    ]
    return {
        "text": text,
        "brief": f"about {duration(forecast.seconds)}",
        "peak": forecast.peak_bytes,
        "rows": rows,
        "note": _on_screen(forecast.note),
        "left_out": [_on_screen(text) for text in forecast.left_out],
        "error": "",
    }


def sharing_words(names: Sequence[str], *, workers: int, busy: int) -> str:
    """What it costs that other campaigns run here.

    Parameters
    ----------
    names : sequence of str
        Those that run.
    workers, busy : int
        Workers asked for; workers of those that run.

    Returns
    -------
    str
        Empty if none runs.
    """
    if not names:
        return ""
    factor = min(workers, cores()) * (workers + busy) / (cores() * workers)
    cost = (
        f"meanwhile it takes about {factor:.2g} times as long" if factor > 1 else "on other cores"
    )
    return f"{', '.join(names)} runs too: {cost}."


def refusal_words(error: Exception, folder: Path) -> str:
    """An error as the page says it: bare file names, given and allowed once.

    Parameters
    ----------
    error : Exception
        Of the engine, or unforeseen.
    folder : Path
        Of the results files.

    Returns
    -------
    str
        In the names of the controls.
    """
    text = str(error) if isinstance(error, InputError) else f"{type(error).__name__}: {error}"
    text = text.replace(f"{folder}{os.sep}", "")
    found = WRAPPED.fullmatch(text)
    return _on_screen(found[1] if found else text)


def _on_screen(text: str) -> str:
    """With the names that the controls have."""
    return text.replace("half_width", "half-width").replace("region_count", "region count")


def _bytes(count: float) -> str:
    return f"{count / 1e9:.1f} GB" if count >= 1e9 else f"{count / 1e6:.0f} MB"


# ---------------------------------------------------------------- what may take a moment


def read_file(campaigns: Campaigns, name: str) -> tuple[str, Watch | Exception]:
    """What a results file holds, or why it cannot be read."""
    try:
        return name, campaigns.watch(name)
    except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
        return name, error


def tried(name: str, what: Callable[[], None], _report: object) -> tuple[str, Exception | None]:
    """Whether something could be done with a results file."""
    try:
        what()
    except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
        return name, error
    return name, None
