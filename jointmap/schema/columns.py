"""The words of the tables: columns, families of columns, tables."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Literal

Dtype = Literal["float64", "int64", "text", "bool"]
BOTH = (2, 3)

#: Order of covariances and sigmas in tables, by dimension.
AXES: dict[int, tuple[str, ...]] = {
    2: ("x", "y", "yaw"),
    3: ("x", "y", "z", "rx", "ry", "rz"),
}
_AXIS_UNIT = {"x": "m", "y": "m", "z": "m", "yaw": "rad", "rx": "rad", "ry": "rad", "rz": "rad"}


@dataclass(frozen=True)
class Column:
    """One column of a table.

    Parameters
    ----------
    name : str
        Name in the header; carries the unit.
    dtype : {"float64", "int64", "text", "bool"}
    unit : str
        Unit, ``""`` where there is none.
    meaning : str
        What it holds, in which frame.
    required : bool
        Must be there (within its form, when it has one).
    dimensions : tuple of int
        Dimensions of a survey in which the column exists.
    form : str
        Name of the alternative that the column belongs to, ``""`` for all.
    """

    name: str
    dtype: Dtype
    unit: str
    meaning: str
    required: bool = False
    dimensions: tuple[int, ...] = BOTH
    form: str = ""


@dataclass(frozen=True)
class Table:
    """One table: where it lies, what its rows are and its columns."""

    name: str
    file: str
    meaning: str
    columns: tuple[Column, ...]
    notes: str = ""

    def names(self, dimension: int, form: str | None = None) -> tuple[str, ...]:
        """Names of the columns in a survey of this dimension (of one form only, if given)."""
        return tuple(
            c.name
            for c in self.columns
            if dimension in c.dimensions and (form is None or c.form in ("", form))
        )

    def column(self, name: str, dimension: int) -> Column | None:
        """The column of this name in this dimension, ``None`` where there is none."""
        for column in self.columns:
            if column.name == name and dimension in column.dimensions:
                return column
        return None


def unit_of(name: str) -> str:
    """Unit that a column name carries (``x_m`` -> ``m``, ``wz_radps`` -> ``rad/s``)."""
    units = {"m": "m", "s": "s", "ns": "ns", "rad": "rad", "deg": "deg"}
    rates = {"mps": "m/s", "radps": "rad/s"}
    return {**units, **rates}.get(name.rsplit("_", 1)[-1], "") if "_" in name else ""


def pose_columns(dimension: int) -> tuple[str, ...]:
    """Names of a pose row: ``x_m y_m yaw_rad`` or ``x_m y_m z_m qx qy qz qw``."""
    if dimension == 2:
        return ("x_m", "y_m", "yaw_rad")
    return ("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw")


def twist_columns(dimension: int) -> tuple[str, ...]:
    """Names of a body-frame twist: ``vx_mps vy_mps wz_radps`` or six components."""
    if dimension == 2:
        return ("vx_mps", "vy_mps", "wz_radps")
    return ("vx_mps", "vy_mps", "vz_mps", "wx_radps", "wy_radps", "wz_radps")


def sigma_columns(dimension: int) -> tuple[str, ...]:
    """Names of the standard deviations of a pose, in table order."""
    return tuple(f"sigma_{axis}_{_AXIS_UNIT[axis]}" for axis in AXES[dimension])


def covariance_columns(dimension: int, prefix: str = "cov_") -> tuple[str, ...]:
    """Upper triangle, row by row: ``cov_x_x, cov_x_y, ...``."""
    axes = AXES[dimension]
    return tuple(f"{prefix}{a}_{b}" for i, a in enumerate(axes) for b in axes[i:])


def covariance_lower_columns(dimension: int, prefix: str = "cov_") -> tuple[str, ...]:
    """Strict lower triangle in the order of the transposed upper one (``cov_y_x, ...``)."""
    axes = AXES[dimension]
    return tuple(f"{prefix}{b}_{a}" for i, a in enumerate(axes) for b in axes[i + 1 :])


def xcov_columns(dimension: int) -> tuple[str, ...]:
    """Full cross-covariance of two poses, row-major: ``xcov_x_x, xcov_x_y, ...``."""
    axes = AXES[dimension]
    return tuple(f"xcov_{a}_{b}" for a in axes for b in axes)


def family(
    names: Iterable[str],
    meaning: str,
    *,
    required: bool = False,
    dimensions: tuple[int, ...] = BOTH,
    form: str = "",
) -> tuple[Column, ...]:
    """Float columns that share a meaning; ``{}`` in it stands for the name without its unit."""
    columns = []
    for name in names:
        unit = unit_of(name)
        bare = name.rsplit("_", 1)[0] if unit else name
        columns.append(
            Column(name, "float64", unit, meaning.format(bare), required, dimensions, form)
        )
    return tuple(columns)


def text(name: str, meaning: str, *, required: bool = True) -> Column:
    """A column of names."""
    return Column(name, "text", "", meaning, required)


def stamp(name: str, meaning: str, *, required: bool = True, ns: bool = True) -> tuple[Column, ...]:
    """A time in seconds, and the same in whole nanoseconds where the input may have it."""
    seconds = Column(name, "float64", "s", meaning, required)
    if not ns:
        return (seconds,)
    other = f"instead of `{name}`: the same in nanoseconds"
    return (seconds, Column(name.removesuffix("_s") + "_ns", "int64", "ns", other, False))


def by_dimension(
    maker: str, meaning: str, *, required: bool = False, form: str = "", prefix: str = "cov_"
) -> tuple[Column, ...]:
    """The pose, sigma, covariance or twist columns of both dimensions, each marked by its own."""
    makers = {
        "pose": pose_columns,
        "twist": twist_columns,
        "sigma": sigma_columns,
        "cov": lambda d: covariance_columns(d, prefix),
        "xcov": xcov_columns,
    }
    merged: dict[str, Column] = {}
    for dimension in BOTH:
        for column in family(
            makers[maker](dimension),
            meaning,
            required=required,
            dimensions=(dimension,),
            form=form,
        ):
            known = merged.get(column.name)
            merged[column.name] = replace(known, dimensions=BOTH) if known else column
    return tuple(merged.values())
