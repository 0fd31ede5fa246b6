"""The commands ``grade`` and ``estimate``: arguments, calls, what is printed."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from jointmap import terminal


def fill(parser: argparse.ArgumentParser) -> None:
    """Add the options of ``jointmap grade``."""
    from jointmap.grade.settings import ALIGNMENTS, CASES, GradeSettings

    default = GradeSettings()
    parser.add_argument(
        "references", type=Path, nargs="+", metavar="REFERENCE", help="reference folders, one a run"
    )
    parser.add_argument(
        "--online",
        action="append",
        nargs="+",
        metavar="NAME",
        help="estimators of the survey's folder online/ (default: all)",
    )
    parser.add_argument("--out", type=Path, required=True, metavar="SCORES", help="folder to write")
    parser.add_argument("--replace", action="store_true", help="replace an earlier result")
    parser.add_argument(
        "--survey",
        type=Path,
        action="append",
        metavar="SURVEY",
        help="survey of each reference, in their order (default: as the reference says)",
    )
    parser.add_argument(
        "--align", choices=ALIGNMENTS, default=default.alignment, help="default: by the frame"
    )
    parser.add_argument("--scale", action="store_true", help="estimate a scale with the alignment")
    parser.add_argument(
        "--data",
        choices=CASES,
        default=default.data,
        help="dependence on the reference (default: as estimator.toml declares)",
    )
    parser.add_argument(
        "--tolerance", type=float, metavar="SECONDS", help="of the association in time"
    )
    parser.add_argument("--seed", type=int, default=default.seed, metavar="N", help="default: 0")
    parser.add_argument("--json", action="store_true", help="print scorecard.json, not the page")
    parser.add_argument("--quiet", action="store_true", help="print only what needs attention")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Grade and write; 0, or 3 when a reference is not to be trusted as it is."""
    from jointmap.atomic import check_free, recover
    from jointmap.errors import SettingsError
    from jointmap.grade import GradeSettings, grade
    from jointmap.grade.files import MARKER, write_scores
    from jointmap.grade.page import grade_page, status_line
    from jointmap.ingest import read_survey
    from jointmap.products.files import json_text, read_reference
    from jointmap.progress import choose

    settings = GradeSettings(
        alignment=args.align,
        scale=args.scale,
        data=args.data,
        tolerance_s=args.tolerance,
        seed=args.seed,
    )
    if args.survey is not None and len(args.survey) != len(args.references):
        raise SettingsError(
            f"{len(args.references)} references and {len(args.survey)} surveys: name one for each"
        )
    terminal.tell(recover(args.out))
    check_free(args.out, replace=args.replace, marker=MARKER)
    online = None if args.online is None else [name for part in args.online for name in part]
    progress = choose(quiet=args.quiet or args.json)
    try:
        progress.stage("read")
        references = [read_reference(path) for path in args.references]
        surveys = None if args.survey is None else [read_survey(path) for path in args.survey]
        card = grade(references, surveys, settings, online=online, progress=progress)
        write_scores(card, args.out, replace=args.replace)
    finally:
        progress.finish()
    if args.json:
        terminal.say(json_text(card.to_dict()))
        if card.status != "ok":
            print(status_line(card), file=sys.stderr)
    elif not args.quiet:
        terminal.say(terminal.styled(grade_page(card, terminal.width(), args.out)))
    elif card.status != "ok":
        terminal.say(status_line(card))
    return 0 if card.status == "ok" else 3


def estimate_into(folder: Path, *, replace: bool) -> None:
    """Run the textbook estimators over a survey, write ``online/`` into it, say what was done."""
    from jointmap.ingest import read_survey
    from jointmap.simulate.estimators.write import write_online

    counts = write_online(read_survey(folder), replace=replace)
    told = ", ".join(f"{name} ({n:,} poses)" for name, n in counts.items())
    terminal.say(f"online estimates: {told}")
    terminal.say(f"written to {folder / 'online'}")
