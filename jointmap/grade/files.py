"""A scores folder: written whole or not at all."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from jointmap import schema
from jointmap.atomic import new_folder
from jointmap.grade.page import grade_page
from jointmap.grade.scorecard import Scorecard
from jointmap.products.files import json_text

MARKER = "scorecard.json"
#: Significant digits of numbers in the tables.
DIGITS = 9


def write_scores(scorecard: Scorecard, path: Path | str, replace: bool = False) -> Path:
    """Write scorecard.json, the tables and the page.

    Raises
    ------
    OutputExistsError
        Something stands there that may not be replaced.
    """
    with new_folder(path, replace=replace, marker=MARKER) as folder:
        tables = scorecard.tables()
        for name, stem in schema.SCORE_FILES.items():
            if name == "runs" and len(scorecard.runs) < 2:
                continue
            write_csv(complete(name, tables[stem]), folder / f"{stem}.csv")
        (folder / "page.txt").write_text(grade_page(scorecard), encoding="utf-8")
        (folder / MARKER).write_text(json_text(scorecard.to_dict()) + "\n", encoding="utf-8")
    return Path(path)


def complete(name: str, frame: pd.DataFrame) -> pd.DataFrame:
    """The columns of the schema, in order; those of the other dimension only where given.

    Raises
    ------
    ValueError
        The frame has a column that the table has not.
    """
    columns = schema.output_table(name).columns
    unknown = sorted(set(frame.columns) - {c.name for c in columns})
    if unknown:
        raise ValueError(f"table {name} has no column {', '.join(unknown)}")
    kept = [c.name for c in columns if c.name in frame or len(c.dimensions) == 2]
    return frame.reindex(columns=kept)


def write_csv(frame: pd.DataFrame, path: Path) -> None:
    """Numbers with ``DIGITS`` significant digits (stamps to microseconds), unknown cells empty."""
    shown = frame.copy()
    if "t_s" in shown:
        shown["t_s"] = [f"{t:.6f}" for t in shown["t_s"].to_numpy(np.float64)]
    shown.to_csv(
        path, index=False, lineterminator="\n", encoding="utf-8", float_format=f"%.{DIGITS}g"
    )
