"""The command line: serve the page, compute a preset, run campaigns, list the presets."""

from __future__ import annotations

import argparse
import contextlib
import difflib
import io
import shlex
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

from lozenge_dashboard import parsers
from lozenge_engine.errors import InputError, refuse

if TYPE_CHECKING:
    from lozenge_engine.presets import Preset

__all__ = ["find_preset", "main"]

OK, DIFFERENT, BAD_INPUT, NOT_TRUSTED, STOPPED = 0, 1, 2, 3, 130
SQLITE = b"SQLite format 3\x00"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str or None
        What follows the command's name; None takes it from the process.

    Returns
    -------
    int
        0 done; 1 a bundle's numbers did not come out again; 2 bad input, with one line on stderr
        that says what to do; 3 computed, but the
        certificate is not met, a number carries a mark or a realisation failed; 130 stopped, or
        a campaign paused, by Ctrl-C.
    """
    given = list(sys.argv[1:] if arguments is None else arguments)
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="replace")
    try:
        return _dispatch(given)
    except InputError as error:
        return _say(str(error), BAD_INPUT)
    except MemoryError:
        return _say(
            "not enough memory for this; lower the density or the number of elements", BAD_INPUT
        )
    except KeyboardInterrupt:
        return _say("stopped by Ctrl-C", STOPPED)


def _say(text: str, status: int) -> int:
    """Write one line to stderr."""
    sys.stderr.write(f"lozenge: {' '.join(text.split())}\n")
    return status


# ------------------------------------------------------------------------- commands


def _serve(options: argparse.Namespace) -> int:
    from lozenge_engine.presets import FIRST

    preset, path = find_preset(options.preset or FIRST)
    from lozenge_dashboard.app import serve

    serve(preset, path, options.port, not options.no_browser)
    return OK


def _run(options: argparse.Namespace) -> int:
    _check_run(options)
    if options.results is not None:
        return _campaign(options)
    preset, path = find_preset(options.preset)
    if options.evidence:
        from lozenge_dashboard.evidence_report import run_studies

        folder = path.parent if path else None
        done = run_studies(preset, folder=folder, points=options.points, json_file=options.json)
        return OK if done else NOT_TRUSTED
    from lozenge_dashboard.run import run

    trusted = run(
        preset,
        folder=path.parent if path else None,
        points=options.points,
        one=options.one,
        with_sweeps=options.sweeps,
        json_file=options.json,
        arrays_file=options.arrays,
    )
    return OK if trusted else NOT_TRUSTED


def _check_run(options: argparse.Namespace) -> None:
    """Refuse options of a campaign without one, and options of one computation with one."""
    chosen = vars(options)
    if options.results is None:
        names: tuple[str, ...] = ("workers", "dask")
        have, do = "without --results", "add --results FILE"
    else:
        names = ("points", "one", "sweeps", "evidence", "json", "arrays")
        have, do = "with --results", "leave it out; see lozenge results --help for files"
    for name in names:
        if chosen[name] not in (None, False):
            raise refuse(f"--{name}", given=have, allowed="one or the other", do=do)
    for name in ("one", "sweeps", "arrays") if options.evidence else ():
        if chosen[name] not in (None, False):
            raise refuse(
                f"--{name}", given="with --evidence", allowed="one or the other", do="leave one out"
            )
    if options.workers is not None and options.dask is not None:
        raise refuse(
            "--workers",
            given="with --dask",
            allowed="one or the other: the cluster has workers of its own",
            do="leave one out",
        )


def _campaign(options: argparse.Namespace) -> int:
    from lozenge_dashboard.campaign_run import run_campaign

    preset, _ = find_preset(options.preset)
    again = ["lozenge", "run", options.preset, "--results", str(options.results)]
    again += ["--workers", str(options.workers)] if options.workers is not None else []
    again += ["--dask", options.dask] if options.dask is not None else []
    ended = run_campaign(
        preset,
        path=options.results,
        resume_line=shlex.join(again),
        workers=options.workers,
        dask=options.dask,
    )
    if ended.paused:
        return STOPPED
    return OK if ended.trusted else NOT_TRUSTED


def _plan(options: argparse.Namespace) -> int:
    from lozenge_dashboard.campaign_run import show_plan

    preset, _ = find_preset(options.preset)
    show_plan(preset, workers=options.workers)
    return OK


def _results(options: argparse.Namespace) -> int:
    from lozenge_dashboard.campaign_run import show_results

    trusted = show_results(options.file, json_file=options.json, csv_file=options.csv)
    return OK if trusted else NOT_TRUSTED


def _evidence(options: argparse.Namespace) -> int:
    from lozenge_dashboard.evidence_run import run_evidence

    if options.as_is and options.results is None:
        raise refuse("--as-is", given="without --results", allowed="both", do="add --results FILE")
    preset, _ = find_preset(options.preset)
    again = ["lozenge", "evidence", options.preset, "--results", str(options.results)]
    told = run_evidence(
        preset,
        results=options.results,
        json_file=options.json,
        workers=options.workers,
        level=options.level,
        as_is=options.as_is,
        resume_line=shlex.join(again),
    )
    if told.paused:
        return STOPPED
    return OK if told.trusted else NOT_TRUSTED


def _export(options: argparse.Namespace) -> int:
    from lozenge_dashboard.export import export_preset, export_results

    views = None if options.views is None else [n.strip() for n in options.views.split(",")]
    if _is_results(options.what):
        path = Path(options.what)
        trusted = export_results(path, to=options.to, views=views, double=options.double)
    else:
        preset, found = find_preset(options.what)
        trusted = export_preset(
            preset,
            to=options.to,
            folder=found.parent if found else None,
            views=views,
            double=options.double,
        )
    return OK if trusted else NOT_TRUSTED


def _order(options: argparse.Namespace) -> int:
    from lozenge_dashboard.order_run import run_order

    done = run_order(
        options.file,
        only_links=options.links,
        close=options.close,
        regions=options.regions,
        alpha=options.alpha,
        json_file=options.json,
    )
    return OK if done else NOT_TRUSTED


def _bundle(options: argparse.Namespace) -> int:
    from lozenge_dashboard.bundle_run import bundle_of_preset, bundle_of_results, save_bundle
    from lozenge_engine.document import check_writable

    check_writable(options.to)
    if _is_results(options.what):
        made = bundle_of_results(Path(options.what))
    else:
        preset, _ = find_preset(options.what)
        made = bundle_of_preset(preset)
    save_bundle(made, options.to)
    return OK


def _is_results(name: str) -> bool:
    """Whether a path is that of a results file, an SQLite database by its first bytes."""
    with contextlib.suppress(OSError, ValueError), Path(name).open("rb") as file:
        return file.read(len(SQLITE)) == SQLITE
    return False


def _verify(options: argparse.Namespace) -> int:
    from lozenge_dashboard.bundle_run import USUAL, verify_bundle

    count = None if options.all else USUAL if options.realisations is None else options.realisations
    return OK if verify_bundle(options.file, realisations=count) else DIFFERENT


def _list(options: argparse.Namespace) -> int:
    from lozenge_dashboard.run import put
    from lozenge_engine.presets import SHIPPED, dumps, shipped

    presets = shipped()
    if options.name is None:
        mark = {True: " (invented scenario)", False: ""}
        put(
            "".join(
                f"{name}\n    {p.title}{mark[p.invented]}\n    {p.sentence}\n"
                for name, p in presets.items()
            )
        )
    elif options.name in SHIPPED:
        put(dumps(presets[options.name]))
    else:
        raise _no_preset(options.name, allowed=", ".join(SHIPPED))
    return OK


def find_preset(name: str) -> tuple[Preset, Path | None]:
    """Read a preset by the name of a shipped one or by its path.

    Parameters
    ----------
    name : str
        A shipped name; anything else is a path.

    Returns
    -------
    preset : Preset
        Checked in full.
    path : Path or None
        Its file; None for a shipped one.

    Raises
    ------
    InputError
        If there is no such preset or it is refused.
    """
    from lozenge_engine.presets import SHIPPED, read, shipped

    if name in SHIPPED:
        return shipped()[name], None
    path = Path(name)
    if path.name == name and not path.suffix and not path.exists():
        raise _no_preset(name, allowed=f"a preset file, or one of {', '.join(SHIPPED)}")
    return read(path), path


def _no_preset(name: str, *, allowed: str) -> InputError:
    from lozenge_engine.presets import SHIPPED

    near = difflib.get_close_matches(name, SHIPPED, n=1)
    return refuse(
        name,
        given="neither a file nor a shipped preset",
        allowed=allowed,
        do=f"write {near[0]}" if near else "see lozenge presets",
    )


# ------------------------------------------------------------------------- dispatch


class _Command(NamedTuple):
    """One command: its arguments and what it does."""

    parser: Callable[[], argparse.ArgumentParser]
    do: Callable[[argparse.Namespace], int]


COMMANDS = {
    "run": _Command(parsers.run_parser, _run),
    "plan": _Command(parsers.plan_parser, _plan),
    "results": _Command(parsers.results_parser, _results),
    "evidence": _Command(parsers.evidence_parser, _evidence),
    "export": _Command(parsers.export_parser, _export),
    "order": _Command(parsers.order_parser, _order),
    "bundle": _Command(parsers.bundle_parser, _bundle),
    "verify": _Command(parsers.verify_parser, _verify),
    "presets": _Command(parsers.presets_parser, _list),
}
SERVE = _Command(parsers.serve_parser, _serve)


def _dispatch(given: list[str]) -> int:
    """Do what the first word says; without a command the page is served."""
    command = COMMANDS.get(given[0]) if given else None
    rest = given if command is None else given[1:]
    command = command or SERVE
    return command.do(command.parser().parse_args(rest))
