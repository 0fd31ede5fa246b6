"""The package's public names: lazy, and functions are not displaced by rooms of the same name."""

from __future__ import annotations

import os
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest

import jointmap

ROOT = Path(jointmap.__file__).resolve().parent.parent


def run(code: str) -> str:
    """Output of a fresh interpreter."""
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(code)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_importing_the_package_loads_nothing_heavy() -> None:
    out = run(
        """
        import sys, jointmap
        print({"numpy", "pandas", "gtsam", "jointmap.fuse", "jointmap.simulate"} & set(sys.modules))
        """
    )
    assert out == "set()"


@pytest.mark.parametrize(
    "before",
    [
        "",
        "import jointmap.fuse",
        "import jointmap.simulate.settings",
        "from jointmap import simulate, fuse",
    ],
)
def test_the_functions_stay_functions_whatever_was_imported(before: str) -> None:
    out = run(
        f"""
        import jointmap
        {before}
        import types
        print(type(jointmap.fuse) is types.FunctionType, jointmap.fuse.__name__)
        print(type(jointmap.simulate) is types.FunctionType, jointmap.simulate.__name__)
        from jointmap.simulate.settings import SimulationSettings
        import sys
        print(sys.modules["jointmap.fuse"].fuse is jointmap.fuse)
        """
    )
    assert out.splitlines() == ["True fuse", "True simulate", "True"]


def test_the_functions_pickle() -> None:
    out = run(
        """
        import pickle, jointmap
        print(pickle.loads(pickle.dumps(jointmap.fuse)) is jointmap.fuse)
        print(pickle.loads(pickle.dumps(jointmap.simulate)) is jointmap.simulate)
        """
    )
    assert out.splitlines() == ["True", "True"]


def test_every_public_name_is_there_and_unknown_ones_are_not() -> None:
    for name in jointmap.__all__:
        assert getattr(jointmap, name) is not None
        assert name in dir(jointmap)
    with pytest.raises(AttributeError, match="has no attribute 'nothing'"):
        jointmap.nothing  # type: ignore[attr-defined]  # noqa: B018


def test_a_package_attribute_can_still_be_patched(monkeypatch: pytest.MonkeyPatch) -> None:
    original = jointmap.fuse
    monkeypatch.setattr(jointmap, "fuse", lambda survey: "patched")
    assert jointmap.fuse("logs") == "patched"  # type: ignore[arg-type, comparison-overlap]
    monkeypatch.undo()
    assert jointmap.fuse is original
