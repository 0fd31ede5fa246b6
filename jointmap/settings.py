"""Settings of a fusion: one frozen object, checked when it is made."""

from __future__ import annotations

import math
import os
import platform
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from importlib.metadata import PackageNotFoundError, version
from typing import Any, Literal

from jointmap.errors import SettingsError

Kernel = Literal[
    "none", "huber", "cauchy", "welsch", "tukey", "dcs", "geman-mcclure", "truncated", "gnc"
]
DatumKind = Literal["landmarks", "robot", "control"]
NoiseMode = Literal["given", "estimated"]

#: Robust kernels that the solver knows.
KERNELS: tuple[str, ...] = (
    "none",
    "huber",
    "cauchy",
    "welsch",
    "tukey",
    "dcs",
    "geman-mcclure",
    "truncated",
    "gnc",
)
DATUMS: tuple[str, ...] = ("landmarks", "robot", "control")
NOISE_MODES: tuple[str, ...] = ("given", "estimated")

#: Packages whose versions can change a result.
_LIBRARIES = ("jointmap", "gtsam", "numpy", "scipy", "pandas", "pyarrow", "numba", "pyproj")


@dataclass(frozen=True)
class Settings:
    """How a survey is fused. Every default is what an untuned log wants.

    Parameters
    ----------
    kernel : str
        Robust kernel of the measurements, one of ``KERNELS``; ``gnc``: graduated non-convexity
        with truncated least squares, which needs no good start but many more solves.
    kernel_constant : float or None
        Tuning constant of a scalar residual in whitened units (rows of more components take a
        larger one, see :mod:`jointmap.solve.kernels`); None: the kernel's own default.
    datum : str or None
        ``landmarks``, ``robot`` or ``control``; None: what the survey says.
    datum_robot : str or None
        Robot that the datum starts at; None: what the survey says.
    keyframe_spacing_s, keyframe_spacing_m, keyframe_spacing_rad : float
        Neighbouring keyframes of a robot are never further apart in time, path or turn.
    keyframe_merge_s : float
        Instants this close share one keyframe (their rows are moved to it by odometry).
    gap_s : float or None
        Stretches without odometry rows longer than this become weak motion; None: from the log's
        own rate.
    burst_gap_s : float
        Sightings of one target by one sensor that follow each other within this are one burst.
    burst_window_s : float
        A burst ends after this time; rows of one burst share a part of their error.
    gate_measurement : float
        Probability that a correct measurement passes the test that rejects measurements.
    gate_association : float
        Probability that a correct association passes the test that rejects associations.
    noise : str
        ``estimated``: sigmas come from the data where the data can tell; ``given``: as stated in
        survey.toml, defaults elsewhere.
    calibrate : bool
        Estimate odometry scale and lag, range bias and sensor lag where the data can tell.
    holdout_folds : int
        Folds of the hold-out test over landmarks; 0: no hold-out.
    max_rounds : int
        Rounds of noise -> solve -> vet at most.
    max_iterations : int
        Iterations of one nonlinear solve at most.
    seed : int
        Seed of everything random.
    workers : int
        Processes that may be used; 0: as many as there are processors.

    Raises
    ------
    SettingsError
        A value lies outside its domain; the message says which and what is allowed.
    """

    kernel: Kernel = "cauchy"
    kernel_constant: float | None = None
    datum: DatumKind | None = None
    datum_robot: str | None = None
    keyframe_spacing_s: float = 5.0
    keyframe_spacing_m: float = 2.0
    keyframe_spacing_rad: float = 1.0
    keyframe_merge_s: float = 1e-3
    gap_s: float | None = None
    burst_gap_s: float = 3.0
    burst_window_s: float = 2.0
    gate_measurement: float = 0.99
    gate_association: float = 0.999
    noise: NoiseMode = "estimated"
    calibrate: bool = True
    holdout_folds: int = 5
    max_rounds: int = 12
    max_iterations: int = 100
    seed: int = 0
    workers: int = 0

    def __post_init__(self) -> None:
        _one_of("kernel", self.kernel, KERNELS)
        _one_of("noise", self.noise, NOISE_MODES)
        if self.datum is not None:
            _one_of("datum", self.datum, DATUMS)
        if self.datum_robot is not None and not self.datum_robot:
            raise SettingsError("datum_robot is empty; name a robot of the survey")
        for name in ("keyframe_spacing_s", "keyframe_spacing_m", "keyframe_spacing_rad"):
            _number(name, getattr(self, name), above=0.0)
        _number("keyframe_merge_s", self.keyframe_merge_s, least=0.0)
        _number("burst_gap_s", self.burst_gap_s, above=0.0)
        _number("burst_window_s", self.burst_window_s, above=0.0)
        for name in ("kernel_constant", "gap_s"):
            if getattr(self, name) is not None:
                _number(name, getattr(self, name), above=0.0)
        for name in ("gate_measurement", "gate_association"):
            _number(name, getattr(self, name), above=0.5, below=1.0)
        _whole("holdout_folds", self.holdout_folds, 0)
        if self.holdout_folds == 1:
            raise SettingsError("holdout_folds is 1; use 0 (no hold-out) or at least 2")
        _whole("max_rounds", self.max_rounds, 1)
        _whole("max_iterations", self.max_iterations, 1)
        _whole("seed", self.seed, 0)
        _whole("workers", self.workers, 0)

    @property
    def worker_count(self) -> int:
        """Processes to use, at least one."""
        if self.workers:
            return self.workers
        # A container or `taskset` may grant fewer processors than the machine has.
        affinity = getattr(os, "sched_getaffinity", None)
        if affinity is not None:
            return len(affinity(0))
        return os.cpu_count() or 1

    def to_dict(self) -> dict[str, Any]:
        """Plain values by name, for JSON."""
        return asdict(self)

    @classmethod
    def from_dict(cls, values: Mapping[str, Any]) -> Settings:
        """Settings from plain values; unknown names are refused."""
        known = [f.name for f in fields(cls)]
        unknown = sorted(set(values) - set(known))
        if unknown:
            raise SettingsError(f"unknown settings {', '.join(unknown)}; known: {', '.join(known)}")
        return cls(**values)


def _one_of(name: str, value: object, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        raise SettingsError(f"{name} is {value!r}; allowed: {', '.join(allowed)}")


def _number(
    name: str,
    value: object,
    *,
    above: float = -math.inf,
    least: float = -math.inf,
    below: float = math.inf,
) -> None:
    """Refuse what is not a finite number with ``above < value``, ``least <= value < below``."""
    domain = [
        text
        for limit, text in (
            (above, f"above {above:g}"),
            (least, f"at least {least:g}"),
            (below, f"below {below:g}"),
        )
        if math.isfinite(limit)
    ]
    good = (
        isinstance(value, int | float)
        and not isinstance(value, bool)
        and math.isfinite(value)
        and value > above
        and least <= value < below
    )
    if not good:
        raise SettingsError(f"{name} is {value!r}; it must be a number {' and '.join(domain)}")


def _whole(name: str, value: object, least: int) -> None:
    if not isinstance(value, int) or isinstance(value, bool) or value < least:
        raise SettingsError(f"{name} is {value!r}; it must be a whole number, at least {least}")


def environment_versions() -> dict[str, str]:
    """Versions of Python and of the libraries that can change a result, and the platform."""
    found = {"python": platform.python_version(), "platform": platform.platform()}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    # A source tree that nobody installed has no metadata but still knows its version.
    if "jointmap" not in found:
        from jointmap import __version__

        found["jointmap"] = __version__
    return found
