"""The square root of the information matrix as flat arrays, without GTSAM objects.

Layout. Cliques are numbered in depth-first order, parents before children. Clique ``c`` owns the
keys ``keys[key_start[c]:key_start[c + 1]]``, its ``frontals[c]`` frontal keys first, and the dense
panel ``[R T]`` (rows: frontal scalars; columns: frontal then separator scalars, row by row) at
``panel[panel_start[c]:panel_start[c + 1]]``. Scalars are numbered key by key: key ``k`` owns
``offset[k] .. offset[k] + dims[k] - 1``, whatever the elimination order.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.trust import kernels

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class CliqueTree:
    """Cliques of an eliminated linear system (see the module's text for the layout).

    Parameters
    ----------
    dims : (n,) int
        Tangent dimension of every key.
    parent : (C,) int
        Parent of every clique, -1 for a root; smaller than the clique's own number.
    key_start : (C + 1,) int
    keys : (sum,) int
    frontals : (C,) int
        Number of frontal keys.
    panel_start : (C + 1,) int
    panel : (sum,) float
        ``[R T]`` of every clique, row by row; below R's diagonal anything may stand.

    Attributes
    ----------
    offset : (n + 1,) int
        First scalar of every key.
    rows : (C,) int
        Number of frontal scalars.
    column_start, columns : (C + 1,) and (sum,) int
        The scalars of every clique, frontal ones first.
    clique_of, row_of : (n,) int
        Clique in which a key is frontal (-1: the tree does not hold it) and its first row there.
    """

    dims: Ints
    parent: Ints
    key_start: Ints
    keys: Ints
    frontals: Ints
    panel_start: Ints
    panel: Floats
    offset: Ints = field(init=False, repr=False)
    rows: Ints = field(init=False, repr=False)
    column_start: Ints = field(init=False, repr=False)
    columns: Ints = field(init=False, repr=False)
    clique_of: Ints = field(init=False, repr=False)
    row_of: Ints = field(init=False, repr=False)

    def __post_init__(self) -> None:
        size = self.dims[self.keys]
        ends = np.concatenate([[0], np.cumsum(size)])
        column_start = ends[self.key_start]
        first = self.key_start[:-1]
        rows = ends[first + self.frontals] - ends[first]
        offset = np.concatenate([[0], np.cumsum(self.dims)])
        columns = np.repeat(offset[self.keys] - ends[:-1], size) + np.arange(ends[-1])
        clique_of = np.full(len(self.dims), -1, np.int64)
        frontal = np.repeat(first, self.frontals) + _ramp(self.frontals)
        clique_of[self.keys[frontal]] = np.repeat(np.arange(len(first)), self.frontals)
        row_of = np.zeros(len(self.dims), np.int64)
        row_of[self.keys[frontal]] = ends[frontal] - np.repeat(column_start[:-1], self.frontals)
        derived = {
            "offset": offset,
            "rows": rows,
            "column_start": column_start,
            "columns": columns,
            "clique_of": clique_of,
            "row_of": row_of,
        }
        for name, value in derived.items():
            object.__setattr__(self, name, value)
        for each in fields(self):
            getattr(self, each.name).flags.writeable = False

    @property
    def n_scalars(self) -> int:
        """Number of scalar unknowns, those of keys outside the tree included."""
        return int(self.dims.sum())

    @classmethod
    def from_columns(
        cls,
        dims: ArrayLike,
        parent: Ints,
        sizes: Ints,
        keys: Ints,
        rows: Ints,
        values: Floats,
    ) -> CliqueTree:
        """Build from panels that are stored column by column, as GTSAM stores them.

        Parameters
        ----------
        sizes, rows : (C,) int
            Number of keys and of panel rows of every clique.
        values : (sum,) float
            The panels ``[R T]``, column-major.
        """
        dim = np.array(dims, np.int64)
        key_start = np.concatenate([[0], np.cumsum(sizes)])
        ends = np.concatenate([[0], np.cumsum(dim[keys])])
        width = np.diff(ends[key_start])
        panel_start = np.concatenate([[0], np.cumsum(rows * width)])
        if panel_start[-1] != len(values):
            raise ValueError("the dimensions of the keys do not fit the panels of the Bayes tree")
        depth = ends[1:] - np.repeat(ends[key_start[:-1]], sizes)
        inside = depth <= np.repeat(rows, sizes)
        frontals = np.zeros(len(sizes), np.int64)
        np.add.at(frontals, np.repeat(np.arange(len(sizes)), sizes), inside)
        panel = kernels.row_major(values, panel_start, rows, width)
        return cls(dim, parent, key_start, keys, frontals, panel_start, panel)

    def weakest_pivot(self) -> tuple[int, float]:
        """Key with the smallest pivot, and the pivot as a share of that scalar's information.

        The share ``R_ii^2 / H_ii`` is one minus the squared multiple correlation of the scalar
        with everything eliminated after it; it vanishes where the system is singular.
        """
        if not len(self.keys):
            return -1, 1.0
        pivot, information = kernels.pivots(
            self.panel, self.panel_start, self.rows, self.column_start, self.columns, self.n_scalars
        )
        held = np.flatnonzero(np.repeat(self.clique_of >= 0, self.dims))
        share = pivot[held] / np.maximum(information[held], np.finfo(np.float64).tiny)
        at = int(np.argmin(share))  # a NaN counts as the smallest
        worst = held[at]
        return int(np.searchsorted(self.offset, worst, side="right") - 1), float(share[at])

    def to_arrays(self) -> dict[str, Any]:
        """The arrays to store (``numpy.savez`` without pickle)."""
        return {f.name: getattr(self, f.name) for f in fields(self) if f.init}

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, Any]) -> CliqueTree:
        """Read back what :meth:`to_arrays` gave."""
        return cls(**{f.name: np.array(arrays[f.name]) for f in fields(cls) if f.init})


def _ramp(counts: Ints) -> Ints:
    """0 .. counts[0]-1, 0 .. counts[1]-1, …"""
    ends = np.cumsum(counts)
    return np.arange(ends[-1] if len(ends) else 0) - np.repeat(ends - counts, counts)
