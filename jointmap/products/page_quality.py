"""The parts of the page that hold numbers about noise, sigmas, trust and evidence."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap.products.columns import TRUST
from jointmap.products.reference import Reference, Trajectory
from jointmap.products.text import degrees, metres, number, percent, table, wrap

Floats = NDArray[np.float64]

MOST_TERMS = 12


def noise_section(reference: Reference, width: int) -> list[str]:
    """What was stated about noise and what the data say, the largest disagreement first."""
    noise = reference.noise
    told = noise[noise["estimated"].notna()]
    lines: list[str] = []
    if told.empty:
        lines += wrap("Nothing was estimated: sigmas are as given, or defaults.", width)
    else:
        lines += _noise_table(told)
    if len(told) > MOST_TERMS:
        lines += wrap(f"… and {len(told) - MOST_TERMS} more in noise.csv.", width)
    left = len(noise) - len(told)
    if left and not told.empty:
        lines += wrap(f"{left} terms could not be told from the data (noise.csv).", width)
    return [*lines, *_calibration_lines(reference, width)]


def _noise_table(told: pd.DataFrame) -> list[str]:
    # Terms without a given value come last: there is nothing that they disagree with.
    ratio = (told["estimated"] / told["given"]).to_numpy(dtype=np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):  # a sigma of zero disagrees infinitely
        gap = np.nan_to_num(np.abs(np.log(ratio)), nan=-1.0)
    shown = told.iloc[np.argsort(-gap, kind="stable")[:MOST_TERMS]]
    rows = [
        [
            _whose(r.robot, r.sensor, r.component),
            str(r.term),
            number(r.given),
            number(r.estimated),
            number(r.sigma),
        ]
        for r in shown.itertuples()
    ]
    return table(["of", "term", "given", "found", "+-"], rows)


def _calibration_lines(reference: Reference, width: int) -> list[str]:
    """Calibration values in force that differ from their nominal ones."""
    found = reference.calibration
    found = found[found["used"].fillna(False) & found["significant"].fillna(False)]
    if found.empty:
        return []
    rows = [
        [_whose(r.robot, r.sensor), str(r.parameter), number(r.value), number(r.sigma)]
        for r in found.head(MOST_TERMS).itertuples()
    ]
    lines = ["", *table(["calibrated", "what", "found", "+-"], rows)]
    more = len(found) - MOST_TERMS
    return [*lines, *wrap(f"… and {more} more in calibration.csv.", width)] if more > 0 else lines


def _whose(*names: object) -> str:
    """Robot, sensor and component in one cell; unknown ones are left out."""
    return " ".join(name for name in names if isinstance(name, str))


def quality_section(reference: Reference, width: int) -> list[str]:
    """Claimed sigmas, trust and evidence."""
    header = ["", "median", "95 % below", "heading", *TRUST]
    rows = [[robot, *_path_cells(path)] for robot, path in reference.trajectories.items()]
    if len(reference.landmarks):
        rows.append(["landmarks", *_landmark_cells(reference)])
    lines = table(header, rows)
    lines += wrap(
        "Sigma of position in its worst direction, of heading (median), and shares of rows that "
        "other measurements check well, weakly or not at all.",
        width,
    )
    chi2, dof = reference.meta["chi2"], reference.meta["dof"]
    if chi2 is not None and dof:
        ratio = f"{float(chi2) / float(dof):.2f}"
        lines += wrap(f"Residuals: chi2/dof {ratio} on {int(dof):,} (1 is expected).", width)
    return [*lines, *_holdout_lines(reference, width)]


def _path_cells(path: Trajectory) -> list[str]:
    sigma = worst_sigma(path.cov[:, : path.dimension, : path.dimension])
    heading = np.sqrt(path.cov[:, -1, -1])
    shares = [float((path.trust == code).mean()) if len(path) else np.nan for code in range(3)]
    return [
        metres(_quantile(sigma, 0.5)),
        metres(_quantile(sigma, 0.95)),
        degrees(_quantile(heading, 0.5)),
        *map(percent, shares),
    ]


def _landmark_cells(reference: Reference) -> list[str]:
    marks, axes = reference.landmarks, "xyz"[: reference.dimension]
    cov = np.empty((len(marks), len(axes), len(axes)))
    for i, a in enumerate(axes):
        for j, b in enumerate(axes):
            cov[:, i, j] = marks[f"cov_{min(a, b)}_{max(a, b)}"].to_numpy(dtype=np.float64)
    sigma = worst_sigma(cov)
    shares = [float((marks["trust"] == name).mean()) for name in TRUST]
    middle, high = metres(_quantile(sigma, 0.5)), metres(_quantile(sigma, 0.95))
    return [middle, high, "", *map(percent, shares)]


def worst_sigma(cov: Floats) -> Floats:
    """Root of the largest eigenvalue (N,) of covariances (N, d, d); NaN where unknown."""
    sigma = np.full(len(cov), np.nan)
    known = np.isfinite(cov).all(axis=(1, 2))
    if known.any():
        # A covariance without spread can have an eigenvalue of -1e-20.
        sigma[known] = np.sqrt(np.maximum(np.linalg.eigvalsh(cov[known])[:, -1], 0.0))
    return sigma


def _quantile(values: Floats, share: float) -> float:
    known = values[np.isfinite(values)]
    return float(np.quantile(known, share)) if len(known) else float("nan")


def _holdout_lines(reference: Reference, width: int) -> list[str]:
    """Per kind of fold: how well what was left out is predicted."""
    if reference.holdout["normalized_square"].isna().all():
        return wrap("No hold-out test was made.", width)
    lines: list[str] = []
    found = reference.meta["evidence"].get("holdout") or {}
    if found.get("sigma_factor", 1.0) > 1.0:
        lines += wrap(
            f"Hold-out: the sigmas above are {found['sigma_factor']:.2f} times the noise model's.",
            width,
        )
    for kind, folds in reference.holdout.groupby("fold_kind", sort=False):
        folds = folds[folds["normalized_square"].notna()]
        n = folds["n"].to_numpy(dtype=np.float64)
        mean = float(np.average(folds["normalized_square"], weights=np.maximum(n, 1.0)))
        inside = folds["normalized_square"].between(folds["lower"], folds["upper"])
        lines += wrap(
            f"Hold-out by {kind}: what was left out is met with normalized square {mean:.2f} "
            f"(1 is expected); {int(inside.sum())} of {len(folds)} folds in their band.",
            width,
        )
    return lines
