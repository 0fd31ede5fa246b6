"""The order of the rows in a log does not matter, nor does the format of the file."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from jointmap.ingest.read import read_survey
from jointmap.ingest.survey import Observations, Survey

TOML = """\
[survey]
format = 1
dimension = 2
[robots.heron]
odometry = "odometry.{ending}"
sightings = "sightings.{ending}"
[robots.heron.sensors.front]
body_T_sensor = [0.0, 0.0, 0.0]
[robots.heron.sensors.rear]
body_T_sensor = [0.0, 0.0, 3.0]
"""
finite = st.floats(-1e6, 1e6, allow_subnormal=False)
stamps = st.lists(st.integers(0, 10**6), min_size=2, max_size=12, unique=True)
sighting = st.tuples(
    st.integers(0, 5),
    st.sampled_from(["front", "rear"]),
    st.sampled_from(["plate-001", "plate-002", "plate-003"]),
    st.floats(0.01, 100.0) | st.just(float("nan")),
    st.floats(-3.0, 3.0) | st.just(float("nan")),
)


@st.composite
def logs(draw: st.DrawFn) -> tuple[pa.Table, pa.Table, list[int], list[int]]:
    """Odometry in order, sightings, and a shuffle of each."""
    t = sorted(draw(stamps))
    x = draw(st.lists(finite, min_size=len(t), max_size=len(t)))
    odometry = pa.table(
        {"t_s": [0.001 * v for v in t], "x_m": x, "y_m": [0.0] * len(t), "yaw_rad": [0.5] * len(t)}
    )
    rows = sorted(draw(st.lists(sighting, min_size=1, max_size=12)), key=lambda r: r[0])
    names = ["t_s", "sensor", "landmark", "range_m", "bearing_rad"]
    columns = dict(zip(names, map(list, zip(*rows, strict=True)), strict=True))
    columns["t_s"] = [float(v) for v in columns["t_s"]]
    orders = [draw(st.permutations(range(n))) for n in (len(t), len(rows))]
    return odometry, pa.table(columns), orders[0], orders[1]


def _read(odometry: pa.Table, sightings: pa.Table, ending: str) -> Survey:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "survey.toml").write_text(TOML.format(ending=ending))
        for stem, table in (("odometry", odometry), ("sightings", sightings)):
            if ending == "parquet":
                pq.write_table(table, folder / f"{stem}.parquet")
            else:
                table.to_pandas().to_csv(folder / f"{stem}.csv", index=False)
        return read_survey(folder)


def _canonical(table: Observations) -> NDArray[np.float64]:
    """Rows in an order that does not depend on that of the file, provenance left out."""
    values = np.nan_to_num(table.value, nan=1e9)
    rows = np.column_stack([table.t_s, table.sensor, table.target, values])
    return rows[np.lexsort(rows.T[::-1])]


def _other_than_order(survey: Survey) -> set[tuple[str, str]]:
    return {(p.path, p.message) for p in survey.problems if "stamps go back" not in p.message}


def _assert_same(a: Survey, b: Survey) -> None:
    one, two = a.robots["heron"], b.robots["heron"]
    np.testing.assert_array_equal(one.odometry.t_s, two.odometry.t_s)
    assert one.odometry.pose is not None
    assert two.odometry.pose is not None
    np.testing.assert_array_equal(one.odometry.pose, two.odometry.pose)
    assert one.sightings is not None
    assert two.sightings is not None
    assert one.sightings.targets == two.sightings.targets
    np.testing.assert_array_equal(_canonical(one.sightings), _canonical(two.sightings))


@settings(max_examples=60, deadline=None)
@given(logs())
def test_shuffled_rows_change_nothing_but_the_notice(
    drawn: tuple[pa.Table, pa.Table, list[int], list[int]],
) -> None:
    odometry, sightings, first, second = drawn
    straight = _read(odometry, sightings, "csv")
    shuffled = _read(odometry.take(first), sightings.take(second), "csv")
    _assert_same(straight, shuffled)
    kept = {p for p in _other_than_order(straight) if "first here" not in p[1]}
    assert kept == {p for p in _other_than_order(shuffled) if "first here" not in p[1]}
    turned = bool((np.diff(np.array(odometry["t_s"])[first]) < 0).any())
    noticed = [p for p in shuffled.problems if "stamps go back" in p.message]
    assert any(p.path == "odometry.csv" for p in noticed) == turned


@settings(max_examples=30, deadline=None)
@given(logs())
def test_formats_agree(drawn: tuple[pa.Table, pa.Table, list[int], list[int]]) -> None:
    odometry, sightings, _, _ = drawn
    _assert_same(_read(odometry, sightings, "csv"), _read(odometry, sightings, "parquet"))
