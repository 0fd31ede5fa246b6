"""Does the reference hold on data that it has not used?

An association ties what one robot saw under a label to what the others say about that landmark.
Left out, the robot's own landmark is a prediction that the others' never touched: the deviation
over its predicted covariance is the deleted residual v / r of the tie (Baarda 1968), exact and
without another solve. On a reference whose claims are right the squares have the mean 1 per degree
of freedom. What they have more is what the claims lack: errors common to a robot's sightings of a
landmark that no noise model of single rows contains.

The k ties of one landmark are one adjustment with k - 1 of them to spare, and count as such.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.problem import Problem
from jointmap.solve.system import System
from jointmap.trust.marginals import SelectedInverse
from jointmap.trust.quality import Quality
from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Fewest effective degrees of freedom from which a claim is judged (a variance from fewer is known
#: to no better than a factor of 2).
LEAST_EFFECTIVE = 10.0
#: Share of right means inside the band.
CONFIDENCE = 0.95


@dataclass(frozen=True)
class Fold:
    """One group that was left out: ``normalized_square`` is the mean per degree of freedom.

    ``n`` ties, ``n_effective`` degrees of freedom; ``lower`` and ``upper`` the band in which 95 % of
    the means lie when the claims are right.
    """

    kind: str
    name: str
    n: int
    n_effective: float
    normalized_square: float
    lower: float
    upper: float


@dataclass(frozen=True)
class HoldOut:
    """All folds, and the factor by which the claimed sigmas are enlarged because of them."""

    folds: tuple[Fold, ...]
    factor: float

    @property
    def whole(self) -> Fold | None:
        """The fold of all ties together."""
        return next((f for f in self.folds if f.kind == "team"), None)


def hold_out(problem: Problem, system: System, quality: Quality) -> HoldOut:
    """Leave-one-tie-out evidence by team, robot and landmark."""
    if quality.links is None or not len(system.links.track):
        return HoldOut((), 1.0)
    statistic, dof = quality.links.statistic()
    tested = dof > 0
    shared = system.links.shared
    # How many tested ties hold each landmark: k of them have k - 1 independent deviations.
    holding = np.bincount(shared[tested], minlength=int(shared.max()) + 1)[shared]
    share = np.where(tested & (holding > 1), (holding - 1.0) / np.maximum(holding, 1), 0.0)
    robot = problem.tracks.robot[system.links.track]
    folds = [_fold("team", "all", statistic, dof, share)]
    for r, name in enumerate(problem.robots):
        folds.append(_fold("robot", name, statistic, dof, share * (robot == r)))
    for landmark in np.unique(shared[share > 0]):
        name = problem.tracks.landmarks[int(landmark)]
        folds.append(_fold("landmark", name, statistic, dof, share * (shared == landmark)))
    folds = [f for f in folds if f.n > 0]
    whole = next((f for f in folds if f.kind == "team"), None)
    factor = 1.0
    if (
        whole is not None
        and whole.n_effective >= LEAST_EFFECTIVE
        and (whole.normalized_square > whole.upper)
    ):
        factor = float(np.sqrt(whole.normalized_square))
    return HoldOut(tuple(folds), factor)


def _fold(kind: str, name: str, statistic: Floats, dof: Floats, share: Floats) -> Fold:
    effective = float((share * dof).sum())
    if effective <= 0.0:
        return Fold(kind, name, 0, 0.0, np.nan, np.nan, np.nan)
    mean = float((share * statistic).sum() / effective)
    tail = (1.0 - CONFIDENCE) / 2.0
    lower, upper = (float(chi2.ppf(p, effective)) / effective for p in (tail, 1.0 - tail))
    return Fold(kind, name, int((share > 0).sum()), effective, mean, lower, upper)


def enlarged(quality: Quality, factor: float) -> Quality:
    """The same quality with every covariance ``factor`` squared times as large.

    Residuals, redundancies and test statistics stay those of the model.
    """
    if factor == 1.0:
        return quality
    tree = quality.inverse.tree
    bigger = replace(tree, panel=tree.panel / factor)
    return replace(
        quality,
        inverse=SelectedInverse(bigger, quality.inverse.covariance * factor**2),
        factor=SquareRootFactor(bigger),
    )
