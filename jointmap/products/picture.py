"""The joint map from above: every robot's path with its trust, landmarks with their ellipses.

Colour and marker tell robots apart, the pattern of the line tells trust, so that nothing rests on
colour alone.

References
----------
Okabe, M., Ito, K. (2008). Color Universal Design: how to make figures and presentations that are
friendly to colorblind people (the palette).
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.atomic import new_file
from jointmap.errors import MissingPackageError, SettingsError
from jointmap.products.columns import TRUST
from jointmap.products.reference import Reference

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Blue, vermilion, bluish green, reddish purple, orange, sky blue; yellow is too pale for a line.
PALETTE = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
#: Five markers on six colours: thirty robots before a pair repeats.
MARKERS = ("o", "s", "^", "D", "v")
#: Pattern and width (points) of a line, by trust code.
LINES = (("-", 1.7), ((0, (4, 2)), 1.1), ((0, (1, 1.4)), 1.7))
#: Markers along one robot's path.
MARKS_PER_PATH = 14
#: Squared radius that a normal point in the plane stays inside with probability 0.95
#: (chi-square of two degrees of freedom: -2 ln 0.05).
RADIUS2_95 = float(-2.0 * np.log(0.05))
#: Ellipses are magnified by one of these until a typical one can be seen.
MAGNIFICATIONS = (1, 2, 5, 10, 20, 50, 100)
#: Share of the map's extent that a typical semi-axis should have to be seen.
VISIBLE = 0.006


@dataclass(frozen=True)
class _Part:
    """What belongs to one frame: paths by robot, landmarks, covariance of their x and y."""

    paths: dict[str, tuple[Floats, Ints]]
    points: Floats
    cov: Floats
    trust: NDArray[np.object_]
    names: NDArray[np.object_]


def draw_map(
    reference: Reference,
    path: Path | str | None = None,
    *,
    component: int | None = None,
    magnify: float | None = None,
    names: bool = False,
    axes: Axes | None = None,
    replace: bool = False,
) -> Axes:
    """Draw the joint map from above.

    Parameters
    ----------
    reference : Reference
    path : path, optional
        Picture to write; its ending (``.png``, ``.svg``, ``.pdf``) decides the format.
    component : int, optional
        Frame to draw; parts that nothing ties together cannot share a map. Default: the one with
        most landmarks and robots.
    magnify : float, optional
        Factor on the size of the ellipses; default: what makes a typical one visible. The legend
        states it.
    names : bool
        Write the landmarks' names.
    axes : matplotlib axes, optional
        Where to draw; default: a new figure.
    replace : bool
        An earlier file at ``path`` is replaced.

    Returns
    -------
    matplotlib axes
        In metres, equal scales.

    Raises
    ------
    MissingPackageError
        matplotlib is not installed.
    SettingsError
        There is no such component, ``magnify`` is not positive, or the ending is unknown.
    OutputExistsError
        The file exists and ``replace`` was not asked for.

    Notes
    -----
    Ellipses hold 95 % of a normal distribution with the stated covariance of x and y, in the datum
    of the reference: ``p + sqrt(-2 ln 0.05) L (cos a, sin a)`` with ``L L' = cov``. In three
    dimensions this is the marginal of the horizontal position.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise MissingPackageError(
            'drawing needs matplotlib; install it with: pip install "jointmap[plot]"'
        ) from error
    if magnify is not None and not (np.isfinite(magnify) and magnify > 0):
        raise SettingsError(f"magnify is {magnify!r}; it must be a number above 0")
    chosen = _largest(reference) if component is None else component
    if not 0 <= chosen < len(_components(reference)):
        raise SettingsError(f"component is {chosen}; there are {len(_components(reference))}")
    part = _part(reference, chosen)
    if axes is None:
        axes = Figure(figsize=(9.0, 6.0), layout="compressed").add_subplot()
    robots = list(reference.trajectories)
    for robot, (xy, trust) in part.paths.items():
        _draw_path(axes, xy, trust, *_style(robots.index(robot)))
    factor = _magnification(part) if magnify is None else magnify
    _draw_landmarks(axes, part, factor, names)
    _finish(axes, reference, chosen)
    _legend(axes, part, factor, [_style(robots.index(robot)) for robot in part.paths])
    if path is not None:
        _save(axes, Path(path), replace)
    return axes


