"""Commands, and nothing else: arguments, calls, what is printed, exit codes.

Everything heavy is imported inside the command that needs it, so that ``--help`` is instant.
"""

from __future__ import annotations

import argparse
import errno
import signal
import sys
import threading
from collections.abc import Callable, Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, NoReturn

from jointmap import __version__, terminal
from jointmap.errors import JointMapError, SettingsError
from jointmap.settings import DATUMS, KERNELS, NOISE_MODES, Settings

if TYPE_CHECKING:
    from jointmap.products.reference import Reference
    from jointmap.settings import DatumKind, Kernel, NoiseMode

OK, FAULT, REFUSED, DOUBTFUL, INTERRUPTED = 0, 1, 2, 3, 130

_EXIT_CODES = """exit codes:
  0    done
  1    a fault of this program
  2    the input or the command line was refused
  3    done, but not to be trusted as it is; the last line says why
  130  interrupted
"""
#: What a disk may refuse without a fault of the program.
_DISK_ERRORS = {
    errno.EACCES,
    errno.EPERM,
    errno.EROFS,
    errno.ENOSPC,
    errno.EDQUOT,
    errno.ENAMETOOLONG,
}
#: Signals that asked this run to end; a callback of a compiled library may lose the exception.
_interrupts: list[int] = []
_FORMATS = "CSV, .csv.gz or Parquet, by its name"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command.

    Returns
    -------
    int
        Exit code; argparse itself raises SystemExit(2) on wrong usage and (0) after ``--help``.
    """
    _interrupts.clear()
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, _interrupt)
        # A shell that starts this in the background wants Ctrl-C ignored.
        if signal.getsignal(signal.SIGINT) is signal.default_int_handler:
            signal.signal(signal.SIGINT, _interrupt)
    given = list(sys.argv[1:] if arguments is None else arguments)
    args = _parser(given).parse_args(given)
    run: Callable[[argparse.Namespace], int] = args.run
    try:
        return run(args)
    except JointMapError as error:
        terminal.refuse(error, as_json=getattr(args, "json", False))
        return REFUSED
    except KeyboardInterrupt:
        return _interrupted()
    except OSError as error:
        if error.errno not in _DISK_ERRORS:
            terminal.fault(error)
            return FAULT
        print(f"jointmap: {error.filename or 'disk'}: {error.strerror}", file=sys.stderr)
        return REFUSED
    except Exception as error:
        # A library that is just being loaded turns the interrupt into an error of its own.
        if _interrupts:
            return _interrupted()
        terminal.fault(error)
        return FAULT


def _interrupt(signum: int, frame: FrameType | None) -> NoReturn:
    # The same way out for every signal: each `finally` on it runs.
    _interrupts.append(signum)
    raise KeyboardInterrupt


def _interrupted() -> int:
    print("interrupted: no result was written", file=sys.stderr)
    return INTERRUPTED


def _parser(given: Sequence[str]) -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="jointmap",
        description="Fuse the logs of a robot team into one reference that knows how good it is.",
        epilog=_EXIT_CODES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"jointmap {__version__}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)
    chosen = next((word for word in given if not word.startswith("-")), "")
    for name, (fill, text) in _COMMANDS.items():
        command = commands.add_parser(name, help=text, description=text[0].upper() + text[1:] + ".")
        # Only the chosen command fetches its options: those of `simulate` cost an import.
        if name == chosen:
            fill(command)
    return parser


def _add_replace(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--replace", action="store_true", help="replace an earlier result")


def _fill_simulate(parser: argparse.ArgumentParser) -> None:
    from jointmap.simulate.options import add_arguments

    parser.add_argument("world", choices=("quarry-2d", "quarry-3d"), help="which world")
    parser.add_argument("--out", type=Path, required=True, metavar="SURVEY", help="folder to write")
    parser.add_argument(
        "--online",
        action="store_true",
        help="run the textbook online estimators over it too (planar worlds)",
    )
    parser.add_argument("--seed", type=int, default=0, metavar="N", help="seed (default: 0)")
    _add_replace(parser)
    add_arguments(parser)
    parser.set_defaults(run=_simulate)


def _simulate(args: argparse.Namespace) -> int:
    from jointmap.atomic import recover
    from jointmap.simulate.options import settings_from
    from jointmap.simulate.run import simulate

    terminal.tell(recover(args.out))
    settings = settings_from(args)
    if args.online and args.world != "quarry-2d":
        raise SettingsError("--online: the textbook estimators are planar; choose quarry-2d")
    report = simulate(args.world, args.out, settings, seed=args.seed, replace=args.replace)
    terminal.say("\n".join(report.lines()))
    if args.online:
        from jointmap.commands_grade import estimate_into

        estimate_into(args.out, replace=False)
    return OK


def _fill_estimate(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("survey", type=Path, metavar="SURVEY", help="survey folder, planar")
    _add_replace(parser)
    parser.set_defaults(run=_estimate)


def _estimate(args: argparse.Namespace) -> int:
    from jointmap.commands_grade import estimate_into

    estimate_into(args.survey, replace=args.replace)
    return OK


def _fill_import(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("format", choices=("mrclam",), help="layout of the logs")
    parser.add_argument("folder", type=Path, metavar="FOLDER", help="folder with the logs")
    parser.add_argument("--out", type=Path, required=True, metavar="SURVEY", help="folder to write")
    _add_replace(parser)
    parser.set_defaults(run=_import)


def _import(args: argparse.Namespace) -> int:
    from jointmap.atomic import recover
    from jointmap.ingest.mrclam import import_mrclam

    terminal.tell(recover(args.out))
    report = import_mrclam(args.folder, args.out, replace=args.replace)
    terminal.say("\n".join(report.lines()))
    return OK


def _fill_check(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("survey", type=Path, metavar="SURVEY", help="survey folder")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=_check)


def _check(args: argparse.Namespace) -> int:
    from jointmap.atomic import recover
    from jointmap.ingest import read_survey
    from jointmap.ingest.summary import summarise, summary_dict, summary_lines
    from jointmap.products.files import json_text

    terminal.tell(recover(args.survey))
    summary = summarise(read_survey(args.survey))
    if args.json:
        terminal.say(json_text({"ok": True, **summary_dict(summary)}))
    else:
        terminal.say("\n".join(summary_lines(summary)))
    return OK


def _fill_fuse(parser: argparse.ArgumentParser) -> None:
    default = Settings()
    parser.add_argument("survey", type=Path, metavar="SURVEY", help="survey folder")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="REFERENCE", help="folder to write"
    )
    _add_replace(parser)
    parser.add_argument(
        "--datum",
        choices=DATUMS,
        help="what coordinates and covariances refer to (default: as survey.toml says)",
    )
    parser.add_argument(
        "--robot",
        metavar="NAME",
        help="robot whose first pose the coordinates start at (default: as survey.toml says)",
    )
    parser.add_argument(
        "--kernel",
        choices=KERNELS,
        default=default.kernel,
        help=f"robust kernel of the first solves (default: {default.kernel})",
    )
    parser.add_argument(
        "--noise",
        choices=NOISE_MODES,
        default=default.noise,
        help="given: sigmas as the survey states them, defaults elsewhere; estimated: from the "
        f"data where they can tell (default: {default.noise})",
    )
    parser.add_argument(
        "--seed",
        type=int,
        default=default.seed,
        metavar="N",
        help=f"seed of everything random (default: {default.seed})",
    )
    parser.add_argument("--json", action="store_true", help="print reference.json, not the page")
    parser.add_argument("--quiet", action="store_true", help="print only what needs attention")
    parser.set_defaults(run=_fuse)


def _fuse(args: argparse.Namespace) -> int:
    from jointmap.atomic import check_free, recover
    from jointmap.fuse import fuse
    from jointmap.ingest import read_survey
    from jointmap.products.files import MARKER, write_reference
    from jointmap.progress import choose

    settings = _settings(args)
    terminal.tell(recover(args.out))
    # Said before hours of work, not after them.
    check_free(args.out, replace=args.replace, marker=MARKER)
    progress = choose(quiet=args.quiet or args.json)
    try:
        progress.stage("read")
        survey = read_survey(args.survey)
        reference = fuse(survey, settings, progress)
        if _interrupts:
            raise KeyboardInterrupt
        write_reference(reference, args.out, replace=args.replace)
    finally:
        progress.finish()
    _show(reference, args)
    return OK if reference.status == "ok" else DOUBTFUL


def _settings(args: argparse.Namespace) -> Settings:
    kernel: Kernel = args.kernel
    datum: DatumKind | None = args.datum
    noise: NoiseMode = args.noise
    return Settings(kernel=kernel, datum=datum, datum_robot=args.robot, noise=noise, seed=args.seed)


def _show(reference: Reference, args: argparse.Namespace) -> None:
    from jointmap.products.files import json_text
    from jointmap.products.page import fuse_page, status_line

    if args.json:
        terminal.say(json_text(reference.meta))
        if reference.status != "ok":
            print(status_line(reference), file=sys.stderr)
    elif not args.quiet:
        terminal.say(terminal.styled(fuse_page(reference, terminal.width(), args.out)))
    elif reference.status != "ok":
        terminal.say(status_line(reference))


def _fill_grade(parser: argparse.ArgumentParser) -> None:
    from jointmap import commands_grade

    commands_grade.fill(parser)


def _fill_poses(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("reference", type=Path, metavar="REFERENCE", help="reference folder")
    parser.add_argument(
        "--at", type=Path, required=True, metavar="FILE", help=f"columns robot, t_s; {_FORMATS}"
    )
    parser.add_argument(
        "--out", type=Path, required=True, metavar="FILE", help=f"what to write; {_FORMATS}"
    )
    _add_replace(parser)
    parser.set_defaults(run=_poses)


def _poses(args: argparse.Namespace) -> int:
    from jointmap.products.files import read_reference
    from jointmap.products.stamps import answer, read_stamps, write_table

    reference = read_reference(args.reference)
    stamps = read_stamps(args.at, tuple(reference.trajectories))
    answers = answer(reference, stamps)
    write_table(answers, args.out, replace=args.replace)
    unknown = int(answers["reason"].ne("").sum())
    terminal.say(f"{len(answers):,} poses written to {args.out}")
    if unknown:
        terminal.say(f"incomplete: {unknown:,}; the column reason says why")
    return OK


_COMMANDS: dict[str, tuple[Callable[[argparse.ArgumentParser], None], str]] = {
    "simulate": (_fill_simulate, "write a survey of a made-up quarry, with its truth"),
    "estimate": (_fill_estimate, "run textbook online estimators over a planar survey"),
    "import": (_fill_import, "write a survey from logs in another layout"),
    "check": (_fill_check, "read a survey and say what is in it and what is wrong with it"),
    "fuse": (_fill_fuse, "fuse a survey into a reference"),
    "poses": (_fill_poses, "pose and covariance of robots at given stamps"),
    "grade": (_fill_grade, "grade online estimates against references"),
}
