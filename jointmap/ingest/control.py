"""Control points: landmarks with surveyed coordinates."""

from __future__ import annotations

import numpy as np

from jointmap import schema
from jointmap.ingest.problems import LISTED_ROWS, Problems
from jointmap.ingest.survey import ControlPoints, Floats, Ints
from jointmap.ingest.table import Table
from jointmap.ingest.values import (
    check_sigmas,
    refuse_dimension,
    require,
    require_names,
    require_numbers,
)

SPEC = schema.input_table("control_points")
#: Two surveys of one point contradict each other beyond this many sigmas in one coordinate
#: (probability 0.0027 by chance).
AGREEMENT = 3.0


def read_control(table: Table, dimension: int, problems: Problems) -> ControlPoints | None:
    """The control points of a survey, each name once."""
    refuse_dimension(
        table, SPEC, dimension, problems, ("z_m", "sigma_z_m") if dimension == 2 else ()
    )
    axes = ["x_m", "y_m", "z_m"][:dimension]
    sigmas = [f"sigma_{a}" for a in axes]
    if not require(table, ["landmark", *axes, *sigmas], (), problems):
        return None
    require_names(table, "landmark", problems)
    require_numbers(table, [*axes, *sigmas], problems)
    check_sigmas(table, sigmas, problems)
    table = table.take(np.argsort(table.texts["landmark"].code, kind="stable"))
    table = table.take(table.texts["landmark"].code >= 0)
    names = table.texts["landmark"]
    first = np.flatnonzero(np.diff(names.code, prepend=-1))
    position, sigma = table.matrix(axes), table.matrix(sigmas)
    _compare(table, names.code, position, sigma, problems)
    position, sigma = _average(position, sigma, first)
    kept = table.take(first)
    return ControlPoints(tuple(kept.texts["landmark"].text()), position, sigma, kept.provenance)


def _compare(table: Table, code: Ints, position: Floats, sigma: Floats, problems: Problems) -> None:
    """Repeated points that agree are averaged; those that do not are refused."""
    repeats = np.zeros(len(code), dtype=bool)
    repeats[1:] = code[1:] == code[:-1]
    # Every repeat is compared with the first row of its name.
    start = np.maximum.accumulate(np.where(repeats, 0, np.arange(len(code))))
    with np.errstate(invalid="ignore", divide="ignore"):
        apart = np.abs(position - position[start]) / np.hypot(sigma, sigma[start])
        contradicts = repeats & (apart > AGREEMENT).any(axis=1)
    index = np.flatnonzero(contradicts)
    names = table.take(index[:LISTED_ROWS]).texts["landmark"].text()
    rows = table.row[start[index[:LISTED_ROWS]]]
    message = [
        f"{n!r} contradicts row {r} by {apart[i].max():.3g} sigmas"
        for n, r, i in zip(names, rows, index, strict=False)
    ]
    table.complain(problems, index, "landmark", message, "keep the right one, or mend the sigmas")
    agree = np.flatnonzero(repeats & ~contradicts)
    mend = "the rows are averaged by weight"
    table.complain(problems, agree, "landmark", "the name stands twice", mend, mended=True)


def _average(position: Floats, sigma: Floats, first: Ints) -> tuple[Floats, Floats]:
    """Weighted mean of the rows from each ``first`` to the next, and its sigma."""
    if len(first) == len(position):
        return position, sigma
    weight = 1.0 / sigma**2
    total = np.add.reduceat(weight, first)
    mean = np.add.reduceat(weight * position, first) / total
    return mean, 1.0 / np.sqrt(total)