def ellipses(points: ArrayLike, cov: ArrayLike, magnify: float = 1.0, corners: int = 49) -> Floats:
    """Outlines (n, corners, 2) of the 95 % ellipses of points (n, 2) with covariance (n, 2, 2)."""
    p, c = np.asarray(points, np.float64), np.asarray(cov, np.float64)
    values, vectors = np.linalg.eigh(c)
    root = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
    angle = np.linspace(0.0, 2.0 * np.pi, corners)
    circle = np.stack([np.cos(angle), np.sin(angle)])
    outline = magnify * np.sqrt(RADIUS2_95) * np.swapaxes(root @ circle, 1, 2)
    return np.asarray(p[:, None, :] + outline)


def _components(reference: Reference) -> list[list[str]]:
    return list(reference.meta["components"] or [list(reference.trajectories)])


def _largest(reference: Reference) -> int:
    marks = reference.landmarks["component"].value_counts()
    sizes = [(int(marks.get(i, 0)), len(robots)) for i, robots in enumerate(_components(reference))]
    return max(range(len(sizes)), key=lambda i: (sizes[i], -i))


def _part(reference: Reference, component: int) -> _Part:
    paths = {}
    for robot, trajectory in reference.trajectories.items():
        here = (trajectory.component == component) & np.isfinite(trajectory.pose[:, :2]).all(axis=1)
        if not here.any():
            continue
        xy, trust = trajectory.pose[here, :2], trajectory.trust[here].copy()
        for start, end in reference.outages(robot):
            # Nothing was logged in between; the line across is nobody's observation.
            trust[(trajectory.t_s[here] > start) & (trajectory.t_s[here] <= end)] = 2
        paths[robot] = (xy, trust)
    marks = reference.landmarks
    marks = marks[(marks["component"] == component).fillna(False).to_numpy(bool)]
    marks = marks[marks[["x_m", "y_m"]].notna().all(axis=1)]
    xx, xy_, yy = (marks[f"cov_{c}"].to_numpy(np.float64) for c in ("x_x", "x_y", "y_y"))
    return _Part(
        paths,
        marks[["x_m", "y_m"]].to_numpy(np.float64),
        np.stack([np.stack([xx, xy_], axis=-1), np.stack([xy_, yy], axis=-1)], axis=-2),
        marks["trust"].astype("object").to_numpy(),
        marks["landmark"].astype("object").to_numpy(),
    )


def _style(index: int) -> tuple[str, str]:
    return PALETTE[index % len(PALETTE)], MARKERS[index % len(MARKERS)]


def _draw_path(axes: Any, xy: Floats, trust: Ints, colour: str, marker: str) -> None:
    """One robot: runs of equal trust, markers at equal distances, a large one at the start."""
    # A step from one row to the next is as good as the worse of its ends.
    step = np.maximum(trust[1:], trust[:-1])
    ends = np.concatenate([np.flatnonzero(np.diff(step)) + 1, [len(step)]])
    first = 0
    for last in ends.tolist():
        if last > first:
            code = int(step[first])
            pattern, width = LINES[code]
            run = xy[first : last + 1]
            axes.plot(
                *run.T, color=colour, ls=pattern, lw=width, zorder=2 + code / 4, label="_path"
            )
        first = last
    along = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(xy, axis=0), axis=1))])
    places = np.searchsorted(along, np.linspace(0.0, along[-1], MARKS_PER_PATH + 1)[1:-1])
    look = {"color": colour, "marker": marker, "ls": "none", "mec": "white", "label": "_marks"}
    axes.plot(*xy[places].T, ms=5.0, mew=0.5, zorder=3, **look)
    axes.plot(*xy[:1].T, ms=10.0, mew=1.0, zorder=5, **look)


def _magnification(part: _Part) -> float:
    """The smallest of MAGNIFICATIONS that lets a typical ellipse be seen."""
    known = np.isfinite(part.cov).all(axis=(1, 2))
    if not known.any():
        return 1.0
    cloud = np.concatenate([part.points, *(xy for xy, _ in part.paths.values())])
    extent = float(np.ptp(cloud, axis=0).max())
    axis = np.sqrt(RADIUS2_95 * np.median(np.linalg.eigvalsh(part.cov[known])[:, -1]))
    enough = [m for m in MAGNIFICATIONS if m * axis >= VISIBLE * extent]
    return float(enough[0] if enough else MAGNIFICATIONS[-1])


