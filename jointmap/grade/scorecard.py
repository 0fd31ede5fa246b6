"""The outcome of a grading, as frozen values and tables."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import pandas as pd

from jointmap.grade.compare import Comparison, Order
from jointmap.grade.consistency import LEVELS, Consistency
from jointmap.grade.flaws import Flaw
from jointmap.grade.match import Coverage
from jointmap.grade.scores import TEAM, Score

#: Version of the layout of a scores folder.
FORMAT = 1


@dataclass(frozen=True)
class EstimatorCard:
    """Everything about one estimator on one run.

    ``declared`` what estimator.toml says, ``case`` the dependence in force, ``alignment`` its mode
    with the reason and the degrees of freedom, ``instants`` graded and ``checked`` ones,
    ``curve`` one row per graded instant.
    """

    name: str
    declared: Mapping[str, str]
    case: str
    alignment: str
    alignment_reason: str
    dof: int
    graded: int
    checked: int
    coverage: tuple[Coverage, ...]
    flaws: tuple[Flaw, ...]
    scores: tuple[Score, ...]
    consistency: tuple[Consistency, ...]
    curve: pd.DataFrame

    def score(self, quantity: str, robot: str = TEAM, part: str = "checked") -> Score | None:
        """The first score of a quantity."""
        for s in self.scores:
            if (s.quantity, s.robot, s.part) == (quantity, robot, part):
                return s
        return None

    def verdict(self, robot: str = TEAM) -> Consistency | None:
        """The judgement on its covariance."""
        return next((c for c in self.consistency if c.robot == robot), None)


@dataclass(frozen=True)
class RunCard:
    """One run: its reference, its estimators, and how they compare."""

    reference: Mapping[str, Any]
    robots: tuple[str, ...]
    spacing_s: float
    estimators: tuple[EstimatorCard, ...]
    comparisons: tuple[Comparison, ...]
    order: Order
    sharing: tuple[Mapping[str, Any], ...]
    notes: tuple[str, ...]

    def estimator(self, name: str) -> EstimatorCard:
        """The card of an estimator; ``KeyError`` when there is none."""
        return {e.name: e for e in self.estimators}[name]


@dataclass(frozen=True)
class Scorecard:
    """The grades of estimators over one or several runs.

    ``status`` is ``ok`` or ``doubtful``; ``reasons`` say why. ``across`` compares over runs.
    """

    runs: tuple[RunCard, ...]
    across: tuple[Mapping[str, Any], ...]
    settings: Mapping[str, Any]
    status: str
    reasons: tuple[str, ...]

    def tables(self) -> dict[str, pd.DataFrame]:
        """Tidy tables by the stem of their file."""
        rows: dict[str, list[dict[str, Any]]] = {
            n: []
            for n in ("scores", "consistency", "compare", "coverage", "sharing", "flaws", "order")
        }
        curves = []
        for k, run in enumerate(self.runs):
            own = {"run": k}
            for card in run.estimators:
                rows["scores"] += [own | s.row() for s in card.scores]
                rows["consistency"] += [own | consistency_row(c) for c in card.consistency]
                rows["coverage"] += [
                    own | {"estimator": card.name} | c.to_dict() for c in card.coverage
                ]
                rows["flaws"] += [own | f.to_dict() for f in card.flaws]
                curves.append(card.curve.assign(run=k))
            rows["compare"] += [own | c.row() for c in run.comparisons]
            rows["sharing"] += [own | dict(s) for s in run.sharing]
            rows["order"] += [
                own
                | {
                    "rank": p.rank,
                    "estimator": p.estimator,
                    "value_m": p.value,
                    "certainty": p.certainty,
                    "n": run.order.n,
                    "support": run.order.support,
                }
                for p in run.order.places
            ]
        made = {name: pd.DataFrame(found) for name, found in rows.items()}
        made["errors"] = pd.concat(curves, ignore_index=True) if curves else pd.DataFrame()
        made["runs"] = pd.DataFrame([dict(a) for a in self.across])
        return made

    def to_dict(self) -> dict[str, Any]:
        """What scorecard.json holds."""
        return {
            "format": FORMAT,
            "status": self.status,
            "reasons": list(self.reasons),
            "settings": dict(self.settings),
            "runs": [_run_dict(run) for run in self.runs],
            "across": [dict(a) for a in self.across],
        }


def consistency_row(c: Consistency) -> dict[str, Any]:
    """One row of consistency.csv."""
    row = asdict(c)
    shares = row.pop("coverage")
    for level, share in zip(LEVELS, shares, strict=True):
        row[f"inside_{round(100 * level)}"] = share
    return row


def _run_dict(run: RunCard) -> dict[str, Any]:
    return {
        "reference": dict(run.reference),
        "robots": list(run.robots),
        "spacing_s": run.spacing_s,
        "notes": list(run.notes),
        "order": {
            "alignment": run.order.alignment, "instants": run.order.n,
            "support": run.order.support, "note": run.order.note,
            "places": [asdict(p) for p in run.order.places],
        },
        "sharing": [dict(s) for s in run.sharing],
        "comparisons": [c.row() for c in run.comparisons],
        "estimators": [_card_dict(card) for card in run.estimators],
    }  # fmt: skip


def _card_dict(card: EstimatorCard) -> dict[str, Any]:
    team = [s.row() for s in card.scores if s.robot == TEAM]
    return {
        "name": card.name, "declared": dict(card.declared), "case": card.case,
        "alignment": card.alignment, "alignment_reason": card.alignment_reason,
        "degrees_of_freedom_removed": card.dof, "instants_graded": card.graded,
        "instants_checked": card.checked,
        "coverage": [c.to_dict() for c in card.coverage],
        "flaws": [f.to_dict() for f in card.flaws],
        "scores": team,
        "consistency": [consistency_row(c) for c in card.consistency],
    }  # fmt: skip
