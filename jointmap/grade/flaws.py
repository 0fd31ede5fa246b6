"""What is wrong with an estimate as such, each in one sentence that names the mend."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.align import angle_of
from jointmap.grade.aligned import Aligned
from jointmap.grade.cases import normalised_square
from jointmap.grade.consistency import Basis
from jointmap.grade.match import Coverage, Matched
from jointmap.grade.online import OnlineEstimate
from jointmap.grade.read import to_body
from jointmap.grade.series import effective_size
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]

#: A mean heading error above this (rad) that stands out of its spread is a rotated body frame.
TURNED_RAD = 0.2
#: A step of the error is a jump when it is this many robust deviations, and this many metres.
JUMP_DEVIATIONS, JUMP_M = 12.0, 0.5
#: An estimate has diverged when its error stays above this many times the median for the rest.
DIVERGED = 8.0
#: Mean normalised squares per degree of freedom outside of this are odd enough to try other orders.
ODD = (0.02, 50.0)
#: Outside of this they are absurd, whatever the order.
ABSURD = (1e-3, 1e3)
#: Least share of the errors along the way that an offset in time has to explain.
EXPLAINED = 0.3


@dataclass(frozen=True)
class Flaw:
    """``kind``, the robot (empty: all) and the sentence."""

    estimator: str
    robot: str
    kind: str
    text: str

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return asdict(self)


def coverage_flaws(name: str, coverage: tuple[Coverage, ...]) -> list[Flaw]:
    """Robots without estimates, without overlap, with rows left out."""
    out = []
    for c in coverage:
        if c.clock_s is not None:
            out.append(
                Flaw(
                    name, c.robot, "clock",
                    f"none of its {c.rows:,} stamps lies in the reference's span; adding "
                    f"{c.clock_s:+.3f} s would put the middle of one on that of the other",
                )
            )  # fmt: skip
        elif not c.rows:
            out.append(Flaw(name, c.robot, "missing", "reported nothing; its run counts as missed"))
        elif c.completion < 0.98:
            out.append(
                Flaw(
                    name, c.robot, "incomplete",
                    f"reported for {100 * c.completion:.0f} % of the run; the rest is not scored",
                )
            )  # fmt: skip
        if c.dropped:
            text = f"{c.dropped:,} rows without a usable pose count as gaps"
            out.append(Flaw(name, c.robot, "gaps", text))
    return out


def pose_flaws(
    estimate: OnlineEstimate, matched: Matched, made: Aligned, stage: Stage
) -> list[Flaw]:
    """Rotated frames, jumps, divergence, a clock that is a little off."""
    out = []
    robot = stage.located.robot[matched.row]
    if made.mode == "none" and len(matched) > 20:
        out += _rotated_site(estimate, matched, stage)
    for r in np.unique(robot):
        rows = np.flatnonzero((robot == r) & ~made.unaligned)
        if len(rows) < 20:
            continue
        name = stage.robots[r]
        for kind, text in (
            _turned_body(made.turn[rows]),
            _jump(made.place[rows], matched.t_s[rows]),
            _diverged(made.place[rows], matched.t_s[rows]),
            _late(made.place[rows], matched, rows, stage),
        ):
            if text:
                out.append(Flaw(estimate.name, name, kind, text))
    return out


def _rotated_site(estimate: OnlineEstimate, matched: Matched, stage: Stage) -> list[Flaw]:
    from jointmap.grade.aligned import aligned

    free = aligned(matched, stage, "team")
    turn = max((angle_of(b.transform) for b in free.blocks), default=0.0)
    if turn < 0.05:
        return []
    text = (
        f"its site frame is turned against the reference's by {np.degrees(turn):.1f} degrees: "
        "declare another frame, or rotate the estimates"
    )
    return [Flaw(estimate.name, "", "frame", text)]


def _turned_body(turn: Floats) -> tuple[str, str]:
    """A constant heading error: the body axes are others than the survey's."""
    heading = turn[:, -1]
    mean = float(np.angle(np.exp(1j * heading).mean()))
    spread = float(np.std(np.angle(np.exp(1j * (heading - mean)))))
    if abs(mean) < max(TURNED_RAD, 3.0 * spread):
        return "", ""
    return "frame", (
        f"its heading is off by a constant {np.degrees(mean):+.1f} degrees (spread "
        f"{np.degrees(spread):.1f}): its body axes are turned; x must point forward, y to the left"
    )


def _jump(place: Floats, t_s: Floats) -> tuple[str, str]:
    step = np.linalg.norm(np.diff(place, axis=0), axis=1)
    usual = 1.4826 * float(np.median(np.abs(step - np.median(step)))) + float(np.median(step))
    worst = int(np.argmax(step))
    if step[worst] < max(JUMP_DEVIATIONS * usual, JUMP_M):
        return "", ""
    many = int((step > max(JUMP_DEVIATIONS * usual, JUMP_M)).sum())
    more = f", and {many - 1} more times" if many > 1 else ""
    return "jump", f"its error steps by {step[worst]:.2f} m at {t_s[worst + 1]:.3f} s{more}"


