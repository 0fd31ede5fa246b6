"""Finding odometry in degrees where radians are asked for.

A yaw may be unwrapped and grow for ever, so its size alone tells nothing.
"""

from __future__ import annotations

import numpy as np

from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Floats, Ints
from jointmap.ingest.table import Table
from jointmap.ingest.values import DEGREES_MEND, SLACK_RAD, TURN

#: Turn rates that no robot of this kind sustains in radians per second (570 degrees a second),
#: and that ten degrees a second written as degrees reach.
FAST_RADPS = 10.0
_SHARE = 0.01
#: Steps looked at; a hundred thousand tell a concentration to better than 1 %.
SAMPLED = 100_000


def check_turn_rates(table: Table, columns: list[str], problems: Problems) -> None:
    """Refuse turn rates of which more than 1 % are too fast for radians."""
    for column in columns:
        rate = np.abs(table.number(column))
        fast = rate > FAST_RADPS
        if fast.mean() > _SHARE if len(rate) else False:
            largest = float(np.nanmax(rate))
            message = f"{fast.mean():.0%} of the turn rates pass {FAST_RADPS:g} rad/s"
            message += f" (up to {largest:.4g}): degrees for radians"
            worst = np.flatnonzero(fast)[:1]
            table.complain(problems, worst, column, message, DEGREES_MEND)


def check_heading(table: Table, problems: Problems) -> None:
    """Refuse a yaw column in degrees, told by its jumps, its rates or the direction of travel."""
    yaw = table.number("yaw_rad")
    if len(yaw) < 2 or not float(np.nanmax(np.abs(yaw), initial=0.0)) > TURN + SLACK_RAD:
        return
    # Steps between neighbours, evenly chosen where there are very many of them.
    first = np.arange(0, len(yaw) - 1, max(1, (len(yaw) - 1) // SAMPLED))
    evidence = _jumps(yaw) or _rates(table.number("t_s"), yaw, first)
    evidence = evidence or _travel(table.number("x_m"), table.number("y_m"), yaw, first)
    if evidence is None:
        return
    where = np.flatnonzero(np.abs(yaw) > TURN + SLACK_RAD)[:1]
    message = f"{evidence}: degrees for radians"
    table.complain(problems, where, "yaw_rad", message, DEGREES_MEND)


def _jumps(yaw: Floats) -> str | None:
    """Wrapped radians jump by one turn at most, unwrapped ones by less than half a turn."""
    step = np.abs(np.diff(yaw))
    largest = float(np.nanmax(step, initial=0.0))
    return f"the yaw jumps by {largest:.4g}" if largest > TURN + SLACK_RAD else None


def _rates(t: Floats, yaw: Floats, first: Ints) -> str | None:
    gap = t[first + 1] - t[first]
    step = np.abs(yaw[first + 1] - yaw[first])
    # A jump of nearly a turn is wrapping, not motion.
    moving = (gap > 0.0) & (step < 0.75 * TURN)
    if not moving.any():
        return None
    fast = (step[moving] / gap[moving] > FAST_RADPS).mean()
    return f"{fast:.0%} of the turn rates pass {FAST_RADPS:g} rad/s" if fast > _SHARE else None


def _travel(x: Floats, y: Floats, yaw: Floats, first: Ints) -> str | None:
    """Compare the direction of travel with the yaw, taken as radians and as degrees.

    The resultant length of ``exp(2 i (direction - yaw))`` is near one when the robot moves along
    its x axis, forwards or backwards, and near zero when the angles do not belong together.
    """
    dx, dy = x[first + 1] - x[first], y[first + 1] - y[first]
    length = np.hypot(dx, dy)
    ends = length > 0.0
    if ends.sum() < 20:
        return None
    ends &= length >= np.quantile(length[ends], 0.5)
    direction = np.arctan2(dy[ends], dx[ends])
    heading = yaw[first][ends]
    as_radians = _resultant(direction - heading)
    as_degrees = _resultant(direction - np.radians(heading))
    if as_degrees > 0.8 and as_radians < 0.5:
        return "the yaw follows the direction of travel only when taken as degrees"
    return None


def _resultant(angle: Floats) -> float:
    return float(np.abs(np.exp(2j * angle).mean()))
