"""Labels, and associations of labels with landmarks that are wrong on purpose.

An association can be made wrong only where another robot also sees the landmark: elsewhere
nothing would contradict it. Counts are exact to rounding (to pairs for swaps).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class AssociationTable:
    """One row per robot and plate that it sees, ordered by robot and plate number.

    ``robot`` (n,) index; ``plate`` (n,) the true plate; ``claim`` (n,) the plate that the
    associations name; ``listed`` (n,) whether they list the label at all; ``labels`` (n,).
    """

    robot: Ints
    plate: Ints
    claim: Ints
    listed: Bools
    labels: tuple[str, ...]

    @property
    def wrong(self) -> Bools:
        """Rows whose association is wrong (n,)."""
        return np.asarray(self.claim != self.plate, dtype=np.bool_)


def associate(
    seen: Mapping[str, Ints],
    plate_names: tuple[str, ...],
    settings: SimulationSettings,
    streams: Streams,
) -> AssociationTable:
    """Labels and associations of a team.

    Parameters
    ----------
    seen : mapping of robot name to (k,) int
        Plates in the order of first sighting, each once.
    """
    own = own_labels(settings)
    robot = np.repeat(np.arange(len(seen)), [len(p) for p in seen.values()])
    plate = np.concatenate([np.sort(p) for p in seen.values()]).astype(np.int64)
    labels: list[str] = []
    for name, plates in seen.items():
        prefix = _prefix(name, tuple(seen))
        if own:
            # a robot counts the plates in the order in which it meets them
            labels += [f"{prefix}-{k + 1:03d}" for k in np.argsort(plates, kind="stable")]
        else:
            labels += [plate_names[k] for k in np.sort(plates)]
    claim = wrong_claims(robot, plate, settings, streams)
    chance = streams.get("unlisted").permutation(len(plate))
    listed = chance >= round(settings.unlisted * len(plate))
    return AssociationTable(robot, plate, claim, listed, tuple(labels))


def own_labels(settings: SimulationSettings) -> bool:
    """Whether robots name landmarks by themselves, so that associations are needed."""
    if settings.labels == "auto":
        return settings.wrong_associations > 0 or settings.unlisted > 0
    return settings.labels == "own"


def _prefix(name: str, team: tuple[str, ...]) -> str:
    """Shortest beginning of a name that no other robot's name shares."""
    for length in range(1, len(name)):
        if sum(other.startswith(name[:length]) for other in team) == 1:
            return name[:length]
    return name


def wrong_claims(robot: Ints, plate: Ints, settings: SimulationSettings, streams: Streams) -> Ints:
    """Claimed plates (n,), wrong for the stated share of the rows that another robot can check."""
    claim = plate.copy()
    pairs, counts = np.unique(plate, return_counts=True)
    shared = counts[np.searchsorted(pairs, plate)] > 1
    eligible = np.flatnonzero(shared)
    count = round(settings.wrong_associations * len(eligible))
    rng = streams.get("associations", settings.wrong_pattern)
    if count == 0 or len(np.unique(plate[eligible])) < 2:
        return claim
    if settings.wrong_pattern == "random":
        rows = rng.permutation(eligible)[:count]
        _at_random(claim, rows, np.unique(plate[eligible]), rng)
    elif settings.wrong_pattern == "swapped":
        _swap(claim, eligible, robot, count, rng)
    elif settings.wrong_pattern == "shifted":
        _shift(claim, eligible, robot, count, rng)
    else:
        shifted = _shift(claim, eligible, robot, count // 2, rng)
        rest = np.setdiff1d(eligible, shifted)
        _swap(claim, rest, robot, count - len(shifted), rng)
    return claim


def _at_random(claim: Ints, rows: Ints, targets: Ints, rng: np.random.Generator) -> None:
    """Send rows to other shared plates, each of them equally likely."""
    own = np.searchsorted(targets, claim[rows])
    claim[rows] = targets[(own + rng.integers(1, len(targets), len(rows))) % len(targets)]


def _swap(claim: Ints, rows: Ints, robot: Ints, count: int, rng: np.random.Generator) -> None:
    """Exchange plates within pairs of rows of one robot until ``count`` rows are wrong."""
    mixed = rng.permutation(rows)
    mixed = mixed[np.argsort(robot[mixed], kind="stable")]
    pairs = []
    for part in np.split(mixed, np.flatnonzero(np.diff(robot[mixed])) + 1):
        pairs.append(part[: len(part) // 2 * 2].reshape(-1, 2))
    chosen = rng.permutation(np.concatenate(pairs))[: (count + 1) // 2]
    claim[chosen] = claim[chosen[:, ::-1]]


def _shift(claim: Ints, rows: Ints, robot: Ints, count: int, rng: np.random.Generator) -> Ints:
    """Shift a block of rows of each of several robots by one, ordered along the walls.

    Blocks are spread evenly over the team, at least four rows each where there are that many, so
    that the stated share is that of every robot and not the ruin of one. Returns the rows changed.
    """
    changed: list[Ints] = [np.empty(0, dtype=np.int64)]
    truth = claim.copy()
    numbers = rng.permutation(np.unique(robot[rows]))
    blocks = int(np.clip(count // 4, 1, len(numbers)))
    for place, number in enumerate(numbers):
        if count <= 0:
            break
        own = rows[robot[rows] == number]
        wanted = -(-count // max(blocks - place, 1))
        size = min(wanted, len(own) - 1)
        if size < 1:
            continue
        first = int(rng.integers(0, len(own) - size))
        block = own[first : first + size]
        claim[block] = truth[own[first + 1 : first + size + 1]]
        changed.append(block)
        count -= size
    return np.concatenate(changed)
