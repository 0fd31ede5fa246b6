"""What `check` says about a survey."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from survey_folder import good, good_3d

from jointmap.ingest.read import read_survey
from jointmap.ingest.summary import find_gaps, summarise, summary_dict, summary_lines


def test_numbers_of_the_small_survey(tmp_path: Path) -> None:
    summary = summarise(read_survey(good(tmp_path)))
    heron, otter = summary.robots
    assert (heron.name, heron.form, heron.n_odometry) == ("heron", "pose", 10)
    assert (heron.span_s, heron.rate_hz, heron.gaps) == (9.0, 1.0, ())
    # Half a metre a second for nine seconds, by poses and by speeds.
    assert heron.path_m == pytest.approx(4.5, abs=1e-12)
    assert otter.path_m == pytest.approx(4.5, abs=1e-12)
    assert heron.landmarks == ("plate-017", "plate-018")
    assert heron.shared == {"otter": ("plate-017",)}
    assert (heron.met, otter.met_by) == ({"otter": 1}, {"heron": 1})
    assert heron.by_sensor == {"front": 4}
    assert (heron.last_observation_s, otter.last_observation_s) == (4.0, 3.0)
    assert (summary.n_landmarks, summary.n_shared_landmarks) == (3, 1)


def test_sharing_follows_the_associations(tmp_path: Path) -> None:
    # Both saw a plate-017, but otter's is what heron calls plate-018; plate-019 is otter's own.
    text = "robot,label,landmark\nheron,plate-017,A\nheron,plate-018,B\notter,plate-017,B\n"
    summary = summarise(read_survey(good(tmp_path, associations_csv=text)))
    heron, otter = summary.robots
    assert heron.landmarks == ("A", "B")
    assert otter.landmarks == ("B", "otter:plate-019")
    assert heron.shared == {"otter": ("B",)}
    assert "labels without an association are private to their robot" in summary_lines(summary)


def test_sharing_follows_the_times(tmp_path: Path) -> None:
    text = (
        "robot,label,landmark,t_from_s,t_to_s\n"
        "heron,plate-017,A,,1.5\nheron,plate-017,B,1.6,1.9\notter,plate-017,A,,\n"
    )
    summary = summarise(read_survey(good(tmp_path, associations_csv=text)))
    # Sightings of plate-017 at 1.0 (A) and at 2.0 (no row holds: private).
    assert summary.robots[0].landmarks == ("A", "heron:plate-017", "heron:plate-018")


def test_gaps() -> None:
    t = np.concatenate([np.arange(0.0, 1.0, 0.1), np.arange(3.0, 4.0, 0.1), [4.3]])
    assert [(round(g.t_from_s, 9), g.t_to_s) for g in find_gaps(t)] == [(0.9, 3.0)]
    # Slow logs: a second step is no gap where the usual one is a second.
    assert find_gaps(np.array([0.0, 1.0, 2.0, 4.0, 5.0])) == ()


def test_speeds_are_not_held_over_gaps(tmp_path: Path) -> None:
    rows = "".join(f"{t:.1f},1.0,0.0\n" for t in [*np.arange(0, 1.05, 0.1), *np.arange(9, 10, 0.1)])
    survey = read_survey(good(tmp_path, otter__odometry_csv="t_s,vx_mps,wz_radps\n" + rows))
    otter = summarise(survey).robots[1]
    assert otter.path_m == pytest.approx(1.0 + 0.9, abs=1e-9)
    assert otter.rate_hz == pytest.approx(10.0, rel=1e-9)


def test_text_and_json(tmp_path: Path) -> None:
    summary = summarise(read_survey(good_3d(tmp_path)))
    text = "\n".join(summary_lines(summary))
    assert "3-D, 1 robot, 1 landmark (0 seen" in text
    assert "pose form, 10 rows, 1 Hz, 0.000 to 9.000 s (9.0 s), path 4.5 m" in text
    assert "its last 8.0 s have no observation of its own" in text
    assert "the survey has one robot" in text
    data = json.loads(json.dumps(summary_dict(summary)))
    assert data["robots"][0]["span_s"] == 9.0
    assert data["problems"][0]["mended"] is True


def test_gaps_stand_in_the_text(tmp_path: Path) -> None:
    rows = "".join(f"{t:.1f},1.0,0.0\n" for t in [*np.arange(0, 1.05, 0.1), *np.arange(9, 10, 0.1)])
    survey = read_survey(good(tmp_path, otter__odometry_csv="t_s,vx_mps,wz_radps\n" + rows))
    lines = summary_lines(summarise(survey))
    assert "  gaps: 1, together 8.0 s; longest: 8.00 s at 1.000" in lines
