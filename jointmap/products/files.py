"""A reference as a folder: writing it whole, reading it back."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from jointmap.atomic import new_folder, recover
from jointmap.errors import LogFormatError, LogProblem, SurveyError
from jointmap.products.columns import (
    META_KEYS,
    TABLES,
    TRUST,
    pack_covariance,
    table_covariance_columns,
    table_dtypes,
    unpack_covariance,
)
from jointmap.products.reference import Reference, Trajectory
from jointmap.schema import pose_columns

#: Version of the layout of a reference folder.
FORMAT = 1
MARKER = "reference.json"
_PARQUET = ("measurements",)


def write_reference(reference: Reference, path: Path | str, replace: bool = False) -> Path:
    """Write a reference folder, whole or not at all.

    Parameters
    ----------
    reference : Reference
    path : path
    replace : bool
        An earlier reference at ``path`` is replaced; otherwise it is an error.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    OutputExistsError
        Something stands there that may not be replaced.
    """
    with new_folder(path, replace=replace, marker=MARKER) as folder:
        (folder / "trajectory").mkdir()
        for robot, trajectory in reference.trajectories.items():
            table = trajectory_table(trajectory)
            pq.write_table(table, folder / "trajectory" / f"{robot}.parquet", compression="zstd")
        for name, frame in reference.tables.items():
            if name in _PARQUET:
                pq.write_table(
                    pa.Table.from_pandas(frame, preserve_index=False),
                    folder / f"{name}.parquet",
                    compression="zstd",
                )
            else:
                write_csv(frame, folder / f"{name}.csv")
        with open(folder / "state.npz", "wb") as file:
            # A written array with objects would need pickle to come back; refuse it here.
            np.savez_compressed(file, allow_pickle=False, **dict(reference.state))
        (folder / MARKER).write_text(json_text(reference.meta) + "\n", encoding="utf-8")
    return Path(path)


def read_reference(path: Path | str) -> Reference:
    """Read a reference folder.

    Raises
    ------
    LogFormatError
        The folder is no reference, a file is missing or does not hold what it should.
    """
    folder = Path(path)
    recover(folder)
    meta = _read_meta(folder)
    trajectories = {p.stem: _read_trajectory(folder, p) for p in _trajectory_files(folder)}
    dimensions = {t.dimension for t in trajectories.values()}
    dimension = dimensions.pop() if dimensions else int(meta["survey"].get("dimension", 2))
    order = _robot_order(meta, trajectories)
    return Reference(
        meta=meta,
        trajectories={robot: trajectories[robot] for robot in order},
        state=_read_state(folder),
        **{name: _read_table(folder, name, dimension) for name in TABLES},
    )


def trajectory_table(trajectory: Trajectory) -> pa.Table:
    """The columns of trajectory/ROBOT.parquet."""
    dimension = trajectory.dimension
    columns: dict[str, Any] = {"t_s": trajectory.t_s}
    columns |= dict(zip(pose_columns(dimension), trajectory.pose.T, strict=True))
    packed = pack_covariance(trajectory.cov)
    columns |= dict(zip(table_covariance_columns(dimension), packed.T, strict=True))
    columns |= {"keyframe": trajectory.keyframe, "component": trajectory.component}
    arrays = {name: pa.array(np.ascontiguousarray(values)) for name, values in columns.items()}
    arrays["trust"] = pa.array(np.array(TRUST)[trajectory.trust].astype(object), pa.string())
    return pa.table(arrays)


def write_csv(frame: pd.DataFrame, path: Path) -> None:
    """A small table; numbers to full precision, unknown cells empty, yes/no as true/false.

    A name that ends in ``.gz`` is compressed, without a time stamp so that results repeat.
    """
    shown = frame.copy()
    for name in shown.columns[shown.dtypes == "boolean"]:
        shown[name] = shown[name].map({True: "true", False: "false"}).astype("object")
    packing: Any = {"method": "gzip", "mtime": 0} if path.name.endswith(".gz") else None
    shown.to_csv(path, index=False, lineterminator="\n", encoding="utf-8", compression=packing)


def json_text(values: Mapping[str, Any]) -> str:
    """Strict JSON: what is not finite becomes null, NumPy's numbers and paths plain ones."""
    return json.dumps(_plain(values), indent=2, allow_nan=False, ensure_ascii=False)


