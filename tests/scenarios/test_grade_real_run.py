"""Four online estimators of the real run, graded against the reference and motion capture.

Leung, Halpern, Barfoot, Liu: The UTIAS multi-robot cooperative localization and mapping dataset,
Int. J. Robotics Research 30(8):969-974, 2011 (sub-dataset 6). Neither the reference nor the
estimators nor the grades see the motion capture; it judges the grades.
"""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from motion_capture import with_truth

import jointmap
from jointmap.grade import GradeSettings
from jointmap.grade.aligned import aligned, mode_of
from jointmap.grade.figures import figure, grade, log_scales
from jointmap.grade.match import match
from jointmap.grade.read import read_online
from jointmap.grade.stage import make_stage
from jointmap.simulate.estimators.run import DEAD, NAIVE
from jointmap.simulate.estimators.write import write_online

SETTINGS = GradeSettings()


@pytest.fixture(scope="module")
def graded(real_reference, real_survey):
    write_online(real_survey)
    return jointmap.grade(real_reference, real_survey, SETTINGS).runs[0]


@pytest.fixture(scope="module")
def judged(graded, real_reference, real_survey, real_run):
    """Per estimator: matched instants with motion capture, and that in the reference's place."""
    stage = make_stage(real_reference, SETTINGS)
    out = {}
    for estimate in read_online(real_survey)[0]:
        matched, _ = match(estimate, stage, SETTINGS)
        matched = matched.take(stage.located.trust[matched.row] == 0)
        true, known = with_truth(matched, stage, real_run)
        mode, _ = mode_of(estimate, stage, SETTINGS)
        out[estimate.name] = matched.take(known), true.take(known), mode
    return stage, out


def root_mean_square(place):
    return float(np.sqrt((place**2).sum(axis=1).mean()))


def test_intervals_hold_the_motion_capture_figure(judged):
    """At least 85 % of (robot and team) x estimator, at a median width under half the value."""
    stage, cases = judged
    log_scale = log_scales(len(stage.posterior), SETTINGS)
    held, width = [], []
    for matched, true, mode in cases.values():
        made, right = aligned(matched, stage, mode), aligned(true, stage, mode)
        robot = stage.located.robot[matched.row]
        for mine in (*(robot == r for r in np.unique(robot)), np.ones(len(robot), bool)):
            found = grade(
                figure(made.place[mine], made.place_draws[:, mine], "same"), log_scale, 0.95
            )
            held.append(found.lower <= root_mean_square(right.place[mine]) <= found.upper)
            width.append((found.upper - found.lower) / found.value)
    assert len(held) >= 16
    assert np.mean(held) >= 0.85
    assert np.median(width) <= 0.5


def test_what_is_called_better_is_better_by_motion_capture(graded, judged):
    stage, cases = judged
    verdicts = {(c.a, c.b): c for c in graded.comparisons if c.quantity == "position"}
    resolved = 0
    for a, b in combinations(cases, 2):
        rows = np.intersect1d(cases[a][0].row, cases[b][0].row)
        row = verdicts[a, b]
        roots = []
        for name in (a, b):
            _, true, _ = cases[name]
            part = true.take(np.searchsorted(true.row, rows))
            roots.append(root_mean_square(aligned(part, stage, row.alignment, equal=True).place))
        if row.lower > 0.0 or row.upper < 0.0:
            resolved += 1
            assert np.sign(row.value) == np.sign(roots[0] - roots[1]), row.verdict
    assert resolved >= 4
    places = [p.estimator for p in graded.order.places]
    assert places[0] == NAIVE and places[-1] == DEAD


def test_what_the_robots_had_in_common(graded):
    """All five drive in one room of some 15 m x 8 m: tied most of the time."""
    assert all(s["share_now"] > 0.5 and s["encounters"] > 500 for s in graded.sharing)


def test_naive_sharing_is_found_overconfident(graded):
    assert graded.estimator(NAIVE).verdict().verdict == "overconfident"
