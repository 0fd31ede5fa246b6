"""The page says what a field engineer needs, in plain words, from the numbers of the tables."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from synthetic_reference import meta, reference, with_trajectory

from jointmap.products.columns import complete
from jointmap.products.page import CAVEAT, fuse_page, pair_ties, status_line
from jointmap.products.page_quality import worst_sigma
from jointmap.products.text import clock, count, degrees, metres, number, percent, table, wrap


@pytest.mark.parametrize("dimension", [2, 3])
def test_every_question_has_its_section(dimension: int) -> None:
    page = fuse_page(reference(dimension), 80, "out/gallery-7")
    titles = [line for line in page.splitlines() if line and not line.startswith((" ", "="))]
    assert titles[:8] == [
        "Reference of gallery 7",
        "What went in",
        "How the robots are tied together",
        "What was left out, and why",
        "Noise of the logs",
        "How good it is",
        "What to distrust first",
        "Files",
    ]
    assert page.endswith("\nok: 2 robots in 1 common frame\n")
    assert "out/gallery-7" in page


def test_it_is_called_a_reference_and_warns() -> None:
    page = fuse_page(reference(2))
    assert " ".join(page.split()).count(CAVEAT) == 1
    for words in ("not ground truth", "not for navigation or construction", "licensed survey"):
        assert words in CAVEAT
    assert page.replace("ground truth", "").count("truth") == 0


def test_suspects_come_with_lines_to_paste() -> None:
    lines = fuse_page(reference(2)).splitlines()
    at = next(i for i, line in enumerate(lines) if line.startswith("  1. association"))
    assert "61.5" in lines[at]
    assert [line.strip() for line in lines[at + 1 : at + 4]] == [
        "[[reject_association]]",
        'robot = "otter"',
        'label = "017"',
    ]


def test_long_lists_are_cut_and_said_to_be() -> None:
    base = reference(2)
    many = pd.concat([base.suspects] * 9, ignore_index=True)
    doubts = [f"doubt {i}" for i in range(11)]
    page = fuse_page(replace(base, suspects=many, meta=meta(distrust=doubts)))
    assert "first 5; all in suspects.csv" in page
    assert "  5. association" in page
    assert "  6. association" not in page
    assert "  8. doubt 7" in page
    assert "doubt 8" not in page
    assert "3 more in reference.json" in page


def test_ties_count_what_is_used() -> None:
    base = reference(2)
    ties = pair_ties(base)
    assert ties.to_dict("records") == [
        {"robot_a": "heron", "robot_b": "otter", "landmarks": 3, "encounters": 0, "closures": 0}
    ]
    rows = base.measurements.copy()
    rows.loc[rows["landmark"] == "plate-018", "verdict"] = "rejected"
    rows.loc[rows["kind"] == "encounter", "target"] = "otter"
    ties = pair_ties(replace(base, measurements=rows))
    assert ties.loc[0, ["landmarks", "encounters"]].tolist() == [2, 1]


def test_sigmas_are_those_of_the_tables() -> None:
    cov = np.zeros((40, 3, 3))
    cov[:, 0, 0], cov[:, 1, 1], cov[:, 2, 2] = 0.03**2, 0.04**2, np.radians(2.0) ** 2
    page = fuse_page(with_trajectory(reference(2), "heron", cov=cov))
    row = next(line for line in page.splitlines() if line.startswith("  heron") and "deg" in line)
    assert row.split() == (
        ["heron", "4.0", "cm", "4.0", "cm", "2.00", "deg", "40", "%", "40", "%", "20", "%"]
    )


def test_reasons_that_differ_by_numbers_are_one_line() -> None:
    base = reference(2)
    rows = base.measurements.copy()
    rows["verdict"] = "rejected"
    rows["reason"] = [f"w-test {3.3 + i} over 3.29" for i in range(11)] + ["no pose"]
    page = fuse_page(replace(base, measurements=rows))
    assert "- 11 rows: w-test … over …" in page
    assert "- 1 row: no pose" in page


def test_the_last_line_is_one_line() -> None:
    doubtful = reference(2, status="weak", reasons=["a" * 90, "b" * 90])
    last = fuse_page(doubtful, 60).splitlines()[-1]
    assert last == status_line(doubtful) == f"weak: {'a' * 90}; {'b' * 90}"
    assert status_line(reference(2, status="weak")) == "weak: no reason was recorded"


def test_an_empty_reference_still_has_a_page() -> None:
    base = reference(2)
    names = ("landmarks", "measurements", "associations", "noise", "suspects", "calibration")
    empty = {name: complete(name, 2, {}) for name in names}
    told = meta(chi2=None, dof=None, distrust=[], datum=None, components=None)
    page = fuse_page(replace(base, meta=told, **empty))
    for words in ("No suspects.", "Nothing was estimated", "Nothing in particular."):
        assert words in page


def test_holdout_is_summed_up_by_kind() -> None:
    folds = complete(
        "holdout",
        2,
        {
            "fold_kind": ["landmark"] * 3,
            "fold": ["0", "1", "2"],
            "n": [10, 10, 20],
            "normalized_square": [1.0, 2.0, 0.5],
            "lower": 0.6,
            "upper": 1.5,
        },
    )
    page = fuse_page(replace(reference(2), holdout=folds))
    # (10 * 1 + 10 * 2 + 20 * 0.5) / 40 = 1.00; only the first fold is inside its band.
    assert "normalized square 1.00" in page
    assert "1 of 3 folds" in " ".join(page.split())


def test_the_worst_direction() -> None:
    cov = np.array([[[4.0, 0.0], [0.0, 1.0]], [[2.0, 1.0], [1.0, 2.0]], [[np.nan] * 2] * 2])
    np.testing.assert_allclose(worst_sigma(cov), [2.0, np.sqrt(3.0), np.nan])


def test_numbers_for_people() -> None:
    assert [metres(x) for x in (0.0042, 0.042, 0.42, 4.2, 4200.0, np.nan)] == [
        "4.2 mm",
        "4.2 cm",
        "0.42 m",
        "4.20 m",
        "4,200 m",
        "?",
    ]
    assert [percent(x) for x in (0.0, 0.001, 0.5, 0.999, 1.0, np.nan)] == [
        "0 %",
        "<1 %",
        "50 %",
        ">99 %",
        "100 %",
        "?",
    ]
    assert [clock(x) for x in (42.0, 1506.0, 3900.0)] == ["42.0 s", "25 min 06 s", "1 h 05 min"]
    assert degrees(np.pi / 180) == "1.00 deg"
    assert [count(1, "fix", "fixes"), count(1204, "fix", "fixes")] == ["1 fix", "1,204 fixes"]
    assert [number(0.12345), number(np.nan)] == ["0.123", "-"]


def test_tables_align_and_text_wraps() -> None:
    assert table(["a", "n"], [["heron", "1"], ["x", "1,000"]]) == [
        "a          n",
        "heron      1",
        "x      1,000",
    ]
    assert wrap("one two three four five six seven eight nine ten", 40, "1. ") == [
        "1. one two three four five six seven",
        "   eight nine ten",
    ]
