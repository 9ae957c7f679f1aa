"""The command line: serve the page, compute a preset, run campaigns, list the presets."""

from __future__ import annotations

import argparse
import difflib
import io
import shlex
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from lozenge_engine import __version__
from lozenge_engine.errors import InputError, refuse

if TYPE_CHECKING:
    from lozenge_engine.presets import Preset

__all__ = ["find_preset", "main"]

OK, BAD_INPUT, NOT_TRUSTED, STOPPED = 0, 2, 3, 130
PRESET_HELP = "a preset file, or the name of one that comes with the program"
WORKERS_HELP = "processes that compute a campaign, one thread each; as many as cores if not given"


class _Parser(argparse.ArgumentParser):
    """A parser that refuses in one line."""

    def error(self, message: str) -> NoReturn:
        raise InputError(f"{message}; see {self.prog} --help")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str or None
        What follows the command's name; None takes it from the process.

    Returns
    -------
    int
        0 done; 2 bad input, with one line on stderr that says what to do; 3 computed, but the
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
        return _say("not enough memory for this preset; lower its density", BAD_INPUT)
    except KeyboardInterrupt:
        return _say("stopped by Ctrl-C", STOPPED)


def _say(text: str, status: int) -> int:
    """Write one line to stderr."""
    sys.stderr.write(f"lozenge: {' '.join(text.split())}\n")
    return status


def _dispatch(given: list[str]) -> int:
    if given[:1] == ["run"]:
        return _run(_run_parser().parse_args(given[1:]))
    if given[:1] == ["plan"]:
        return _plan(_plan_parser().parse_args(given[1:]))
    if given[:1] == ["results"]:
        return _results(_results_parser().parse_args(given[1:]))
    if given[:1] == ["presets"]:
        return _list(_presets_parser().parse_args(given[1:]))
    return _serve(_serve_parser().parse_args(given))


# -------------------------------------------------------------------------- parsers


def _serve_parser() -> _Parser:
    parser = _Parser(
        prog="lozenge",
        description="Entanglement entropy of sprinkled causal diamonds. Opens the page in the "
        "browser; only this machine can reach it.",
        epilog="Further commands: 'lozenge run PRESET' computes a preset without the page; "
        "'lozenge plan PRESET' says what its campaign will take, 'lozenge run PRESET --results "
        "FILE' runs it, 'lozenge results FILE' prints what it found; 'lozenge presets' lists the "
        "presets that come with the program. Each knows --help.",
    )
    parser.add_argument("-V", "--version", action="version", version=f"lozenge {__version__}")
    parser.add_argument("preset", metavar="PRESET", nargs="?", help=PRESET_HELP)
    parser.add_argument("--no-browser", action="store_true", help="serve without opening a tab")
    parser.add_argument(
        "--port",
        type=_port,
        metavar="N",
        help="port to serve on; if it is busy the next free one is taken, and said",
    )
    return parser


def _run_parser() -> _Parser:
    parser = _Parser(
        prog="lozenge run",
        description="Compute a preset and print its numbers: the sprinkling of its seed, and the "
        "mean over its sprinklings; or, with --results, run its campaign, which Ctrl-C pauses and "
        "the same command goes on with.",
        epilog="Exit status: 0 done; 2 bad input; 3 computed, but the certificate is not met, a "
        "number carries a mark or a realisation failed; 130 stopped, or a campaign paused, by "
        "Ctrl-C.",
    )
    parser.add_argument("preset", metavar="PRESET", help=PRESET_HELP)
    parser.add_argument(
        "--points",
        type=Path,
        metavar="CSV",
        help="own points instead of a sprinkling: a CSV file with columns t and x",
    )
    parser.add_argument(
        "--one", action="store_true", help="only the sprinkling of the seed, no mean"
    )
    parser.add_argument(
        "--sweeps",
        action="store_true",
        help="also the sweeps of density, size and separation, with their fits",
    )
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the table",
    )
    parser.add_argument(
        "--arrays",
        type=Path,
        metavar="FILE.npz",
        help="write the points, the eigenvalues and kept masks of both stages and the "
        "symplectic values as NumPy arrays",
    )
    parser.add_argument(
        "--results",
        type=Path,
        metavar="FILE",
        help="run the preset's campaign into this results file, or go on with it",
    )
    parser.add_argument("--workers", type=int, metavar="N", help=WORKERS_HELP)
    parser.add_argument(
        "--dask",
        metavar="ADDRESS",
        help="have the workers of this Dask scheduler compute the campaign",
    )
    return parser


def _plan_parser() -> _Parser:
    parser = _Parser(
        prog="lozenge plan",
        description="Say what a preset's campaign will take: its points, predicted time and "
        "memory, and what will be left out.",
    )
    parser.add_argument("preset", metavar="PRESET", help=PRESET_HELP)
    parser.add_argument("--workers", type=int, metavar="N", help=WORKERS_HELP)
    return parser


def _results_parser() -> _Parser:
    parser = _Parser(
        prog="lozenge results",
        description="Print what a results file holds, finished or not, also while it is written.",
        epilog="Exit status: 0 done; 2 bad input; 3 a sample's certificate is not met, a number "
        "carries a mark or a realisation failed.",
    )
    parser.add_argument("file", type=Path, metavar="FILE", help="the results file of a campaign")
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the report",
    )
    parser.add_argument(
        "--csv",
        type=Path,
        metavar="FILE",
        help="write all samples as CSV; - for the standard output, instead of the report",
    )
    return parser


def _presets_parser() -> _Parser:
    parser = _Parser(
        prog="lozenge presets", description="List the presets that come with the program."
    )
    parser.add_argument(
        "name", metavar="NAME", nargs="?", help="print this one's file instead, to start from"
    )
    return parser


def _port(text: str) -> int:
    if text.isascii() and text.isdigit() and int(text) <= 65535:
        return int(text)
    raise argparse.ArgumentTypeError(f"given {text}; allowed is a whole number from 0 to 65535")


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
    from lozenge_dashboard.run import run

    preset, path = find_preset(options.preset)
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
        names = ("points", "one", "sweeps", "json", "arrays")
        have, do = "with --results", "leave it out; see lozenge results --help for files"
    for name in names:
        if chosen[name] not in (None, False):
            raise refuse(f"--{name}", given=have, allowed="one or the other", do=do)
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
