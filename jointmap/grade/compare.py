"""Estimators side by side on the same run: paired differences over common instants.

Two questions, two intervals. What the uncertainty of the reference leaves open about *this run*:
``lower`` to ``upper``, from draws of the reference that serve both estimators at once, so that
most of them cancels. What *another stretch like this* might give: ``repeat_lower`` to
``repeat_upper``, a block bootstrap of the paired squares over time. A difference is resolved when
the first excludes zero, and called repeatable when the second does as well.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import wilcoxon

from jointmap.grade.aligned import Aligned, aligned
from jointmap.grade.figures import Figure, difference, figure, grade
from jointmap.grade.match import Matched
from jointmap.grade.relative import Segments, by_length, relative_errors
from jointmap.grade.series import block_length, block_means
from jointmap.grade.settings import GradeSettings
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Fewer runs than this cannot reach 5 % in a signed-rank test: no p-value is printed.
FEWEST_RUNS = 6
#: Common support below this share of either estimator's own is worth a warning.
THIN_SUPPORT = 0.8


@dataclass(frozen=True)
class Entry:
    """What a comparison needs of one estimator: checked instants, mode and case."""

    name: str
    matched: Matched
    mode: str
    case: str


@dataclass(frozen=True)
class Comparison:
    """One row of compare.csv; ``value`` is the figure of a minus that of b."""

    a: str
    b: str
    quantity: str
    over: str
    size: float
    n: int
    support: float
    alignment: str
    value_a: float
    value_b: float
    value: float
    lower: float
    upper: float
    repeat_lower: float
    repeat_upper: float
    verdict: str

    def row(self) -> dict[str, Any]:
        """Plain values."""
        return asdict(self)


def compare(
    entries: Sequence[Entry], stage: Stage, settings: GradeSettings, log_scale: Floats
) -> list[Comparison]:
    """All pairs."""
    cache: dict[tuple[Any, ...], Aligned] = {}
    segments: dict[tuple[Any, ...], list[Segments]] = {}
    out = []
    for a, b in combinations(entries, 2):
        mode = common_mode((a.mode, b.mode))
        rows = np.intersect1d(a.matched.row, b.matched.row)
        if len(rows) < 20:
            continue
        support = len(rows) / max(len(a.matched), len(b.matched))
        one = _aligned_on(a, rows, mode, stage, settings, cache, draws=True)
        two = _aligned_on(b, rows, mode, stage, settings, cache, draws=False)
        good = ~(one.unaligned | two.unaligned)
        instant = stage.instant[rows]
        for quantity, turn in (("position", False), ("heading", True)):
            errors = [(m.turn if turn else m.place)[good] for m in (one, two)]
            draws = (one.turn_draws if turn else one.place_draws)[:, good]
            out.append(
                _pair(a, b, quantity, "", 0.0, errors, draws, instant[good], support, mode,
                      settings, log_scale)
            )  # fmt: skip
        out += _relative(a, b, rows, support, stage, settings, log_scale, segments)
    return out


def common_mode(modes: Sequence[str]) -> str:
    """Alignment that is fair to all: the freest that any of them needs."""
    return "robot" if "robot" in modes else "team" if "team" in modes else "none"


def _aligned_on(
    entry: Entry,
    rows: Ints,
    mode: str,
    stage: Stage,
    settings: GradeSettings,
    cache: dict[tuple[Any, ...], Aligned],
    *,
    draws: bool,
) -> Aligned:
    """The alignment with equal weights: its draws are those of every estimator with these rows."""
    support = (mode, rows.tobytes())
    key = (entry.name if not draws else "", *support)
    if key not in cache:
        # Draws of many rows are large: only the latest support is kept.
        for old in [k for k in cache if k[1:] != support]:
            del cache[old]
        chosen = entry.matched.take(np.searchsorted(entry.matched.row, rows))
        cache[key] = aligned(chosen, stage, mode, scale=settings.scale, equal=True, draws=draws)
    found = cache[key]
    if not draws or found.matched.name == entry.name:
        return found
    own = _aligned_on(entry, rows, mode, stage, settings, cache, draws=False)
    return replace(own, place_draws=found.place_draws, turn_draws=found.turn_draws)


def _relative(
    a: Entry,
    b: Entry,
    rows: Ints,
    support: float,
    stage: Stage,
    settings: GradeSettings,
    log_scale: Floats,
    cache: dict[tuple[Any, ...], list[Segments]],
) -> list[Comparison]:
    """Relative errors over the middle one of the lengths."""
    one, two = (e.matched.take(np.searchsorted(e.matched.row, rows)) for e in (a, b))
    key = (rows.tobytes(),)
    if key not in cache:
        cache.clear()
        cache[key] = by_length(stage, one)
    lengths = cache[key]
    if not lengths:
        return []
    segments = lengths[len(lengths) // 2]
    made = [
        relative_errors(stage, m.take(segments.start), m.take(segments.end)) for m in (one, two)
    ]
    figures = [figure(m.place, m.place_draws, e.case) for m, e in zip(made, (a, b), strict=True)]
    instant = stage.instant[rows[segments.start]]
    return [
        _finish(a, b, "relative position", segments.kind, segments.size, figures,
                [m.place for m in made], [m.place_draws for m in made], instant, support,
                "none needed", settings, log_scale)
    ]  # fmt: skip


def _pair(
    a: Entry,
    b: Entry,
    quantity: str,
    over: str,
    size: float,
    errors: list[Floats],
    draws: Floats,
    instant: Ints,
    support: float,
    mode: str,
    settings: GradeSettings,
    log_scale: Floats,
) -> Comparison:
    figures = [figure(e, draws, x.case) for e, x in zip(errors, (a, b), strict=True)]
    return _finish(
        a, b, quantity, over, size, figures, errors, [draws, draws], instant, support, mode,
        settings, log_scale,
    )  # fmt: skip


def _finish(
    a: Entry,
    b: Entry,
    quantity: str,
    over: str,
    size: float,
    figures: list[Figure],
    errors: list[Floats],
    draws: list[Floats],
    instant: Ints,
    support: float,
    mode: str,
    settings: GradeSettings,
    log_scale: Floats,
) -> Comparison:
    gap = difference(figures[0], figures[1], log_scale, settings.level)
    one, two = (grade(f, log_scale, settings.level) for f in figures)
    squares = []
    for e, f, x in zip(errors, draws, (a, b), strict=True):
        sign = {"same": 1.0, "independent": -1.0}.get(x.case, 0.0)
        square = (e**2).sum(axis=1)
        squares.append(square + sign * np.einsum("snk,snk->n", f, f) / len(f) if sign else square)
    low, high = _repeat(squares, instant, settings)
    unit = "rad" if "heading" in quantity else "m"
    words = _verdict(a.name, b.name, gap.value, gap.lower, gap.upper, low, high, unit)
    if support < THIN_SUPPORT:
        words += f"; over the {100 * support:.0f} % of the run that both report"
    return Comparison(
        a.name, b.name, quantity, over, size, figures[0].n, support, mode,
        one.raw if np.isnan(one.value) else one.value,
        two.raw if np.isnan(two.value) else two.value,
        gap.value, gap.lower, gap.upper, low, high, words,
    )  # fmt: skip


def _repeat(squares: list[Floats], instant: Ints, settings: GradeSettings) -> tuple[float, float]:
    """Interval of the difference of roots by block bootstrap over time."""
    lo, hi = int(instant.min()), int(instant.max()) + 1
    sums = np.stack([np.bincount(instant - lo, s, hi - lo) for s in squares], axis=1)
    counts = np.bincount(instant - lo, minlength=hi - lo).astype(np.float64)
    used = counts > 0
    series = (sums[:, 0] - sums[:, 1])[used] / counts[used]
    length = block_length(series) * (hi - lo) / max(int(used.sum()), 1)
    means, _ = block_means(sums, counts, length, settings.bootstrap, settings.seed + 3)
    roots = np.sqrt(np.maximum(means, 0.0))
    tail = 0.5 * (1.0 - settings.level)
    low, high = np.quantile(roots[:, 0] - roots[:, 1], [tail, 1.0 - tail])
    return float(low), float(high)


def _verdict(
    a: str, b: str, value: float, lower: float, upper: float, low: float, high: float, unit: str
) -> str:
    if lower <= 0.0 <= upper:
        return "not resolved: the reference is not sure enough"
    better, worse = (a, b) if upper < 0.0 else (b, a)
    half = 0.5 * (upper - lower)
    words = f"{better} is better than {worse} by {abs(value):.3g} ± {half:.2g} {unit}"
    if low <= 0.0 <= high:
        words += " on this run; another run could turn it round"
    return words


@dataclass(frozen=True)
class Place:
    """A place in the order of finish; ``certainty`` that it is not worse than the next."""

    rank: int
    estimator: str
    value: float
    certainty: float


@dataclass(frozen=True)
class Order:
    """Order of finish by position over common instants; ``support`` share of the longest run."""

    places: tuple[Place, ...]
    n: int
    support: float
    alignment: str
    note: str


def order_of_finish(
    entries: Sequence[Entry], stage: Stage, settings: GradeSettings, log_scale: Floats
) -> Order:
    """Rank estimators by position error where all of them reported."""
    known = [e for e in entries if e.case != "unknown" and len(e.matched)]
    left_out = sorted(e.name for e in entries if e not in known)
    note = (
        "" if not left_out else f"not ranked: {', '.join(left_out)} (dependence unknown or empty)"
    )
    if len(known) < 2:
        return Order((), 0, 0.0, "", note or "one estimator has no order")
    rows = known[0].matched.row
    for e in known[1:]:
        rows = np.intersect1d(rows, e.matched.row)
    longest = max(len(e.matched) for e in known)
    if len(rows) < 20:
        return Order((), len(rows), 0.0, "", "no common instants: no ranking on different supports")
    mode = common_mode([e.mode for e in known])
    roots = {}
    for e in known:
        chosen = e.matched.take(np.searchsorted(e.matched.row, rows))
        made = aligned(chosen, stage, mode, scale=settings.scale, equal=True)
        good = ~made.unaligned
        roots[e.name] = np.sqrt(
            figure(made.place[good], made.place_draws[:, good], e.case).values(log_scale)
        )
    ranked = sorted(roots, key=lambda n: float(roots[n].mean()))
    places = []
    for k, name in enumerate(ranked):
        sure = float((roots[name] <= roots[ranked[k + 1]]).mean()) if k + 1 < len(ranked) else 1.0
        places.append(Place(k + 1, name, float(roots[name].mean()), sure))
    return Order(tuple(places), len(rows), len(rows) / longest, mode, note)


def over_runs(runs: Sequence[Sequence[Comparison]]) -> list[dict[str, Any]]:
    """Differences of the same pairs over several runs; a p-value only from six runs on.

    The signed-rank test (Wilcoxon 1945) takes runs, not instants, as what is independent.
    """
    found: dict[tuple[str, str, str], list[float]] = {}
    for run in runs:
        for c in run:
            if c.over == "" or c.quantity == "relative position":
                found.setdefault((c.a, c.b, c.quantity), []).append(c.value)
    out = []
    for (a, b, quantity), values in found.items():
        p, note = None, f"{len(values)} runs: no p-value under {FEWEST_RUNS}"
        if len(values) >= FEWEST_RUNS:
            p, note = float(wilcoxon(values).pvalue), "Wilcoxon signed-rank over runs"
        out.append(
            {
                "a": a, "b": b, "quantity": quantity, "runs": len(values),
                "mean": float(np.mean(values)), "worse_in": int(np.sum(np.array(values) > 0)),
                "p": p, "note": note,
            }
        )  # fmt: skip
    return out
