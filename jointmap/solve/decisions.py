"""Which rows enter a solve, and with what weight: the inlier set.

The final solution has no kernel: rows are in at full weight or out. Odometry is the exception: a
step that disagrees grossly (wheel slip, a relocalisation jump) cannot be left out without cutting
the trajectory in two, so it stays with a weight that no longer pulls.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.problem import Block

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Kinds whose rows vetting may reject as a whole.
VETTED = ("sighting", "encounter", "closure", "fix", "control")
#: Probability that a good odometry step passes; far out, since real motion has heavy tails.
ODOMETRY_GATE = 1.0 - 1e-7
#: A step this many times beyond the gate counts as a jump and keeps only a nominal weight.
JUMP_RATIO = 10.0
JUMP_WEIGHT = 1e-8
#: Quantiles at which the spread of a block's statistics is read, to gate against its real scale;
#: the lower one holds where most of the rows are wrong.
_SCALE_QUANTILES = (0.25, 0.5)
_SCALE_LEAST = 20


@dataclass(frozen=True)
class Decisions:
    """The inlier set: ``accepted`` (T,) associations; per block ``used`` (n,) rows, ``weight``
    (n,) (one unless odometry is doubted) and ``usable`` (n,) rows that may ever be used.
    """

    accepted: Bools
    used: tuple[Bools, ...]
    weight: tuple[Floats, ...]
    usable: tuple[Bools, ...]


def statistic_scale(statistic: Floats, dof: Floats) -> float:
    """Robust variance factor (at least 1) of a block's test statistics.

    Sigmas that are too small would turn half of the good rows into suspects; the gate is therefore
    taken relative to quantiles of the statistics over those of their chi-square law. Too small
    sigmas stretch all quantiles alike, wrong rows the upper ones: the smallest ratio counts.
    """
    good = dof > 0
    if good.sum() < _SCALE_LEAST:
        return 1.0
    ratios = [np.quantile(statistic[good] / chi2.ppf(q, dof[good]), q) for q in _SCALE_QUANTILES]
    return max(1.0, float(min(ratios)))


def gate_rows(
    block: Block, statistic: Floats, dof: Floats, gate: float, scale: float | None = None
) -> tuple[Bools, Floats]:
    """Rows that stay in (n,) and their weights (n,).

    Parameters
    ----------
    statistic, dof : (n,) chi-square statistic of each row and its degrees of freedom (0: not
        tested, stays)
    gate : probability that a good row passes
    scale : variance factor of the statistics; None: from themselves
    """
    scale = statistic_scale(statistic, dof) if scale is None else scale
    weight = np.ones(len(statistic))
    tested = dof > 0
    if block.kind == "odometry":
        limit = chi2.ppf(ODOMETRY_GATE, np.maximum(dof, 1))
        limit = limit * scale
        over = np.where(tested, statistic / limit, 0.0)
        weight = np.where(over > 1.0, np.maximum(over, 1.0) ** -2.0, 1.0)
        weight[over > JUMP_RATIO] = JUMP_WEIGHT
        return np.ones(len(statistic), dtype=bool), weight
    if block.kind not in VETTED:
        return np.ones(len(statistic), dtype=bool), weight
    limit = chi2.ppf(gate, np.maximum(dof, 1)) * scale
    return ~(tested & (statistic > limit)), weight
