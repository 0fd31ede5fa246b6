"""Settings of a grading: one frozen object, checked when it is made."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any, Literal

from jointmap.errors import SettingsError

Alignment = Literal["auto", "none", "team", "robot"]
Case = Literal["declared", "same", "independent", "unknown"]

ALIGNMENTS: tuple[str, ...] = ("auto", "none", "team", "robot")
CASES: tuple[str, ...] = ("declared", "same", "independent", "unknown")


@dataclass(frozen=True)
class GradeSettings:
    """How estimates are graded.

    Parameters
    ----------
    alignment : str
        ``auto``: one transform for the team where the estimator has one frame, one per robot where
        every robot has its own, none in the site frame. ``robot`` leaves no inter-robot score.
    scale : bool
        Estimate a scale with the alignment (one more degree of freedom).
    data : str
        Dependence between estimator and reference; ``declared``: what estimator.toml says.
    instants : int
        Instants, evenly spread over the run, at which errors are taken (at most).
    draws : int
        Draws of the reference's error.
    bootstrap : int
        Samples of the block bootstrap.
    tolerance_s : float or None
        An estimate stands for an instant this close at most; None: half the spacing of the
        instants, or half the estimator's own interval where that is longer. The reference is
        interpolated to the estimate's own stamp in any case.
    scale_sigma : float
        Standard deviation of the logarithm of the reference's own variances: how far its scale may
        be off (0: not at all).
    share_window_s : float
        Two robots see a landmark now when both saw it within this time.
    level : float
        Probability of intervals.
    seed : int

    Raises
    ------
    SettingsError
        A value lies outside its domain.
    """

    alignment: Alignment = "auto"
    scale: bool = False
    data: Case = "declared"
    instants: int = 1000
    draws: int = 400
    bootstrap: int = 1000
    tolerance_s: float | None = None
    scale_sigma: float = 0.15
    share_window_s: float = 5.0
    level: float = 0.95
    seed: int = 0

    def __post_init__(self) -> None:
        _choice("alignment", self.alignment, ALIGNMENTS)
        _choice("data", self.data, CASES)
        for name, least in (("instants", 50), ("draws", 50), ("bootstrap", 100), ("seed", 0)):
            value = getattr(self, name)
            if not isinstance(value, int) or isinstance(value, bool) or value < least:
                raise SettingsError(f"{name} is {value!r}; it must be a whole number >= {least}")
        for name, low, high in (
            ("tolerance_s", 0.0, math.inf),
            ("scale_sigma", -1e-300, 3.0),
            ("share_window_s", 0.0, math.inf),
            ("level", 0.5, 1.0),
        ):
            value = getattr(self, name)
            if value is not None and not low < value < high:
                raise SettingsError(
                    f"{name} is {value!r}; it must lie between {low:g} and {high:g}"
                )

    def to_dict(self) -> dict[str, Any]:
        """Plain values by name, for JSON."""
        return asdict(self)


def _choice(name: str, value: object, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        raise SettingsError(f"{name} is {value!r}; allowed: {', '.join(allowed)}")
