"""Which tracks place the shared landmark that they claim where the others do."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Probability that a right track agrees with the place of its landmark.
_GATE = 0.999


def agreeing(
    position: Floats, covariance: Floats, key: Ints, group: Ints, owner: Ints, site: int
) -> Bools:
    """Tell which members (n,) of each landmark agree with its best supported place.

    Parameters
    ----------
    position : (n, d) in the frame of the member's group
    covariance : (n, d, d)
    key : (n,) claimed landmark, -1 for none (never accepted)
    group : (n,) connected group of runs
    owner : (n,) whose statement it is; the word of number ``site`` is final

    Notes
    -----
    Of all groups that claim a landmark only the one with most members may have it: nothing says
    that the others' landmark of that name is the same thing. Where two places have as many
    members, the owner that others confirm more often is believed: a first pass counts that.
    """
    good = np.flatnonzero((key >= 0) & np.isfinite(position).all(axis=1))
    order = good[np.lexsort((group[good], key[good]))]
    parties = []
    for members in np.split(order, np.flatnonzero(np.diff(key[order])) + 1):
        if len(members):
            groups, count = np.unique(group[members], return_counts=True)
            mine = members[group[members] == groups[int(np.argmax(count))]]
            parties.append((mine, _close(position[mine], covariance[mine])))
    confirmed, contested = np.ones(site + 1), np.full(site + 1, 2.0)
    for mine, close in parties:
        if len(mine) > 1:
            np.add.at(contested, owner[mine], 1.0)
            np.add.at(confirmed, owner[mine], close.sum(axis=1) > 1)
    trust = confirmed / contested
    trust[site] = 1e3
    accepted = np.zeros(len(key), dtype=bool)
    for mine, close in parties:
        weight = trust[owner[mine]]
        votes = close.sum(axis=1) + 0.9 * close @ weight / max(float(weight.sum()), 1e-9)
        votes += 10.0 * close @ (weight > 1.0)
        accepted[mine] = close[int(np.argmax(votes))]
    return accepted


def _close(position: Floats, covariance: Floats) -> Bools:
    """Tell which members (n, n) place the landmark alike."""
    difference = position[:, None] - position[None, :]
    total = covariance[:, None] + covariance[None, :]
    distance = np.einsum("ijk,ijkl,ijl->ij", difference, np.linalg.inv(total), difference)
    return np.asarray(distance <= chi2.ppf(_GATE, position.shape[1]))
