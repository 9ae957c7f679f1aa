"""The command line: serve the page, compute a preset, list the presets that come with it."""

from __future__ import annotations

import argparse
import difflib
import io
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
        certificate is not met or a number carries a mark; 130 stopped by Ctrl-C.
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
        "'lozenge presets' lists the presets that come with the program. "
        "See 'lozenge run --help'.",
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
        "mean over its sprinklings.",
        epilog="Exit status: 0 done; 2 bad input; 3 computed, but the certificate is not met or "
        "a number carries a mark; 130 stopped by Ctrl-C.",
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
