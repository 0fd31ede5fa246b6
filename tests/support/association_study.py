"""Simulated surveys with wrong associations, fused and judged against what was simulated."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

import jointmap
from jointmap.ingest.edits import format_edit
from jointmap.ingest.survey import AssociationEdit
from jointmap.settings import Settings
from jointmap.simulate import SimulationSettings, simulate

#: Non-centrality of Baarda's test for two components, alpha 0.001, power 0.8 (Baarda 1968).
LAMBDA = 19.66


@dataclass(frozen=True)
class Outcome:
    """What one fusion did: RMSE against the simulated paths (m), and counts of associations."""

    status: str
    rmse: float
    wrong: int
    wrong_rejected: int
    right: int
    right_rejected: int
    unresolved: int


def fused(folder: Path, kernel: str = "cauchy"):
    """Reference of a survey under default settings."""
    return jointmap.fuse(jointmap.read_survey(folder), Settings(kernel=kernel))


def make(folder: Path, world: str, seed: int, share: float, pattern: str) -> Path:
    """A survey of four robots with white noise and a share of wrong associations."""
    settings = SimulationSettings.preset(
        "white",
        duration_s=200.0,
        landmarks=40,
        labels="own",
        wrong_associations=share,
        wrong_pattern=pattern,
    )
    simulate(world, folder, settings, seed=seed, replace=True)
    return folder


def without_wrong(folder: Path) -> None:
    """Let the user's edits reject every wrong association: what an oracle would do."""
    truth = pd.read_csv(folder / "truth" / "associations.csv")
    edits = [
        format_edit(AssociationEdit("reject", r.robot, r.label))
        for r in truth[truth["wrong"]].itertuples()
    ]
    (folder / "edits.toml").write_text("\n\n".join(edits) + "\n")


def judged(folder: Path, reference) -> Outcome:
    """Outcome of a fusion against the simulated paths and associations."""
    truth = pd.read_csv(folder / "truth" / "associations.csv")
    table = reference.associations.merge(
        truth.rename(columns={"landmark": "is"}), on=["robot", "label"]
    )
    wrong, right = _contradicted(table), ~table["wrong"] & ~_outvoted(table)
    rejected = table["verdict"] == "rejected"
    return Outcome(
        status=reference.status,
        rmse=path_rmse(folder, reference),
        wrong=int(wrong.sum()),
        wrong_rejected=int((wrong & (table["verdict"] != "kept")).sum()),
        right=int(right.sum()),
        right_rejected=int((right & rejected).sum()),
        unresolved=int((table["verdict"] == "unresolved").sum()),
    )


def _contradicted(table: pd.DataFrame) -> np.ndarray:
    """Wrong claims that at least as many robots contradict as agree with them.

    Plates are metres apart and placed to centimetres, so every contradicted claim exceeds its
    minimal detectable bias. Where more robots give a plate the same wrong name than know it by its
    right one, the geometry is right and the name is a matter of votes: no bias to detect. Neither
    has a claim that nobody contradicts.
    """
    agree = table.groupby(["landmark", "is"])["robot"].transform("nunique")
    right = _right_robots(table)
    return (table["wrong"] & (right > 0) & (right >= agree)).to_numpy()


def _outvoted(table: pd.DataFrame) -> np.ndarray:
    """Right claims whose name more robots give, together, to one other plate."""
    wrong = table[table["wrong"]].groupby(["landmark", "is"])["robot"].nunique()
    most = wrong.groupby("landmark").max() if len(wrong) else pd.Series(dtype=float)
    against = table["landmark"].map(most).fillna(0)
    return (~table["wrong"] & (against > _right_robots(table))).to_numpy()


def _right_robots(table: pd.DataFrame) -> pd.Series:
    count = table[~table["wrong"]].groupby("landmark")["robot"].nunique()
    return table["landmark"].map(count).fillna(0)


def path_rmse(folder: Path, reference) -> float:
    """RMS position error over all robots after one yaw-and-shift alignment on the paths.

    Rows that the reference itself calls unchecked are left out.
    """
    axes = ["x_m", "y_m", "z_m"][: reference.dimension]
    mine, true = [], []
    for robot, path in reference.trajectories.items():
        table = next(folder.glob(f"truth/{robot}.*"))
        known = pd.read_parquet(table) if table.suffix == ".parquet" else pd.read_csv(table)
        inside = (path.trust < 2) & (path.t_s >= known["t_s"].iloc[0])
        inside &= path.t_s <= known["t_s"].iloc[-1]
        stamps = path.t_s[inside]
        mine.append(path.pose[inside, : len(axes)])
        true.append(np.stack([np.interp(stamps, known["t_s"], known[a]) for a in axes], axis=1))
    a, b = np.concatenate(mine), np.concatenate(true)
    keep = np.ones(len(a), dtype=bool)
    for _ in range(4):
        turned = _aligned(a, a[keep], b[keep])
        error = np.linalg.norm(turned - b, axis=1)
        keep = error <= 3.0 * np.median(error) + 1e-9
    return float(np.sqrt(np.mean(error**2)))


def _aligned(points: np.ndarray, a: np.ndarray, b: np.ndarray) -> np.ndarray:
    x, y = a - a.mean(axis=0), b - b.mean(axis=0)
    sine = np.sum(x[:, 0] * y[:, 1] - x[:, 1] * y[:, 0])
    angle = np.arctan2(sine, np.sum(x[:, :2] * y[:, :2]))
    turn = np.eye(a.shape[1])
    turn[:2, :2] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
    return (points - a.mean(axis=0)) @ turn.T + b.mean(axis=0)