def _diverged(place: Floats, t_s: Floats) -> tuple[str, str]:
    size = np.linalg.norm(place, axis=1)
    half = len(size) // 2
    usual = float(np.median(size[:half]))
    low = np.minimum.accumulate(size[::-1])[::-1]
    begun = np.flatnonzero(low > DIVERGED * max(usual, 1e-9))
    if not len(begun) or begun[0] > 0.98 * len(size) or low[begun[0]] < 1.0:
        return "", ""
    return "diverged", (
        f"it diverged: from {t_s[begun[0]]:.3f} s to its end the error never falls under "
        f"{low[begun[0]]:.1f} m, against {usual:.2f} m before"
    )


def _late(
    place: Floats, matched: Matched, rows: NDArray[np.int64], stage: Stage
) -> tuple[str, str]:
    """Clock offset from errors along the direction of motion: ``error = v dt``."""
    where = stage.group.translation(matched.reference[rows])
    t_s = matched.t_s[rows]
    velocity = np.gradient(where, t_s, axis=0)
    square = float((velocity**2).sum())
    if not square > 0.0:
        return "", ""
    along = (place * velocity).sum(axis=1)
    dt = float(along.sum()) / square
    rest = along - dt * (velocity**2).sum(axis=1)
    n_eff = effective_size(along)
    sd = float(rest.std() * len(rest) / np.sqrt(n_eff)) / square
    speed = float(np.sqrt(square / len(rows)))
    explained = 1.0 - float(((place - dt * velocity) ** 2).sum()) / max(
        float((place**2).sum()), 1e-300
    )
    if abs(dt) < max(5.0 * sd, 0.05) or explained < EXPLAINED or n_eff < 10:
        return "", ""
    # A positive error along the way: the pose stands where the robot is dt later.
    return "clock", (
        f"its stamps look {abs(dt):.3f} s (sigma {sd:.3f} s) too {'early' if dt > 0 else 'late'}: "
        f"at {speed:.2f} m/s that is {abs(dt) * speed:.3f} m"
    )


def covariance_flaws(
    estimate: OnlineEstimate, matched: Matched, basis: Basis | None, factor: float, stage: Stage
) -> list[Flaw]:
    """Covariance about other axes than declared: absurd as it stands, sensible the other way."""
    if basis is None or not np.isfinite(factor) or ODD[0] < factor < ODD[1]:
        return []
    g = stage.group
    pose = matched.estimate[basis.rows]
    out = []
    for words, claim in _other_orders(g.dim, basis.claim, pose, estimate.covariance):
        square, rank, _ = normalised_square(basis.error, claim + basis.reference)
        ratio = float((square / np.maximum(rank, 1)).mean())
        if 0.2 < ratio < 5.0:
            text = (
                f"its covariance makes no sense as declared (factor {factor:.3g}), but does as "
                f"{words} (factor {ratio:.2g}): check `covariance` in estimator.toml and the order"
            )
            out.append(Flaw(estimate.name, "", "covariance", text))
            break
    if not out and not ABSURD[0] < factor < ABSURD[1]:
        text = f"its covariance is absurd (factor {factor:.3g}); check its order, axes and units"
        out.append(Flaw(estimate.name, "", "covariance", text))
    return out


def _other_orders(
    dimension: int, claim: Floats, pose: Floats, declared: str
) -> list[tuple[str, Floats]]:
    from jointmap.frames import group

    g = group(dimension)
    other = "body-tangent" if declared == "fixed-axes" else "fixed-axes"
    # Back to the file's numbers, then read the other way.
    file = (
        g.covariance_to_table(pose, claim) if declared == "fixed-axes" else _body_file(claim, g.dim)
    )
    out = [(f'"{other}"', to_body(file, g, pose, other))]
    swap = np.array([2, 0, 1]) if dimension == 2 else np.array([3, 4, 5, 0, 1, 2])
    turned = file[:, swap][:, :, swap]
    out += [(f"rotation first, {w}", to_body(turned, g, pose, w)) for w in (declared, other)]
    degrees = np.ones(g.dof)
    degrees[g.dim :] = np.pi / 180.0
    scaled = file * degrees[:, None] * degrees[None, :]
    out.append(("angles in degrees", to_body(scaled, g, pose, declared)))
    return out


def _body_file(claim: Floats, dimension: int) -> Floats:
    if dimension == 2:
        return claim
    order = np.array([3, 4, 5, 0, 1, 2])
    return np.ascontiguousarray(claim[:, order][:, :, order])
