"""Position fixes, local or geographic, in one site frame."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from jointmap import schema
from jointmap.ingest.config import FILE, Config
from jointmap.ingest.geodesy import WGS84, Ellipsoid, ellipsoid_of, to_site
from jointmap.ingest.problems import Problems
from jointmap.ingest.stamps import drop_copies, sort_by_time
from jointmap.ingest.survey import Fixes, Floats
from jointmap.ingest.table import Table
from jointmap.ingest.values import check_sigmas, refuse_dimension, require, require_numbers

SPEC = schema.input_table("fixes")
_HARMLESS_2D = ("z_m", "sigma_z_m")

Origin = tuple[float, float, float]


@dataclass(frozen=True)
class RawFixes:
    """Fixes of one robot as logged: ``position`` (n, 2 or 3) local, or (n, 3) lat, lon, height."""

    form: Literal["local", "geographic"]
    t_s: Floats
    position: Floats
    sigma: Floats
    table: Table


def read_fixes(table: Table, dimension: int, problems: Problems) -> RawFixes | None:
    """Fixes of one robot from its concatenated files, checked; ``None`` when unusable."""
    harmless = _HARMLESS_2D if dimension == 2 else ()
    refuse_dimension(table, SPEC, dimension, problems, harmless)
    local = ["x_m", "y_m", "z_m"][:dimension]
    geographic = ["lat_deg", "lon_deg", "height_m"]
    form = _form(table, local, geographic, problems)
    if form is None:
        return None
    needed = local if form == "local" else geographic[: 2 if dimension == 2 else 3]
    if not require(table, ["t_s", *needed], (), problems):
        return None
    table = sort_by_time(table, problems)
    require_numbers(table, needed, problems)
    if form == "geographic":
        _check_geographic(table, dimension, problems)
    sigmas = ["sigma_x_m", "sigma_y_m", "sigma_z_m"][:dimension]
    check_sigmas(table, sigmas, problems)
    columns = local if form == "local" else geographic
    contents = [table.number(c) for c in (*columns, *sigmas)]
    table = table.take(drop_copies(table, contents, table.number("t_s"), problems))
    position = table.matrix(columns)
    if form == "geographic" and dimension == 2:
        np.nan_to_num(position[:, 2], copy=False, nan=0.0)
    return RawFixes(form, table.number("t_s"), position, table.matrix(sigmas), table)


def _form(
    table: Table, local: list[str], geographic: list[str], problems: Problems
) -> Literal["local", "geographic"] | None:
    has_local = any(table.given(c) for c in local[:2])
    has_geographic = any(table.given(c) for c in geographic[:2])
    if has_local and has_geographic:
        for name in table.files:
            message = "has local and geographic positions"
            problems.add(name, message, "keep one kind for a robot")
        return None
    if has_local or has_geographic:
        return "local" if has_local else "geographic"
    if any(table.has(c) for c in geographic[:2]):
        return "geographic"
    if not any(table.has(c) for c in local[:2]):
        mend = f"add {' '.join(local)} or {' '.join(geographic)}"
        for name in table.files:
            problems.add(name, "has no positions", mend)
        return None
    return "local"


def _check_geographic(table: Table, dimension: int, problems: Problems) -> None:
    for column, limit in (("lat_deg", 90.0), ("lon_deg", 360.0)):
        with np.errstate(invalid="ignore"):
            beyond = np.abs(table.number(column)) > limit
        message = f"beyond {limit:g} degrees"
        table.complain(problems, beyond, column, message, "write degrees; is lat or lon swapped?")
    if dimension == 2 and np.isnan(table.number("height_m")).any():
        message = "no ellipsoidal height"
        mend = "zero is taken (it scales the plan by 0.16 parts in a million per metre)"
        problems.add(table.files[0], message, mend, column="height_m", mended=True)


def place_fixes(
    raw: Mapping[str, RawFixes], config: Config, has_control: bool, problems: Problems
) -> tuple[dict[str, Fixes], Origin | None]:
    """All fixes in the site frame, and the origin when any are geographic.

    The origin is ``site_origin`` of survey.toml; without it the earliest geographic fix of the
    first robot that has any. Local fixes and control points already refer to a site frame, so
    beside those the origin must be stated.
    """
    geographic = [f for f in raw.values() if f.form == "geographic" and len(f.t_s)]
    if not geographic:
        if config.crs is not None:
            mend = "it is ignored"
            message = "there are no geographic fixes"
            problems.add(FILE, message, mend, column="survey.crs", mended=True)
        return {name: _fixes(f, f.position, config.dimension) for name, f in raw.items()}, None
    ellipsoid = _ellipsoid(config, problems)
    beside = has_control or any(f.form == "local" and len(f.t_s) for f in raw.values())
    origin = _origin(geographic, config, beside, problems)
    if ellipsoid is None or origin is None or problems.refused:
        return {}, None
    placed = {}
    for name, fixes in raw.items():
        position = fixes.position
        if fixes.form == "geographic":
            position = to_site(position, origin, ellipsoid)
        placed[name] = _fixes(fixes, position, config.dimension)
    return placed, origin


def _fixes(raw: RawFixes, position: Floats, dimension: int) -> Fixes:
    plan = np.ascontiguousarray(position[:, :dimension])
    return Fixes(raw.t_s, plan, raw.sigma, raw.table.provenance)


def _ellipsoid(config: Config, problems: Problems) -> Ellipsoid | None:
    if config.crs is None:
        message = "is missing beside geographic fixes"
        problems.add(FILE, message, f"{WGS84} is taken", column="survey.crs", mended=True)
    try:
        return ellipsoid_of(config.crs or WGS84)
    except ValueError as error:
        mend = f'name a geographic 3-D system such as "{WGS84}", or give x_m y_m z_m'
        problems.add(FILE, str(error), mend, column="survey.crs")
        return None


def _origin(
    geographic: list[RawFixes], config: Config, beside: bool, problems: Problems
) -> Origin | None:
    if config.site_origin is not None:
        return config.site_origin
    if beside:
        message = "is missing: geographic fixes stand beside coordinates in a site frame"
        mend = "write site_origin = [lat_deg, lon_deg, height_m] of that frame under [survey]"
        problems.add(FILE, message, mend, column="survey.site_origin")
        return None
    lat, lon, height = geographic[0].position[0].tolist()
    return (lat, lon, height)
