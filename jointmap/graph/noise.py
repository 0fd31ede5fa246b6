"""Noise as a table of terms, and the whitening of a block by them.

The covariance of a residual row is a sum of known shapes scaled by squared terms,
``C = sum_k theta_k^2 V_k``: for a range ``V`` is 1 (``constant``) and the squared range
(``per_m``); for an odometry increment the five accumulated shapes of
:data:`jointmap.graph.problem.ODOMETRY_TERMS`. What the log states row by row replaces the sum.
Terms are data, never constants in the code: each says where its value came from.

Sightings come in bursts: rows of one robot, sensor and target within seconds share most of their
error, and n of them are worth far less than n. With a white variance ``s^2`` and a variance ``c^2``
that the rows of a burst have in common, the mean of n rows has the variance ``s^2 / n + c^2``. The
same weight is had with independent rows of variance ``s^2 + n c^2``: that is what a solve uses (an
effective sample size, n_eff = n / (1 + (n - 1) rho) with rho = c^2 / (s^2 + c^2); Kish 1965). A
single row by itself has ``s^2 + c^2``, and is gated by that (``single=True``).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import ODOMETRY_TERMS, Block, Problem
from jointmap.ingest.survey import Survey

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
TermKey = tuple[str, str, str, str]
Origin = Literal["given", "edited", "default", "estimated"]

#: Standard deviations assumed until the data say better (common practice, no source): metres and
#: radians for ``constant``, per metre for ``per_m``, per square root of the unit for odometry.
DEFAULT_SIGMA: Mapping[str, float] = {
    "bearing_rad": 0.02,
    "elevation_rad": 0.02,
    "range_m": 0.1,
    "x_m": 0.15,
    "y_m": 0.15,
    "z_m": 0.15,
    "rx_rad": 0.05,
    "ry_rad": 0.05,
    "rz_rad": 0.05,
    "translation_per_sqrt_m": 0.06,
    "rotation_per_sqrt_m": 0.03,
    "rotation_per_sqrt_rad": 0.06,
    "translation_per_sqrt_s": 0.005,
    "rotation_per_sqrt_s": 0.003,
    "tilt_rad": 0.01,
}
#: Kinds whose rows come in bursts with a common error.
BURSTY = ("sighting", "encounter")
#: Term that holds how long the shared error of one sensor and target lasts, and its first value.
CORRELATION_TIME = "correlation_time_s"
FIRST_CORRELATION_TIME_S = 5.0
#: Smallest value an estimate may shrink to, as a share of the default.
FLOOR_SHARE = 1e-3


@dataclass(frozen=True)
class NoiseTerm:
    """One standard deviation of the noise model.

    ``given`` is what the survey states (NaN when nothing), ``value`` what is in force, ``sigma``
    its own standard deviation and ``redundancy`` what it was estimated from (NaN when it was not).
    """

    robot: str
    sensor: str
    component: str
    term: str
    given: float
    value: float
    sigma: float
    redundancy: float
    origin: Origin

    @property
    def key(self) -> TermKey:
        """Robot, sensor, component, term."""
        return (self.robot, self.sensor, self.component, self.term)

    @property
    def free(self) -> bool:
        """Whether the data may change the value.

        Not the tilt: it comes from the same odometry as the increments, whose residuals against it
        vanish by construction and say nothing about either.
        """
        return self.origin in ("default", "estimated") and self.component != "tilt_rad"


@dataclass(frozen=True)
class Noise:
    """All terms of a problem, by key."""

    terms: Mapping[TermKey, NoiseTerm]

    def value(self, robot: str, sensor: str, component: str, term: str) -> float:
        """Value in force, zero where the model has no such term."""
        found = self.terms.get((robot, sensor, component, term))
        return 0.0 if found is None else found.value

    def updated(self, terms: Iterable[NoiseTerm]) -> Noise:
        """A copy with some terms replaced."""
        return Noise({**self.terms, **{t.key: t for t in terms}})


def residual_names(block: Block, dimension: int) -> tuple[str, ...]:
    """Sigma name of each residual row of a block, in tangent order for pose-valued rows."""
    if block.components == ("pose",):
        if dimension == 2:
            return ("x_m", "y_m", "rz_rad")
        return ("rx_rad", "ry_rad", "rz_rad", "x_m", "y_m", "z_m")
    if block.components == ("tilt",):
        return ("tilt_rad", "tilt_rad")
    return block.components


def _term(
    robot: str, sensor: str, component: str, term: str, given: float, edited: float, default: float
) -> NoiseTerm:
    origin: Origin = "default"
    value = default
    if np.isfinite(given):
        origin, value = "given", given
    if np.isfinite(edited):
        origin, value = "edited", edited
    return NoiseTerm(robot, sensor, component, term, given, value, np.nan, np.nan, origin)


def initial_noise(survey: Survey, problem: Problem) -> Noise:
    """Terms that the blocks of a problem need: given, edited, or documented defaults.

    A given ``sigma_range_per_m`` without ``sigma_range_m`` (or the reverse) states the whole range
    model; the other term is then zero and stays so.
    """
    edits = {
        (e.robot, e.sensor or "", e.name): e.value for e in survey.edits.values if e.what == "sigma"
    }
    nan = float("nan")
    terms: list[NoiseTerm] = []
    for block in problem.blocks:
        robot = problem.robots[block.robot] if block.robot >= 0 else ""
        if block.kind == "odometry":
            given_map = survey.robots[robot].odometry_noise
            stated = len(given_map) > 0
            for name in ODOMETRY_TERMS:
                given = given_map.get(name, 0.0 if stated else nan)
                edited = edits.get((robot, "", name), nan)
                terms.append(_term(robot, "", "odometry", name, given, edited, DEFAULT_SIGMA[name]))
            continue
        given_map = {}
        if block.kind in ("sighting", "encounter"):
            given_map = survey.robots[robot].sensors[block.sensor].sigma
        elif block.kind == "gravity":
            tilt = survey.robots[robot].gravity_sigma_rad
            given_map = {} if tilt is None else {"tilt_rad": tilt}
        sensor = block.sensor or block.kind
        for name in dict.fromkeys(residual_names(block, problem.dimension)):
            default = DEFAULT_SIGMA[name] if block.kind != "fix" else 1.0
            model = _stated(given_map, edits, robot, block.sensor, name)
            for term, share in _terms_of(block, name):
                given, edited = model.get(term, (nan, nan))
                terms.append(_term(robot, sensor, name, term, given, edited, share * default))
    return Noise({t.key: t for t in terms})


def _terms_of(block: Block, name: str) -> list[tuple[str, float]]:
    """Terms of a component, with their defaults as shares of the component's."""
    terms = [("constant", 1.0)]
    if name == "range_m":
        terms.append(("per_m", 0.1))
    if block.kind in BURSTY:
        terms.append(("correlated", 0.5))
        if name == "range_m":
            terms.append(("correlated_per_m", 0.1))
        terms.append((CORRELATION_TIME, FIRST_CORRELATION_TIME_S / DEFAULT_SIGMA[name]))
    return terms


