"""Which landmark each sighting is of, by the survey's associations."""

from __future__ import annotations

import numpy as np

from jointmap.ingest.survey import Associations, Ints, Observations


def private_name(robot: str, label: str) -> str:
    """Name of a landmark that only one robot knows."""
    return f"{robot}:{label}"


def landmarks_of(
    robot: str, sightings: Observations, associations: Associations | None
) -> tuple[Ints, tuple[str, ...]]:
    """Landmark of each sighting of one robot.

    Without associations a label is the landmark itself. With them, a sighting whose label is
    listed and whose stamp lies in the row's interval belongs to the row's landmark, any other to
    the private landmark ``robot:label``.

    Returns
    -------
    code : (n,) int
        Index into the names.
    names : tuple of str
        Sorted names of the landmarks that the robot sighted.
    """
    if associations is None:
        return sightings.target, sightings.targets
    names = [private_name(robot, label) for label in sightings.targets]
    place: dict[str, int] = {}
    code = sightings.target.copy()
    order = np.argsort(sightings.target, kind="stable")
    bounds = np.searchsorted(sightings.target[order], np.arange(len(sightings.targets) + 1))
    where = {label: i for i, label in enumerate(sightings.targets)}
    for i, (owner, label) in enumerate(zip(associations.robots, associations.labels, strict=True)):
        k = where.get(label)
        if owner != robot or k is None:
            continue
        rows = order[bounds[k] : bounds[k + 1]]
        t = sightings.t_s[rows]
        inside = rows[(t >= associations.t_from_s[i]) & (t <= associations.t_to_s[i])]
        landmark = associations.landmarks[i]
        if landmark not in place:
            place[landmark] = len(names)
            names.append(landmark)
        code[inside] = place[landmark]
    return _sorted(code, names)


def _sorted(code: Ints, names: list[str]) -> tuple[Ints, tuple[str, ...]]:
    """Names that occur, sorted and once each, with the codes that go with them."""
    used = np.unique(code)
    kept = sorted({names[i] for i in used.tolist()})
    place = {n: i for i, n in enumerate(kept)}
    to = np.full(len(names), -1, dtype=np.int64)
    to[used] = [place[names[i]] for i in used.tolist()]
    return to[code], tuple(kept)
