"""Wrong associations, from none to 60 per cent, random and coherent, in two and three dimensions.

The short test runs by default. The study (`-m study`) takes about half an hour; its figures are
kept in tests/scenarios/figures and in DEVELOPERS.md. JOINTMAP_STUDY_SEEDS sets the seeds.
"""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
from association_study import Outcome, fused, judged, make, without_wrong

WORLDS = ("quarry-2d", "quarry-3d")
CASES = ((0.4, "random"), (0.4, "coherent"), (0.6, "random"), (0.6, "coherent"))
SEEDS = int(os.environ.get("JOINTMAP_STUDY_SEEDS", "20"))


def run(folder: Path, world: str, seed: int, share: float, pattern: str) -> tuple[Outcome, ...]:
    """With the wrong ones, with the wrong ones removed, and without any."""
    clean = judged(make(folder, world, seed, 0.0, "random"), fused(folder))
    make(folder, world, seed, share, pattern)
    blind = judged(folder, fused(folder))
    without_wrong(folder)
    return blind, judged(folder, fused(folder)), clean


@pytest.mark.parametrize("world", WORLDS)
@pytest.mark.parametrize("pattern", ["random", "coherent"])
def test_forty_per_cent_wrong(tmp_path: Path, world: str, pattern: str) -> None:
    blind, oracle, _ = run(tmp_path / "survey", world, 11, 0.4, pattern)
    assert blind.wrong >= 20
    assert blind.wrong_rejected >= 0.95 * blind.wrong
    assert blind.right_rejected <= 0.02 * blind.right
    assert blind.rmse <= 1.25 * oracle.rmse


@pytest.mark.study
@pytest.mark.parametrize("world", WORLDS)
@pytest.mark.parametrize(("share", "pattern"), CASES)
def test_study(tmp_path: Path, world: str, share: float, pattern: str) -> None:
    rows = [run(tmp_path / str(s), world, s, share, pattern) for s in range(SEEDS)]
    wrong = sum(b.wrong for b, _, _ in rows)
    found = sum(b.wrong_rejected for b, _, _ in rows) / wrong
    lost = sum(b.right_rejected for b, _, _ in rows) / sum(b.right for b, _, _ in rows)
    over = np.array([b.rmse / o.rmse for b, o, _ in rows])
    clean = np.array([b.rmse / c.rmse for b, _, c in rows])
    ok = np.array([b.status == "ok" for b, _, _ in rows])
    print(
        f"\n{world} {share:.0%} {pattern}: found {found:.1%}, right lost {lost:.2%}, "
        f"unresolved {sum(b.unresolved for b, _, _ in rows)}, RMSE over oracle median "
        f"{np.median(over):.2f} worst {over.max():.2f}, over clean median {np.median(clean):.2f} "
        f"worst {clean.max():.2f}, status ok {ok.mean():.0%}"
    )
    good = (over <= 1.25) & np.array([b.wrong_rejected >= 0.95 * b.wrong for b, _, _ in rows])
    assert not (ok & (clean > 2.0)).any(), "confidently wrong"
    if share <= 0.4:
        assert found >= 0.95
        assert lost <= 0.02
        assert np.median(over) <= 1.25
    else:
        assert (good | ~ok).mean() >= 0.75