def _stated(
    given_map: Mapping[str, float],
    edits: Mapping[tuple[str, str, str], float],
    robot: str,
    sensor: str,
    name: str,
) -> dict[str, tuple[float, float]]:
    """(given, edited) by term; stating one term of a component states its whole model."""
    nan = float("nan")
    names = {"constant": name, "per_m": name.replace("_m", "_per_m")}
    out = {
        term: (given_map.get(full, nan), edits.get((robot, sensor, full), nan))
        for term, full in names.items()
    }
    for side in (0, 1):
        if any(np.isfinite(pair[side]) for pair in out.values()):
            for term in ("constant", "per_m", "correlated", "correlated_per_m", CORRELATION_TIME):
                pair = list(out.get(term, (nan, nan)))
                pair[side] = pair[side] if np.isfinite(pair[side]) else 0.0
                out[term] = (pair[0], pair[1])
    return out


def burst_size(block: Block) -> Floats:
    """Number (n,) of rows in each row's burst."""
    return np.asarray(np.bincount(block.burst)[block.burst], dtype=np.float64)


def row_range(block: Block) -> Floats:
    """Range of each row (n,) for the terms that grow with it; 1 m where a row has none.

    The range that the solution says, as soon as there is one. A sigma taken from the observed range
    gives rows that read too short more weight than rows that read too long, and the whole map
    shrinks (measured: 1 to 2 per cent at a range noise of 5 per cent).
    """
    if "range_m" not in block.components:
        return np.ones(block.n)
    if block.distance is not None:
        return block.distance
    return np.asarray(block.obs[:, block.components.index("range_m")], dtype=np.float64)


def shared_model(
    block: Block, problem: Problem, noise: Noise
) -> tuple[Floats, Floats, Floats] | None:
    """What the rows of one target share: ``constant``, ``per_m`` (m,) sigmas and ``time`` (m,).

    None where the block's kind or the terms in force know no shared error.
    """
    if block.kind not in BURSTY:
        return None
    robot = problem.robots[block.robot]
    names = residual_names(block, problem.dimension)
    constant, growing, time = (
        np.array([noise.value(robot, block.sensor, name, term) for name in names])
        for term in ("correlated", "correlated_per_m", CORRELATION_TIME)
    )
    if not (constant.any() or growing.any()):
        return None
    return constant, growing, time


