"""The picture of the joint map: what it draws, in which units, and what it refuses."""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from synthetic_reference import ROBOTS, reference

import jointmap
from jointmap.errors import JointMapError, MissingPackageError, OutputExistsError, SettingsError
from jointmap.products.picture import LINES, MARKERS, PALETTE, draw_map, ellipses


def test_ellipses_hold_95_percent() -> None:
    # Chi-square of 2 degrees of freedom, upper 5 % point: 5.991 (printed in every table of it).
    cov = np.array([[[0.04, 0.01], [0.01, 0.02]], [[1e-4, 0.0], [0.0, 9e-4]]])
    centre = np.array([[1.0, 2.0], [-3.0, 0.5]])
    away = ellipses(centre, cov) - centre[:, None, :]
    distance2 = np.einsum("nki,nij,nkj->nk", away, np.linalg.inv(cov), away)
    assert distance2 == pytest.approx(np.full(distance2.shape, 5.991), abs=5e-4)
    larger = ellipses(centre, cov, 10.0) - centre[:, None, :]
    assert larger == pytest.approx(10.0 * away)


def test_the_colours_are_the_published_ones() -> None:
    # Okabe & Ito (2008), RGB of blue, vermilion, bluish green, reddish purple, orange, sky blue.
    published = ((0, 114, 178), (213, 94, 0), (0, 158, 115), (204, 121, 167), (230, 159, 0),
                 (86, 180, 233))  # fmt: skip
    assert tuple(tuple(bytes.fromhex(c[1:])) for c in PALETTE) == published


@pytest.mark.parametrize("dimension", [2, 3])
def test_robots_trust_and_landmarks_are_drawn(dimension: int) -> None:
    made = reference(dimension)
    axes = draw_map(made)
    assert axes.get_aspect() == 1.0
    assert axes.get_xlabel() == "map x (m)"
    assert axes.get_ylabel() == "map y (m)"
    words = [text.get_text() for text in axes.get_legend().get_texts()]
    assert set(ROBOTS) <= set(words)
    assert any(word.startswith("95 % ellipse") for word in words)
    runs = [line for line in axes.lines if line.get_label() == "_path"]
    looks = {(line.get_color(), str(line._unscaled_dash_pattern)) for line in runs}
    # The synthetic paths alternate checked and weak rows and end unchecked: a step is as good as
    # its worse end, so weak and unchecked steps are there for both robots.
    assert len(looks) == 4
    assert {color for color, _ in looks} == set(PALETTE[:2])
    marks = {line.get_marker() for line in axes.lines if line.get_label() == "_marks"}
    assert marks == set(MARKERS[:2])
    drawn = np.concatenate([line.get_xydata() for line in runs])
    rows = np.concatenate([t.pose[:, :2] for t in made.trajectories.values()])
    assert {tuple(p) for p in drawn} == {tuple(p) for p in rows}
    points = [line.get_xydata() for line in axes.lines if line.get_label() == "_landmarks"]
    expected = made.landmarks[["x_m", "y_m"]].to_numpy()
    assert np.sort(np.concatenate(points), axis=0) == pytest.approx(np.sort(expected, axis=0))


def test_trust_decides_the_pattern() -> None:
    made = reference(2)
    path = made.trajectories["heron"]
    n = len(path)
    trust = np.repeat([0, 1, 2], [10, 10, n - 20])
    one = replace(made, trajectories={"heron": replace(path, trust=trust)})
    runs = [line for line in draw_map(one).lines if line.get_label() == "_path"]
    assert [len(line.get_xydata()) for line in runs] == [10, 11, n - 19]
    assert [line.get_linewidth() for line in runs] == [width for _, width in LINES]
    assert len({str(line._unscaled_dash_pattern) for line in runs}) == 3


def test_parts_without_a_common_frame_are_not_drawn_together() -> None:
    made = reference(2)
    apart = dict(made.trajectories)
    apart["otter"] = replace(apart["otter"], component=np.ones(len(apart["otter"]), dtype=int))
    meta = {**made.meta, "status": "disconnected", "components": [["heron"], ["otter"]]}
    split = replace(made, trajectories=apart, meta=meta)
    axes = draw_map(split, component=1)
    colors = {line.get_color() for line in axes.lines if line.get_label() == "_path"}
    assert colors == {PALETTE[1]}, "a robot keeps its colour in every frame"
    assert "frame 1 of 2" in axes.get_title()
    assert "disconnected" in axes.get_title()
    with pytest.raises(SettingsError, match="component is 2; there are 2"):
        draw_map(split, component=2)


def test_the_file_is_whole_repeatable_and_never_overwritten_unasked(tmp_path: Path) -> None:
    made = reference(2)
    for name in ("map.png", "map.svg", "map.pdf"):
        draw_map(made, tmp_path / name)
    first = (tmp_path / "map.png").read_bytes()
    assert first.startswith(b"\x89PNG\r\n\x1a\n")
    with pytest.raises(OutputExistsError, match="exists already"):
        draw_map(made, tmp_path / "map.png")
    draw_map(made, tmp_path / "map.png", replace=True)
    assert (tmp_path / "map.png").read_bytes() == first
    with pytest.raises(SettingsError, match=r"map\.txt: name the picture"):
        draw_map(made, tmp_path / "map.txt")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["map.pdf", "map.png", "map.svg"]


@pytest.mark.parametrize("magnify", [0.0, -1.0, np.nan, np.inf])
def test_impossible_magnifications_are_refused(magnify: float) -> None:
    with pytest.raises(SettingsError, match="above 0"):
        draw_map(reference(2), magnify=magnify)


def test_axes_of_ones_own_are_used_and_names_written() -> None:
    from matplotlib.figure import Figure

    axes = Figure().add_subplot()
    made = reference(2)
    assert jointmap.draw_map(made, axes=axes, names=True, magnify=3.0) is axes
    assert {t.get_text() for t in axes.texts} == set(made.landmarks["landmark"])
    words = [text.get_text() for text in axes.get_legend().get_texts()]
    assert "95 % ellipse, drawn 3 times larger" in words


def test_without_matplotlib_the_error_says_what_to_install(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(MissingPackageError, match=r"pip install \"jointmap\[plot\]\"") as caught:
        draw_map(reference(2))
    assert isinstance(caught.value, JointMapError)
    assert isinstance(caught.value, ImportError)
