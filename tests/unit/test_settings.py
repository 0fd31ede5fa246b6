"""Settings refuse what is outside their domain and survive JSON."""

from __future__ import annotations

import json
import math
import re
from importlib.metadata import version
from typing import Any, get_args

import pytest

from jointmap.errors import SettingsError
from jointmap.settings import KERNELS, Kernel, Settings, environment_versions
from jointmap.solve import gnc, kernels


def test_defaults_survive_json() -> None:
    told = json.loads(json.dumps(Settings().to_dict()))
    assert Settings.from_dict(told) == Settings()
    assert told["kernel"] == "cauchy"
    assert told["noise"] == "estimated"


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("kernel", "magic"),
        ("kernel", None),
        ("kernel_constant", 0.0),
        ("kernel_constant", math.nan),
        ("datum", "moon"),
        ("datum_robot", ""),
        ("keyframe_spacing_s", 0.0),
        ("keyframe_spacing_m", -1.0),
        ("keyframe_spacing_rad", math.inf),
        ("keyframe_merge_s", -1e-9),
        ("gap_s", 0.0),
        ("burst_gap_s", 0.0),
        ("gate_measurement", 1.0),
        ("gate_measurement", 0.5),
        ("gate_association", 95),
        ("gate_association", "0.99"),
        ("noise", "guessed"),
        ("holdout_folds", 1),
        ("holdout_folds", -2),
        ("max_rounds", 0),
        ("max_iterations", 2.5),
        ("seed", -1),
        ("seed", True),
        ("workers", -1),
    ],
)
def test_values_outside_their_domain_are_refused_by_name(name: str, value: Any) -> None:
    with pytest.raises(SettingsError, match=f"^{name} is "):
        Settings(**{name: value})


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("kernel_constant", 1),
        ("keyframe_merge_s", 0.0),
        ("gap_s", 2.0),
        ("gate_measurement", 0.95),
        ("holdout_folds", 0),
        ("holdout_folds", 2),
        ("datum", "control"),
    ],
)
def test_values_at_the_edge_are_taken(name: str, value: Any) -> None:
    assert getattr(Settings(**{name: value}), name) == value


def test_the_domain_is_said() -> None:
    with pytest.raises(SettingsError, match=re.escape("a number above 0.5 and below 1")):
        Settings(gate_measurement=2.0)
    with pytest.raises(SettingsError, match="none, huber, cauchy"):
        Settings(kernel="magic")  # type: ignore[arg-type]


def test_unknown_names_are_refused() -> None:
    with pytest.raises(SettingsError, match="unknown settings kernal; known: kernel, "):
        Settings.from_dict({"kernal": "huber"})


def test_kernels_are_those_of_the_solver() -> None:
    assert get_args(Kernel) == KERNELS
    assert sorted(KERNELS) == sorted((*kernels.NAMES, gnc.NAME))
    offered = {"huber", "cauchy", "geman-mcclure", "tukey", "welsch", "gnc"}
    assert offered <= set(KERNELS)


def test_workers_are_at_least_one() -> None:
    assert Settings().worker_count >= 1
    assert Settings(workers=7).worker_count == 7


def test_versions_name_what_changes_results() -> None:
    found = environment_versions()
    assert found["gtsam"] == version("gtsam")
    assert found["numpy"] == version("numpy")
    assert set(found) >= {"python", "platform", "jointmap", "scipy", "pandas", "pyarrow"}