def stated_rows(block: Block) -> Bools:
    """Components (n, m) whose sigma the rows state themselves."""
    own: Bools = np.asarray(np.isfinite(block.sigma))
    if block.covariance is not None:
        full: Bools = np.asarray(np.isfinite(block.covariance).all(axis=(1, 2)))
        own = np.asarray(own | full[:, None])
    return own


def term_shapes(
    block: Block,
    problem: Problem,
    noise: Noise,
    *,
    single: bool = False,
    shared: bool = True,
) -> tuple[list[NoiseTerm], Floats, Floats]:
    """The terms of a block, their shapes, and what the rows state by themselves.

    Parameters
    ----------
    single : each row by itself, not weakened by the others of its burst
    shared : whether what the rows of a burst share counts at all

    Returns
    -------
    terms : list of k NoiseTerm
    shapes : (k, n, m, m)
        Covariance per squared unit of each term; rows that state their own covariance have zeros.
    stated : (n, m, m)
        Covariance the rows state, zero where the terms decide.
    """
    robot = problem.robots[block.robot] if block.robot >= 0 else ""
    m = residual_size(block, problem.dimension)
    stated = np.zeros((block.n, m, m))
    own: Bools = np.asarray(np.isfinite(block.sigma))
    index = np.arange(m)
    stated[:, index, index] = np.where(own, block.sigma, 0.0) ** 2
    if block.covariance is not None:
        full: Bools = np.asarray(np.isfinite(block.covariance).all(axis=(1, 2)))
        stated[full] = block.covariance[full]
        own = np.asarray(own | full[:, None])
    free: Bools = np.asarray(~own)
    if block.kind == "odometry":
        assert block.odometry_basis is not None
        terms = [noise.terms[(robot, "", "odometry", name)] for name in ODOMETRY_TERMS]
        whole: Bools = np.asarray(free.all(axis=1))
        shapes = np.moveaxis(block.odometry_basis, 1, 0) * whole[None, :, None, None]
        return terms, shapes, stated
    sensor = block.sensor or block.kind
    names = residual_names(block, problem.dimension)
    terms, layers = [], []
    for name in dict.fromkeys(names):
        rows = np.array([n == name for n in names])
        for term in ("constant", "per_m", "correlated", "correlated_per_m"):
            found = noise.terms.get((robot, sensor, name, term))
            if found is None or (term.startswith("correlated") and not shared):
                continue
            layer = np.zeros((block.n, m, m))
            size = row_range(block) ** 2 if term.endswith("per_m") else np.ones(block.n)
            if term.startswith("correlated") and not single:
                size = size * burst_size(block)
            layer[:, index[rows], index[rows]] = size[:, None] * free[:, rows]
            terms.append(found)
            layers.append(layer)
    return terms, np.array(layers), stated


def residual_size(block: Block, dimension: int) -> int:
    """Number of residual rows of each measurement of a block."""
    return len(residual_names(block, dimension))


def block_covariance(
    block: Block,
    problem: Problem,
    noise: Noise,
    *,
    single: bool = False,
    shared: bool = True,
) -> Floats:
    """Covariance (n, m, m) of a block's residuals under the noise in force."""
    terms, shapes, stated = term_shapes(block, problem, noise, single=single, shared=shared)
    theta2 = np.array([t.value for t in terms]) ** 2
    return stated + np.tensordot(theta2, shapes, axes=1)


def whitening(covariance: Floats) -> Floats:
    """Lower triangular W (n, m, m) with ``W^T W = C^-1``, so that ``W r`` has unit covariance.

    A covariance that is not positive definite is lifted by its smallest admissible ridge: an
    increment without motion has no noise shape at all, and is then as good as exact.
    """
    m = covariance.shape[-1]
    scale = np.maximum(np.einsum("nii->n", covariance) / m, 1e-12)
    ridge = (1e-9 * scale + 1e-12)[:, None, None] * np.eye(m)
    lower = np.linalg.cholesky(covariance + ridge)
    return np.asarray(np.linalg.inv(lower), dtype=np.float64)


def with_value(term: NoiseTerm, value: float, sigma: float, redundancy: float) -> NoiseTerm:
    """A term after estimation."""
    return replace(term, value=value, sigma=sigma, redundancy=redundancy, origin="estimated")
