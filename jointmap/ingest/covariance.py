"""Full covariances in tables: upper triangles to matrices, and whether they can be true."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap import schema
from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Floats
from jointmap.ingest.table import Table

#: Eigenvalues of the correlation matrix down to here count as rounding.
ROUNDING = 1e-9
_SLICE = 1 << 16


def read_covariance(
    table: Table, dimension: int, problems: Problems, *, accumulated: bool = False
) -> Floats | None:
    """Covariances (n, dof, dof) in table order, NaN where not given; ``None`` without columns.

    A sub-block may be given (the rows and columns of the components that are observed), but it
    must be complete, symmetric where both triangles are given, and positive definite.
    Accumulated covariances of odometry may be singular, and faulty ones are left out instead of
    refused: they are used where they help and never needed.
    """
    prefix = "acc_cov_" if accumulated else "cov_"
    names = schema.covariance_columns(dimension, prefix)
    if not any(table.given(n) for n in names):
        return None
    out = _fill(table, dimension, prefix)
    faulty = _asymmetric(table, dimension, prefix, out, problems, mended=accumulated)
    faulty |= _incomplete(table, out, names[0], problems, mended=accumulated)
    wrong = indefinite(out, -ROUNDING if accumulated else ROUNDING) & ~faulty
    message = "the covariance is not positive definite"
    mend = "the row's covariance is left out" if accumulated else "mend it or leave it empty"
    table.complain(problems, wrong, names[0], message, mend, mended=accumulated)
    out[faulty | wrong] = np.nan
    return out


def _fill(table: Table, dimension: int, prefix: str) -> Floats:
    """Symmetric matrices from the upper triangle."""
    dof = 3 if dimension == 2 else 6
    upper = table.matrix(schema.covariance_columns(dimension, prefix))
    i, j = np.triu_indices(dof)
    out = np.empty((table.n, dof, dof))
    out[:, i, j] = upper
    out[:, j, i] = upper
    return out


def _asymmetric(
    table: Table, dimension: int, prefix: str, cov: Floats, problems: Problems, *, mended: bool
) -> NDArray[np.bool_]:
    """Rows whose lower triangle, when the file has one, contradicts the upper."""
    faulty = np.zeros(table.n, dtype=bool)
    axes = schema.AXES[dimension]
    for i, a in enumerate(axes):
        for j in range(i + 1, len(axes)):
            column = f"{prefix}{axes[j]}_{a}"
            if not table.given(column):
                continue
            lower, upper = table.number(column), cov[:, i, j]
            with np.errstate(invalid="ignore"):
                scale = np.sqrt(np.abs(cov[:, i, i] * cov[:, j, j]))
                differ = np.abs(lower - upper) > 1e-6 * scale + 1e-300
            message = f"differs from {prefix}{a}_{axes[j]}: the covariance is not symmetric"
            mend = "the row's covariance is left out" if mended else "give the upper triangle only"
            table.complain(problems, differ & ~faulty, column, message, mend, mended=mended)
            faulty |= differ
    return faulty


def _incomplete(
    table: Table, cov: Floats, column: str, problems: Problems, *, mended: bool
) -> NDArray[np.bool_]:
    """Rows with a cross term and no variance for it, or the reverse."""
    given = ~np.isnan(cov)
    diagonal = np.einsum("nii->ni", given)
    whole = diagonal[:, :, None] & diagonal[:, None, :]
    faulty = np.asarray((given != whole).any(axis=(1, 2)))
    message = "the covariance is incomplete"
    mend = (
        "the row's covariance is left out"
        if mended
        else "give the whole upper triangle of the observed components, or nothing"
    )
    table.complain(problems, faulty, column, message, mend, mended=mended)
    return faulty


def indefinite(cov: Floats, least: float) -> NDArray[np.bool_]:
    """Which matrices, over their given rows and columns, have an eigenvalue under ``least``.

    Judged on correlation matrices, so that metres and radians weigh alike. A matrix without any
    given entry passes.
    """
    out = np.zeros(len(cov), dtype=bool)
    for start in range(0, len(cov), _SLICE):  # slices bound the memory, they are not rows
        part = cov[start : start + _SLICE]
        out[start : start + _SLICE] = _indefinite_part(part, least)
    return out


def _indefinite_part(cov: Floats, least: float) -> NDArray[np.bool_]:
    variance = np.einsum("nii->ni", cov)
    zero_allowed = least <= 0.0
    with np.errstate(invalid="ignore"):
        negative = ((variance < 0.0) if zero_allowed else (variance <= 0.0)).any(axis=1)
    sigma = np.sqrt(np.where(variance > 0.0, variance, 1.0))
    scaled = cov / (sigma[:, :, None] * sigma[:, None, :])
    missing = np.isnan(variance)
    scaled = np.where(np.isnan(scaled), 0.0, scaled)
    diagonal = np.einsum("nii->ni", scaled)
    diagonal[missing] = 1.0
    try:
        np.linalg.cholesky(scaled)
    except np.linalg.LinAlgError:
        return np.asarray(negative | (np.linalg.eigvalsh(scaled)[:, 0] < least))
    return np.asarray(negative)
