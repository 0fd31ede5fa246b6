"""The repository as a project: what lies at its top, what it depends on, what it never says."""

from __future__ import annotations

import re
import subprocess
import tomllib
from importlib.metadata import PackageNotFoundError, distribution, metadata, requires
from pathlib import Path

import pytest
from packaging.requirements import Requirement

import jointmap

ROOT = Path(__file__).parents[2]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
TOP = {
    ".ci",
    "CHANGELOG.md",
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "demo_logs",
    "jointmap",
    "notebooks",
    "pyproject.toml",
    "tests",
}
#: Licences that let the package keep its own: permissive ones, and weak copyleft in a library of
#: its own that is used and not changed.
FREE = re.compile(
    r"BSD|MIT\b|Apache|PSF|Python Software Foundation|ISC|Unlicense|Matplotlib|MPL|"
    r"Mozilla Public|Zlib|HPND|CNRI|LGPL",
    re.IGNORECASE,
)


def tracked() -> list[Path]:
    """Files under version control."""
    if not (ROOT / ".git").exists():
        pytest.skip("this is no checkout: there is no .git")
    done = subprocess.run(
        ["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    if done.returncode:
        pytest.skip(f"git cannot list the files: {done.stderr.strip()}")
    return [Path(name) for name in done.stdout.split("\0") if name]


def test_the_top_level_holds_nothing_else() -> None:
    top = {path.parts[0] for path in tracked()}
    assert {name for name in top if not name.startswith(".")} <= TOP
    assert {"README.md", "DEVELOPERS.md", "LICENSE", "CHANGELOG.md", "pyproject.toml"} <= top


def test_nothing_large_is_shipped() -> None:
    sizes = {path: (ROOT / path).stat().st_size for path in tracked() if (ROOT / path).is_file()}
    assert max(sizes.values()) < 1_000_000
    demo = sum(size for path, size in sizes.items() if path.parts[0] == "demo_logs")
    assert demo < 6_000_000


# The words are put together here so that this file does not hold them itself.
@pytest.mark.parametrize(
    "words",
    [
        r"(?<![\w.])/(?:wo" + r"rk|ho" + r"me|ro" + r"ot|Us" + r"ers)/\w",
        r"\b(?:DES" + r"IGN|TAB" + r"LES|CHE" + r"CKS|STY" + r"LE|CONTR" + r"ACT)\.md\b",
        r"\bCHE" + r"CKS [0-9A-Z]\w*\b",
        r"\b(?:is" + r"sue|tic" + r"ket) ?#?\d",
    ],
)
def test_the_repository_speaks_of_the_project_alone(words: str) -> None:
    pattern, found = re.compile(words), []
    for path in tracked():
        if path.suffix in {".gz", ".png", ".parquet"} or not (ROOT / path).is_file():
            continue
        text = (ROOT / path).read_text(encoding="utf-8")
        found += [f"{path}: {match.group(0)}" for match in pattern.finditer(text)]
    assert not found


def test_python_versions_are_stated_alike() -> None:
    assert PROJECT["requires-python"] == ">=3.11,<3.14"
    stated = [c.rsplit(" ", 1)[1] for c in PROJECT["classifiers"] if re.search(r":: 3\.\d+$", c)]
    assert stated == ["3.11", "3.12", "3.13"]
    assert "Python 3.11, 3.12 or 3.13" in (ROOT / "README.md").read_text(encoding="utf-8")


def test_gtsam_is_pinned_to_one_minor_version() -> None:
    # The tangent of Pose2.retract differs between minor versions; covariances would follow it.
    pins = [Requirement(text) for text in PROJECT["dependencies"] if text.startswith("gtsam")]
    assert len(pins) == 1
    allowed = pins[0].specifier
    assert allowed.contains("4.3.0")
    assert allowed.contains("4.3.9")
    assert not allowed.contains("4.2.1")
    assert not allowed.contains("4.4.0")
    assert allowed.contains(distribution("gtsam").version)


def test_the_licence_is_the_one_that_is_named() -> None:
    assert PROJECT["license"] == "BSD-3-Clause"
    text = (ROOT / "LICENSE").read_text(encoding="utf-8")
    assert "Redistributions in binary form" in text
    assert "Neither the name" in text


def _needed(names: list[str]) -> set[str]:
    """Distributions that are needed to run, directly or through others."""
    found: set[str] = set()
    waiting = list(names)
    while waiting:
        requirement = Requirement(waiting.pop())
        if requirement.name in found:
            continue
        if requirement.marker is not None and not requirement.marker.evaluate({"extra": ""}):
            continue
        found.add(requirement.name)
        try:
            waiting += requires(requirement.name) or []
        except PackageNotFoundError:
            pytest.skip(f"{requirement.name} is not installed")
    return found


def _licence(name: str) -> str:
    """What a distribution says of its licence: expression, field, classifiers, or the file."""
    told = metadata(name)
    words = [told.get("License-Expression") or "", *(told.get_all("Classifier") or [])]
    short = [w for w in words if w and ("License" in w or "::" not in w)]
    field = (told.get("License") or "").strip()
    if short or field:
        return " | ".join([*short, field[:200]])
    for file in distribution(name).files or []:
        if re.search(r"licen[cs]e|copying", file.name, re.IGNORECASE):
            return str(file.locate().read_text(encoding="utf-8", errors="replace")[:400])  # type: ignore[union-attr]
    return ""


def test_no_dependency_has_a_licence_that_binds_ours() -> None:
    names = [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["plot"]]
    licences = {name: _licence(name) for name in sorted(_needed(names))}
    strict = {
        name: text
        for name, text in licences.items()
        if not FREE.search(text) or re.search(r"(?<!L)GPL|Affero", text)
    }
    assert not strict, "look at these licences by hand"


def test_versions_agree() -> None:
    assert re.fullmatch(r"\d+\.\d+\.\d+", jointmap.__version__)
    changes = (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")
    assert f"## {jointmap.__version__}" in changes