def _plain(value: Any) -> Any:
    """What JSON can hold."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return _plain(value.tolist())
    if isinstance(value, list | tuple | set | frozenset):
        return [_plain(v) for v in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, Path):
        return str(value)
    return value


def _refused(folder: Path, file: str, message: str, column: str | None = None) -> LogFormatError:
    mend = f"write the reference {folder.name} again with `jointmap fuse`"
    return LogFormatError([LogProblem(f"{folder.name}/{file}", None, column, message, mend)])


def _read_meta(folder: Path) -> dict[str, Any]:
    if not folder.is_dir():
        raise SurveyError(f"{folder} is not a folder; name a folder that `jointmap fuse` wrote")
    try:
        meta = json.loads((folder / MARKER).read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise _refused(folder, MARKER, "the file is missing: this is no reference") from None
    except (UnicodeDecodeError, json.JSONDecodeError) as error:
        raise _refused(folder, MARKER, f"not JSON: {error}") from None
    if not isinstance(meta, dict) or meta.get("format") != FORMAT:
        found = meta.get("format") if isinstance(meta, dict) else None
        raise _refused(
            folder, MARKER, f"format is {found!r}, this program reads {FORMAT}", "format"
        )
    missing = [key for key in META_KEYS if key not in meta]
    if missing:
        raise _refused(folder, MARKER, "keys are missing", ", ".join(missing))
    return meta


def _trajectory_files(folder: Path) -> list[Path]:
    return sorted((folder / "trajectory").glob("*.parquet"))


def _robot_order(meta: Mapping[str, Any], found: Mapping[str, Trajectory]) -> list[str]:
    """Robots in the order of the survey where reference.json tells it, then by name."""
    told = [robot for part in meta["components"] or [] for robot in part]
    listed = [robot for robot in dict.fromkeys(told) if robot in found]
    return [*listed, *(robot for robot in found if robot not in listed)]


def _read_trajectory(folder: Path, path: Path) -> Trajectory:
    file = f"trajectory/{path.name}"
    try:
        table = pq.read_table(path)
    except (OSError, pa.ArrowInvalid) as error:
        raise _refused(folder, file, f"cannot be read: {error}") from None
    dimension = 3 if "z_m" in table.column_names else 2
    pose, cov = pose_columns(dimension), table_covariance_columns(dimension)
    needed = ("t_s", *pose, *cov, "keyframe", "component", "trust")
    missing = [name for name in needed if name not in table.column_names]
    if missing:
        raise _refused(folder, file, "columns are missing", ", ".join(missing))
    codes = {name: code for code, name in enumerate(TRUST)}
    trust = table["trust"].to_pandas().map(codes)
    if trust.isna().any():
        raise _refused(folder, file, f"holds other words than {', '.join(TRUST)}", "trust")
    try:
        return Trajectory(
            t_s=_floats(table, ("t_s",))[:, 0],
            pose=_floats(table, pose),
            cov=unpack_covariance(_floats(table, cov)),
            keyframe=table["keyframe"].to_numpy(),
            component=table["component"].to_numpy(),
            trust=trust.to_numpy(dtype=np.int64),
        )
    except ValueError as error:
        raise _refused(folder, file, str(error)) from None


def _floats(table: pa.Table, names: tuple[str, ...]) -> NDArray[np.float64]:
    columns = [table[name].to_numpy(zero_copy_only=False) for name in names]
    return np.stack(columns, axis=-1).astype(np.float64)


def _read_table(folder: Path, name: str, dimension: int) -> pd.DataFrame:
    dtypes = table_dtypes(name, dimension)
    file = f"{name}.parquet" if name in _PARQUET else f"{name}.csv"
    try:
        frame = _load(folder / file)
        missing = [column for column in dtypes if column not in frame]
        if missing:
            raise _refused(folder, file, "columns are missing", ", ".join(missing))
        for column in [c for c in dtypes if dtypes[c] == "boolean" and file.endswith(".csv")]:
            frame[column] = _yes_no(frame[column])
        return frame[list(dtypes)].astype(dtypes)
    except FileNotFoundError:
        raise _refused(folder, file, "the file is missing") from None
    except (OSError, ValueError, TypeError, pa.ArrowInvalid) as error:
        if isinstance(error, LogFormatError):
            raise
        raise _refused(folder, file, f"cannot be read: {error}") from None


def _load(path: Path) -> pd.DataFrame:
    if path.suffix == ".parquet":
        return pd.DataFrame(pq.read_table(path).to_pandas())
    # Text first: a landmark may be called NA or 017, and only an empty cell means unknown.
    return pd.read_csv(path, dtype="str", keep_default_na=False, na_values=[""])


def _yes_no(words: pd.Series[Any]) -> pd.Series[Any]:
    if not words.dropna().isin(["true", "false"]).all():
        raise ValueError(f"column {words.name} holds other words than true and false")
    return words.map({"true": True, "false": False}).astype("boolean")


def _read_state(folder: Path) -> dict[str, NDArray[Any]]:
    try:
        with np.load(folder / "state.npz", allow_pickle=False) as held:
            return {name: held[name] for name in held.files}
    except FileNotFoundError:
        raise _refused(folder, "state.npz", "the file is missing") from None
    except (OSError, ValueError) as error:
        raise _refused(folder, "state.npz", f"cannot be read: {error}") from None
