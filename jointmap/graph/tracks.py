"""Which landmark each robot's label claims to be."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Tracks
from jointmap.ingest.survey import Survey

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass
class _Track:
    robot: int
    label: str
    claim: str | None
    row: int
    forced: bool = False
    rejected: bool = False
    oriented: bool = False
    count: int = 0


class TrackTable:
    """Collects tracks while sightings are read; :meth:`freeze` gives the arrays."""

    def __init__(self, survey: Survey) -> None:
        self._survey = survey
        self._tracks: list[_Track] = []
        self._index: dict[tuple[int, str, int], int] = {}
        self._rows: dict[tuple[str, str], list[int]] = {}
        table = survey.associations
        if table is not None:
            for i, key in enumerate(zip(table.robots, table.labels, strict=True)):
                self._rows.setdefault(key, []).append(i)

    def track_of(self, robot: int, labels: tuple[str, ...], target: Ints, t_s: Floats) -> Ints:
        """Track (n,) of each sighting (n,); new tracks are made as needed."""
        name = list(self._survey.robots)[robot]
        out = np.full(len(target), -1, dtype=np.int64)
        for code in np.unique(target):
            mine = np.flatnonzero(target == code)
            label = labels[code]
            rows = self._rows.get((name, label), [])
            for row in rows:
                assert self._survey.associations is not None
                lo = self._survey.associations.t_from_s[row]
                hi = self._survey.associations.t_to_s[row]
                valid = (t_s[mine] >= lo) & (t_s[mine] <= hi)
                if valid.any():
                    out[mine[valid]] = self._get(robot, label, row)
            left = mine[out[mine] < 0]
            if len(left):
                out[left] = self._get(robot, label, -1)
        return out

    def _get(self, robot: int, label: str, row: int) -> int:
        key = (robot, label, row)
        if key not in self._index:
            claim: str | None = None
            table = self._survey.associations
            if table is None:
                claim = label
            elif row >= 0:
                claim = table.landmarks[row]
            self._index[key] = len(self._tracks)
            self._tracks.append(_Track(robot, label, claim, row))
        return self._index[key]

    def count(self, tracks: Ints, *, oriented: bool) -> None:
        """Note that these sightings belong to these tracks."""
        for track, n in zip(*np.unique(tracks, return_counts=True), strict=True):
            self._tracks[track].count += int(n)
            self._tracks[track].oriented |= oriented

    def freeze(self) -> Tracks:
        """The arrays, with the user's edits of associations applied."""
        robots = list(self._survey.robots)
        for edit in self._survey.edits.associations:
            for track in self._tracks:
                if (robots[track.robot], track.label) != (edit.robot, edit.label):
                    continue
                if edit.action == "force":
                    track.forced, track.claim = True, edit.landmark or track.claim
                elif edit.landmark is None or edit.landmark == track.claim:
                    track.rejected = True
        for track in self._tracks:
            # What a label is forced to be says what the rejection of its claim leaves open.
            track.rejected &= not track.forced
        names = dict.fromkeys(t.claim for t in self._tracks if t.claim is not None)
        control = self._survey.control_points
        if control is not None:
            names.update(dict.fromkeys(control.landmarks))
        ids = {name: i for i, name in enumerate(names)}
        return Tracks(
            robot=np.array([t.robot for t in self._tracks], dtype=np.int64),
            labels=tuple(t.label for t in self._tracks),
            claim=np.array([-1 if t.claim is None else ids[t.claim] for t in self._tracks], int),
            association_row=np.array([t.row for t in self._tracks], dtype=np.int64),
            forced=np.array([t.forced for t in self._tracks], dtype=bool),
            rejected=np.array([t.rejected for t in self._tracks], dtype=bool),
            oriented=np.array([t.oriented for t in self._tracks], dtype=bool),
            n_sightings=np.array([t.count for t in self._tracks], dtype=np.int64),
            landmarks=tuple(names),
        )
