"""edits.toml: reading, writing, faults."""

from __future__ import annotations

import math
import tempfile
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from survey_folder import good, mended, one_refused, refused

from jointmap.ingest.config import ODOMETRY_NOISE, SENSOR_NOISE
from jointmap.ingest.edits import Edit, format_edit, read_edits
from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.problems import Problems
from jointmap.ingest.read import read_survey
from jointmap.ingest.survey import (
    AssociationEdit,
    Edits,
    FixedValueEdit,
    MaskEdit,
    SplitEdit,
)

ALL: tuple[Edit, ...] = (
    AssociationEdit("reject", "heron", "plate-017"),
    AssociationEdit("reject", "heron", "plate-018", "plate-017"),
    AssociationEdit("force", "otter", "plate-017", "plate-018"),
    MaskEdit("heron", "front", 1.0, 2.5),
    MaskEdit("otter", None, -math.inf, 3.0),
    SplitEdit("heron", 4.25),
    FixedValueEdit("sigma", "heron", "front", "range_m", 0.125),
    FixedValueEdit("sigma", "heron", None, "translation_per_sqrt_m", 0.02),
    FixedValueEdit("calibration", "otter", None, "odometry_scale", 0.95),
    FixedValueEdit("clock", "otter", None, "offset_s", -0.25),
)


def test_all_kinds(tmp_path: Path) -> None:
    text = "\n".join(format_edit(e) for e in ALL)
    edits = read_survey(good(tmp_path, edits_toml=text)).edits
    assert edits == Edits(ALL[:3], ALL[3:5], ALL[5:6], ALL[6:])  # type: ignore[arg-type]


def test_lines_to_paste() -> None:
    edit = AssociationEdit("force", "heron", "plate-017", "plate-071")
    assert format_edit(edit) == (
        '[[force_association]]\nrobot = "heron"\nlabel = "plate-017"\nlandmark = "plate-071"\n'
    )


names = st.text(min_size=1).map(str.strip).filter(bool)
numbers = st.floats(allow_nan=False, allow_infinity=False)
sensors = st.none() | names
edit_strategy = st.one_of(
    st.builds(AssociationEdit, st.just("reject"), names, names, sensors),
    st.builds(AssociationEdit, st.just("force"), names, names, names),
    st.tuples(names, sensors, numbers, numbers).map(
        lambda t: MaskEdit(t[0], t[1], min(t[2:]), max(t[2:]))
    ),
    st.builds(MaskEdit, names, sensors, st.just(-math.inf), st.just(math.inf)),
    st.builds(SplitEdit, names, numbers),
    st.builds(
        FixedValueEdit, st.just("calibration"), names, st.none(),
        st.sampled_from(["odometry_scale", "odometry_turn_scale", "odometry_lag_s"]), numbers,
    ),
    st.builds(FixedValueEdit, st.just("calibration"), names, names, st.just("lag_s"), numbers),
    st.builds(
        FixedValueEdit, st.just("sigma"), names, names, st.sampled_from(SENSOR_NOISE),
        st.floats(min_value=1e-300, allow_infinity=False),
    ),
    st.builds(
        FixedValueEdit, st.just("sigma"), names, st.none(), st.sampled_from(ODOMETRY_NOISE),
        st.floats(min_value=1e-300, allow_infinity=False),
    ),
    st.builds(
        FixedValueEdit, st.just("clock"), names, st.none(),
        st.sampled_from(["offset_s", "drift_ppm"]), numbers,
    ),
)  # fmt: skip


@given(st.lists(edit_strategy, max_size=3))
def test_what_is_written_reads_back(edits: list[Edit]) -> None:
    known = {
        e.robot: tuple(filter(None, (getattr(x, "sensor", None) for x in edits))) for e in edits
    }
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "edits.toml").write_text(
            "\n".join(map(format_edit, edits)), encoding="utf-8", newline=""
        )
        problems = Problems()
        found = read_edits(SurveyFiles(Path(folder), problems), known)
    for kind, table in (
        (AssociationEdit, found.associations),
        (MaskEdit, found.masks),
        (SplitEdit, found.splits),
        (FixedValueEdit, found.values),
    ):
        assert sorted(map(repr, table)) == sorted(repr(e) for e in edits if isinstance(e, kind))
    assert all("forced" in p.message for p in problems.all() if not p.mended)


@pytest.mark.parametrize(
    ("text", "column", "mend"),
    [
        ('[[mask]]\nrobot = "hero"\n', "mask[1].robot", "did you mean 'heron'?"),
        (
            '[[mask]]\nrobot = "heron"\nsensor = "fornt"\n',
            "mask[1].sensor",
            "did you mean 'front'?",
        ),
        (
            '[[mask]]\nrobot = "heron"\nt_form_s = 1\n',
            "mask[1].t_form_s",
            "did you mean 't_from_s'?",
        ),
        (
            '[[mask]]\nrobot = "heron"\nt_from_s = 2\nt_to_s = 1\n',
            "mask[1].t_to_s",
            "swap the times",
        ),
        ('[[splt_odometry]]\nrobot = "heron"\n', "splt_odometry", "did you mean 'split_odometry'?"),
        ('[[split_odometry]]\nrobot = "heron"\n', "split_odometry[1].t_s", "write it"),
        ('[mask]\nrobot = "heron"\n', "mask", "write each one under [[mask]]"),
        (
            '[[fix_sigma]]\nrobot = "heron"\nsensor = "front"\nname = "rnge_m"\nvalue = 1\n',
            "fix_sigma[1].name",
            "did you mean 'range_m'?",
        ),
        (
            '[[fix_sigma]]\nrobot = "heron"\nsensor = "front"\nname = "range_m"\nvalue = 0\n',
            "fix_sigma[1].value",
            "it must be larger than 0",
        ),
        (
            '[[fix_calibration]]\nrobot = "heron"\nname = "odometry_scal"\nvalue = 1\n',
            "fix_calibration[1].name",
            "did you mean 'odometry_scale'?",
        ),
        (
            '[[fix_calibration]]\nrobot = "heron"\nsensor = "front"\nname = "lag"\nvalue = 1\n',
            "fix_calibration[1].name",
            "did you mean 'lag_s'?",
        ),
        (
            '[[force_association]]\nrobot = "heron"\nlabel = "plate-017"\n',
            "force_association[1].landmark",
            "write it",
        ),
    ],
)
def test_faults(tmp_path: Path, text: str, column: str, mend: str) -> None:
    problem = one_refused(good(tmp_path, edits_toml=text))
    assert (problem.path, problem.column, problem.mend) == ("edits.toml", column, mend)


def test_contradicting_edits(tmp_path: Path) -> None:
    edits = [
        AssociationEdit("force", "heron", "plate-017", "A"),
        AssociationEdit("force", "heron", "plate-017", "B"),
        AssociationEdit("reject", "heron", "plate-017", "A"),
    ]
    problems = refused(good(tmp_path, edits_toml="\n".join(map(format_edit, edits))))
    assert [p.message for p in problems] == [
        "'plate-017' of heron is forced to two landmarks",
        "'plate-017' of heron is forced and rejected",
    ]


def test_edits_that_change_nothing(tmp_path: Path) -> None:
    edits = [AssociationEdit("reject", "heron", "plate-099"), SplitEdit("heron", 99.0)]
    good(tmp_path, edits_toml="\n".join(map(format_edit, edits)))
    assert mended(tmp_path, "edits.toml", "never sighted 'plate-099'").column == "label"
    assert mended(tmp_path, "edits.toml", "99.0 lies before or after").column == "t_s"
