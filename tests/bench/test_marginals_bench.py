"""All marginals of a large graph: selected inversion against elimination and the loop over keys."""

from __future__ import annotations

import time

import gtsam
import numpy as np
import pytest

from jointmap.trust.elimination import clique_tree, eliminate, metis_ordering
from jointmap.trust.marginals import selected_inverse, selected_inverse_of
from jointmap.trust.solve_pairs import SquareRootFactor

POSES = 100_000


def gallery_walk(poses: int, seed: int = 0):
    """A crawler's walk on a square grid of galleries; half of the revisits are recognised."""
    rng = np.random.default_rng(seed)
    heading = np.repeat(np.cumsum(rng.integers(-1, 2, poses // 4 + 1)), 4)[:poses] % 4
    step = np.array([[1, 0], [0, 1], [-1, 0], [0, -1]])[heading]
    side = int(np.sqrt(poses) / 2)
    cell = np.abs((np.cumsum(step, axis=0) + side) % (4 * side) - 2 * side) - side  # folded walls
    noise = gtsam.noiseModel.Diagonal.Sigmas(np.array([0.05, 0.05, 0.01]))
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), noise))
    at = [
        gtsam.Pose2(float(x), float(y), float(h) * np.pi / 2)
        for (x, y), h in zip(cell, heading, strict=True)
    ]
    chosen = rng.random(poses) < 0.5
    seen: dict[tuple[int, int], int] = {}
    for i, place in enumerate(map(tuple, cell.tolist())):
        values.insert(i, at[i])
        before = seen.get(place, i)
        for j in {i - 1} | ({before} if chosen[i] and i - before > 5 else set()):
            if j >= 0:
                graph.add(gtsam.BetweenFactorPose2(j, i, at[j].between(at[i]), noise))
        seen[place] = i
    return graph, values


@pytest.mark.bench
def test_all_marginals_cost_about_one_elimination():
    """At 100,000 planar poses: no more than three linearise-and-eliminate steps.

    The loop over keys is sampled: its cost by the hundred keys, extrapolated, is at least fifty
    times as large.
    """
    small = gallery_walk(500)
    selected_inverse(eliminate(small[0].linearize(small[1])), np.full(500, 3))  # compiles
    graph, values = gallery_walk(POSES)
    dims = np.full(POSES, 3)
    start = time.perf_counter()
    linear = graph.linearize(values)
    bayes_tree = eliminate(linear, metis_ordering(linear))
    one_step = time.perf_counter() - start
    start = time.perf_counter()
    tree = clique_tree(bayes_tree, dims)
    walk = time.perf_counter() - start
    inverse = selected_inverse_of(tree)
    blocks = inverse.diagonal(np.arange(POSES))
    ours = time.perf_counter() - start
    sample = np.random.default_rng(0).choice(POSES, 100, replace=False)
    start = time.perf_counter()
    theirs = np.array([bayes_tree.marginalCovariance(int(k)) for k in sample])
    loop = (time.perf_counter() - start) * POSES / len(sample)
    start = time.perf_counter()
    SquareRootFactor(tree).solve(np.ones((3 * POSES, 6)))
    six = time.perf_counter() - start
    print(
        f"\n{graph.size()} factors; linearise and eliminate {one_step:.2f} s; walk {walk:.2f} s; "
        f"walk and all marginals {ours:.2f} s; loop over keys {loop:.0f} s (extrapolated); "
        f"six right-hand sides {six:.2f} s"
    )
    scale = np.abs(theirs).max(axis=(1, 2))
    assert (np.abs(blocks[sample] - theirs).max(axis=(1, 2)) / scale).max() < 1e-6
    assert ours < 3 * one_step
    assert loop > 50 * ours