def _draw_landmarks(axes: Any, part: _Part, magnify: float, names: bool) -> None:
    known = np.isfinite(part.cov).all(axis=(1, 2))
    outlines = ellipses(part.points[known], part.cov[known], magnify)
    axes.fill(*(line for outline in outlines for line in outline.T), **_ELLIPSE)
    checked = part.trust == TRUST[0]
    for rows, look in ((checked, _CHECKED), (~checked, _DOUBTFUL)):
        if rows.any():
            axes.plot(*part.points[rows].T, zorder=4, label="_landmarks", **look)
    if names:
        for (x, y), name in zip(part.points, part.names, strict=True):
            axes.annotate(name, (x, y), (3, 3), textcoords="offset points", fontsize=6)


_ELLIPSE: dict[str, Any] = {"fc": "0.82", "ec": "0.25", "lw": 0.6, "zorder": 1, "label": "_ellipse"}
_CHECKED: dict[str, Any] = {"color": "black", "marker": "+", "ms": 4.5, "mew": 0.9, "ls": "none"}
_DOUBTFUL: dict[str, Any] = {"color": "black", "marker": "x", "ms": 6.0, "mew": 1.5, "ls": "none"}


def _finish(axes: Any, reference: Reference, component: int) -> None:
    survey, frames = reference.meta["survey"] or {}, len(_components(reference))
    title = f"Joint map of {survey.get('name') or 'a survey'}, from above"
    if frames > 1:
        title += f"\nframe {component} of {frames}: nothing ties the others to it"
    if reference.status != "ok":
        title += f"\nstatus: {reference.status}"
    axes.set(title=title, xlabel="map x (m)", ylabel="map y (m)")
    axes.set_aspect("equal", adjustable="box")
    axes.grid(lw=0.4, color="0.88")
    axes.set_axisbelow(True)


def _legend(axes: Any, part: _Part, magnify: float, styles: list[tuple[str, str]]) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    entries: list[tuple[Any, str]] = [
        (Line2D([], [], color=colour, marker=marker, mec="white", ms=7, lw=LINES[0][1]), robot)
        for robot, (colour, marker) in zip(part.paths, styles, strict=True)
    ]
    for trust, (pattern, width) in zip(TRUST, LINES, strict=True):
        entries.append((Line2D([], [], color="0.25", ls=pattern, lw=width), f"path {trust}"))
    checked = part.trust == TRUST[0]
    if checked.any():
        entries.append((Line2D([], [], **_CHECKED), "landmark checked"))
    if not checked.all():
        entries.append((Line2D([], [], **_DOUBTFUL), "landmark weak or unchecked"))
    if np.isfinite(part.cov).all(axis=(1, 2)).any():
        size = "" if magnify == 1 else f", drawn {magnify:g} times larger"
        entries.append((Patch(fc=_ELLIPSE["fc"], ec=_ELLIPSE["ec"]), f"95 % ellipse{size}"))
    entries.append(
        (Line2D([], [], color="0.25", marker="o", mec="white", ms=10, ls="none"), "start of a path")
    )
    handles, labels = zip(*entries, strict=True)
    axes.legend(handles, labels, fontsize=8, loc="upper left", bbox_to_anchor=(1.01, 1.0))


def _save(axes: Any, path: Path, replace: bool) -> None:
    known = axes.figure.canvas.get_supported_filetypes()
    if path.suffix[1:].lower() not in known:
        endings = ", ".join(f".{name}" for name in ("pdf", "png", "svg"))
        raise SettingsError(f"{path.name}: name the picture with one of {endings}")
    with new_file(path, replace=replace) as fresh:
        # No clock and no version in the file: the same reference gives the same picture.
        axes.figure.savefig(
            fresh, dpi=110, bbox_inches="tight", metadata=_NO_STAMP.get(path.suffix.lower())
        )


_NO_STAMP: dict[str, dict[str, None]] = {
    ".png": {"Software": None},
    ".svg": {"Date": None},
    ".pdf": {"CreationDate": None},
}
