"""The verdict on a reference: status, reasons and what to distrust, in plain words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, cast

import numpy as np
import pandas as pd

from jointmap.settings import Settings
from jointmap.solve.shared import SENSOR_PRIOR
from jointmap.trust.outcome import Outcome

#: Shares beyond which a reference is called weak or inconsistent (design choices, no source).
UNCHECKED_SHARE = 0.5
REJECTED_MEASUREMENTS = 0.2
REJECTED_ASSOCIATIONS = 0.5
REJECTED_CONTROL = 0.3
#: Residuals over their sigmas (median of a block, or all together) beyond which these are called
#: wrong, and the degrees of freedom that all together need.
STATED_FACTOR = 4.0
LEAST_DOF = 20


@dataclass(frozen=True)
class Judged:
    """``status`` with its ``reasons``; ``distrust`` first things first; ``links`` between robots."""

    status: str
    reasons: tuple[str, ...]
    distrust: tuple[str, ...]
    links: tuple[Mapping[str, Any], ...]
    evidence: Mapping[str, Any]


def judge(
    outcome: Outcome,
    settings: Settings,
    robots: pd.DataFrame,
    landmarks: pd.DataFrame,
    associations: pd.DataFrame,
    measurements: pd.DataFrame,
    suspects: pd.DataFrame,
) -> Judged:
    """Status of the reference, most serious reason first."""
    reasons: list[tuple[str, str]] = []
    n_parts = robots["component"].nunique()
    if n_parts > 1:
        parts = robots.groupby("component")["robot"].apply(lambda names: ", ".join(names))
        text = " | ".join(parts)
        reasons.append(
            ("disconnected", f"nothing ties these groups of robots to each other: {text}")
        )
    if not outcome.optimised.converged:
        reasons.append(("not-converged", "the final solve did not converge"))
    if not outcome.settled:
        reasons.append(("weak", "noise and decisions had not settled after the last round"))
    reasons += _rejections(associations, measurements)
    reasons += _datum_missed(outcome, settings)
    for name, factor in _stated(outcome).items():
        reasons.append(
            (
                "inconsistent",
                f"residuals of {name} are {factor:.1f} times what its stated sigmas allow; "
                "remove them from survey.toml to have them estimated",
            )
        )
    whole = _whole(outcome)
    if whole > STATED_FACTOR:
        reasons.append(
            (
                "inconsistent",
                f"all residuals together are {whole:.1f} times what the sigmas allow: they are too "
                "small, or wrong measurements were kept",
            )
        )
    for link in outcome.start.links:
        if link.ambiguous:
            reasons.append(
                (
                    "weak",
                    f"the frames of {link.robot_a} and {link.robot_b} could be tied another way "
                    f"({link.support} against {link.runner_up} agreements)",
                )
            )
    lost = robots.loc[robots["share_unchecked"] > UNCHECKED_SHARE, "robot"]
    for name in lost:
        reasons.append(
            ("weak", f"most of the path of {name} is dead reckoning that nothing checks")
        )
    order = ("not-converged", "inconsistent", "disconnected", "weak")
    status = next((s for s in order if any(r[0] == s for r in reasons)), "ok")
    reasons.sort(key=lambda r: order.index(r[0]))
    return Judged(
        status,
        tuple(text for _, text in reasons),
        _distrust(outcome, robots, landmarks, suspects),
        tuple(_links(outcome)),
        {"settled": outcome.settled, "association_scale": _scale(outcome)},
    )


def _scale(outcome: Outcome) -> float | None:
    return None if outcome.review is None else float(outcome.review.scale)


def _rejections(associations: pd.DataFrame, measurements: pd.DataFrame) -> list[tuple[str, str]]:
    out = []
    tested = associations[associations["verdict"].isin(["kept", "rejected"])]
    for name, mine in tested.groupby("robot"):
        share = float((mine["verdict"] == "rejected").mean())
        if share > REJECTED_ASSOCIATIONS and len(mine) >= 4:
            out.append(("weak", f"{share:.0%} of the associations of {name} were rejected"))
    rows = measurements[measurements["kind"].isin(["sighting", "encounter", "closure", "fix"])]
    for key, group in rows.groupby(["robot", "kind"]):
        name, kind = cast(tuple[str, str], key)
        share = float((group["verdict"] == "rejected").mean())
        if share > REJECTED_MEASUREMENTS and len(group) >= 20:
            out.append(("weak", f"{share:.0%} of the {kind}s of {name} were rejected"))
    control = measurements.loc[measurements["kind"] == "control", "verdict"]
    total, against = int((control != "unusable").sum()), int((control == "rejected").sum())
    if against > REJECTED_CONTROL * total:
        out.append(("weak", f"{against} of {total} control points contradict the others"))
    return out


def _datum_missed(outcome: Outcome, settings: Settings) -> list[tuple[str, str]]:
    """Robots whose result is not in the site frame although that was asked for."""
    if (settings.datum or outcome.survey.datum_kind) != "control":
        return []
    gauge, problem = outcome.quality.gauge, outcome.problem
    loose = gauge.free[gauge.component[problem.keyframes.first[:-1]]] > 0
    names = ", ".join(name for name, out in zip(problem.robots, loose, strict=True) if out)
    if not names:
        return []
    text = f"fixes and control points do not hold {names} in the site frame: too few, or rejected"
    return [("weak", f"{text}; coordinates start at a first pose instead")]


def _stated(outcome: Outcome) -> dict[str, float]:
    """Blocks whose stated sigmas the residuals contradict."""
    out: dict[str, float] = {}
    for part, stats in zip(outcome.system.parts, outcome.quality.parts, strict=True):
        t, dof = stats.statistic()
        block = part.block
        name = outcome.problem.robots[block.robot] if block.robot >= 0 else "control"
        free = any(
            term.free
            for key, term in outcome.noise.terms.items()
            if key[0] == name and key[1] == (block.sensor or block.kind)
        )
        free |= block.kind == "odometry"
        if free or (dof > 0).sum() < 50:
            continue
        factor = float(np.sqrt(np.median(t[dof > 0] / np.maximum(dof[dof > 0], 1)) / 0.7))
        if factor > STATED_FACTOR:
            what = f"{name}'s {block.kind}s" + (f" by {block.sensor}" if block.sensor else "")
            out[what] = max(out.get(what, 0.0), factor)
    return out


def _whole(outcome: Outcome) -> float:
    """Root of chi-square over degrees of freedom, 0 with too few to tell."""
    quality = outcome.quality
    dof = quality.rows - int(outcome.system.layout.dims.sum())
    return float(np.sqrt(quality.chi2 / dof)) if dof >= LEAST_DOF else 0.0


def _distrust(
    outcome: Outcome, robots: pd.DataFrame, landmarks: pd.DataFrame, suspects: pd.DataFrame
) -> tuple[str, ...]:
    out = []
    for row in robots.to_dict("records"):
        if row["share_unchecked"] > 0.02:
            out.append(
                f"{row['robot']}: {row['share_unchecked']:.0%} of its path is dead reckoning that "
                "nothing checks (before its first or after its last useful observation)"
            )
        if row["share_weak"] > 0.05:
            out.append(
                f"{row['robot']}: {row['share_weak']:.0%} of its path is only weakly checked"
            )
    loose = landmarks[landmarks["trust"] == "unchecked"]
    if len(loose):
        names = ", ".join(loose["landmark"].head(5))
        more = f" and {len(loose) - 5} more" if len(loose) > 5 else ""
        out.append(f"{len(loose)} landmarks that no second look checks: {names}{more}")
    weak = landmarks[landmarks["trust"] == "weak"]
    if len(weak):
        out.append(f"{len(weak)} landmarks that are only weakly checked")
    out += list(outcome.problem.notes) + list(outcome.start.notes) + list(outcome.notes)
    if outcome.holdout.factor > 1.0:
        out.insert(
            0,
            "left-out sightings deviate more than the noise model of single rows explains; all "
            f"claimed sigmas are {outcome.holdout.factor:.2f} times what the model alone says",
        )
    elif outcome.holdout.whole is None:
        out.append(
            "no landmark ties two robots, so nothing tests the claimed sigmas from outside the model"
        )
    if outcome.system.extras is not None and len(outcome.system.extras.sensors):
        used = outcome.constants is None or bool(outcome.constants.used[1])
        limit = f" (taken to be within {SENSOR_PRIOR[1]:.0%} each)" if used else ""
        out.append(
            "the scale of the map rests on the sensors' ranges being right on average"
            f"{limit}; a scale error common to all of them does not show"
        )
    return tuple(out)


def _links(outcome: Outcome) -> list[Mapping[str, Any]]:
    return [
        {
            "robot_a": link.robot_a,
            "robot_b": link.robot_b,
            "kind": link.kind,
            "support": int(link.support),
            "runner_up": int(link.runner_up),
            "ambiguous": bool(link.ambiguous),
        }
        for link in outcome.start.links
    ]
