"""Which constant errors of sensors the data speak for.

Range bias, range scale and bearing offset are zero until the data say otherwise. With the posterior
mean ``s`` and covariance ``P`` of one of them over all sensors and the prior ``P0`` around zero, the
data alone give the information and the score

    N = P^-1 - P0^-1,   b = P^-1 s,   T = b^T N^+ b,

and T is chi-square with rank(N) degrees of freedom while all of them are zero (Rao 1948). What the
data cannot tell, such as a scale error common to all sensors, has no part in N and none in T.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.problem import State
from jointmap.solve.shared import SENSOR_PARAMETERS, SENSOR_PRIOR
from jointmap.solve.system import System
from jointmap.trust.quality import Quality

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Chance that a constant error is found where there is none.
FALSE_ALARM = 1e-3
#: Information below this share of the prior's tells nothing.
LEAST_INFORMATION = 0.1


@dataclass(frozen=True)
class Constants:
    """Outcome of the test: ``used`` (3,) by parameter; ``value`` and ``sigma`` (S, 3) as estimated
    with all of them free, sigmas of the model alone.
    """

    used: Bools
    value: Floats
    sigma: Floats


def judge_constants(system: System, quality: Quality, state: State) -> Constants | None:
    """Test the constant errors of a solve in which all are free; None where there are none.

    The sigmas are those of the model alone also where left-out sightings say that it claims too
    much: there a constant error in doubt is better kept, for it only adds to what is claimed.
    """
    extras = system.extras
    if extras is None or not len(extras.sensors):
        return None
    n, q = len(extras.sensors), len(SENSOR_PARAMETERS)
    key = extras.key0 + np.arange(n)
    value = extras.values(state.extra, key, q)
    rows, columns = np.repeat(np.arange(n), n), np.tile(np.arange(n), n)
    joint = quality.inverse.pairs(key[rows], key[columns]).reshape(n, n, q, q)
    used = np.zeros(q, dtype=bool)
    for i in range(q):
        information = np.linalg.inv(joint[:, :, i, i])
        score = information @ value[:, i]
        prior = 1.0 / SENSOR_PRIOR[i] ** 2
        size, axes = np.linalg.eigh(information - prior * np.eye(n))
        told = size > LEAST_INFORMATION * prior
        statistic = float(((axes.T @ score)[told] ** 2 / size[told]).sum())
        limit = float(chi2.ppf(1.0 - FALSE_ALARM, max(int(told.sum()), 1)))
        used[i] = bool(told.any()) and statistic > limit
    sigma = np.sqrt(np.einsum("nii->ni", joint[np.arange(n), np.arange(n)]))
    return Constants(used, value, sigma)
