"""Errors that sightings share: states of a Gauss-Markov chain per sensor and target.

What a sensor gets wrong about a target now it gets wrong in a second too. The error of a row is a
white part and a shared one, ``e``; the shared ones of one robot, sensor and target follow

    e_0 / A_0 ~ N(0, 1),   e_k / A_k = phi_k e_{k-1} / A_{k-1} + sqrt(1 - phi_k^2) w_k,
    phi_k = exp(-dt_k / tau),

a first-order Gauss-Markov process (Gelb 1974, section 3.8) with the standard deviation A, which may
grow with range, and the correlation time tau. On top of it every sensor has a constant error: range
bias, range scale and bearing offset, with priors, which are the mean of its chains. The states are
variables of the graph: rows keep what they say about each other, and thirty sightings of one spell
no longer pass for thirty independent ones.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Block
from jointmap.solve.linear import Rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: The constant errors of a sensor, in order, and the standard deviations of their priors (common
#: practice: cameras and lasers that nobody calibrated; no source).
SENSOR_PARAMETERS = ("range_bias_m", "range_scale", "bearing_offset_rad")
SENSOR_PRIOR = np.array([0.05, 0.02, 0.02])
#: Share of its prior to which a constant error is held that is not used.
UNUSED_SHARE = 1e-4
#: Rows of one target this close in time (s) share one state.
STEP_S = 1.0
#: A gap of this many correlation times ends a chain.
FORGOTTEN = 6.0
#: Smallest standard deviation of a shared error, as a share of the row's white one.
LEAST_SHARE = 0.03


@dataclass(frozen=True)
class SharedModel:
    """Shared error of a block's rows: ``sigma`` (n, m) of each row (None: nothing is shared),
    ``time`` (m,) in seconds, ``sensor`` the index of its constant error (-1: none).
    """

    sigma: Floats | None
    time: Floats
    sensor: int


@dataclass(frozen=True)
class Chain:
    """Shared-error states of one part.

    Parameters
    ----------
    state : (n,) state of each row
    key : (E,) variable of each state
    sigma : (E, m) stationary standard deviation A
    before : (E,) the state that it continues, -1 at a start
    phi : (E, m) what is left of the state before, 0 at a start
    dt_s : (E,) time since the state before
    sensor_key : variable of the sensor's constant errors, which are its mean; -1 for none
    size : (E,) rows of each state
    """

    state: Ints
    key: Ints
    sigma: Floats
    before: Ints
    phi: Floats
    dt_s: Floats
    sensor_key: int
    size: Ints


def group_rows(target: Ints, t_s: Floats) -> tuple[Ints, Ints, Floats]:
    """States of rows: (n,) state of each, (E,) target and (E,) mean stamp of each state.

    Rows are taken in time order by target; a state holds those within ``STEP_S`` of its first.
    """
    order = np.lexsort((t_s, target))
    when, what = t_s[order], target[order]
    new = np.ones(len(order), dtype=bool)
    if len(order):
        # Cells of a fixed grid from each target's first row: no row-by-row loop, and rows of one
        # instant always fall together.
        first = np.flatnonzero(np.r_[True, what[1:] != what[:-1]])
        start = np.repeat(when[first], np.diff(np.r_[first, len(order)]))
        cell = np.floor((when - start) / STEP_S + 1e-9).astype(np.int64)
        new[1:] = (what[1:] != what[:-1]) | (cell[1:] != cell[:-1])
    number = np.cumsum(new) - 1
    state = np.empty(len(order), dtype=np.int64)
    state[order] = number
    count = np.bincount(number) if len(order) else np.zeros(0, dtype=np.int64)
    mean = np.bincount(number, weights=when) / count if len(order) else np.zeros(0)
    return state, what[new], np.asarray(mean, dtype=np.float64)


def make_chain(
    block: Block, target: Ints, model: SharedModel, first_key: int, sensor_key: int
) -> Chain:
    """Chain of the rows of a (sub-)block; ``target`` (n,) tells what each row looked at."""
    assert model.sigma is not None
    state, what, t_s = group_rows(target, block.t_s)
    size = np.bincount(state, minlength=len(what))
    m = model.sigma.shape[1]
    sigma = np.stack(
        [np.sqrt(np.bincount(state, weights=model.sigma[:, i] ** 2) / size) for i in range(m)], 1
    )
    dt = np.diff(t_s, prepend=-np.inf)
    longest = FORGOTTEN * float(model.time.max())
    begins = np.r_[True, what[1:] != what[:-1]] | (dt > longest)
    before = np.where(begins, -1, np.arange(len(what)) - 1)
    dt = np.where(begins, np.inf, dt)
    phi = np.exp(-dt[:, None] / np.maximum(model.time, 1e-3))
    key = first_key + np.arange(len(what))
    return Chain(state, key, sigma, before, phi, dt, sensor_key, size)


def constant_columns(components: tuple[str, ...], predicted: Floats) -> Floats:
    """Derivative (n, m, 3) of a row's error by range bias, range scale and bearing offset.

    ``predicted`` (n, m): what the row would be without error. Not what was observed: an observed
    range carries its error, and a scale fitted to it would shrink the world to hide the noise.
    """
    n, m = predicted.shape
    out = np.zeros((n, m, len(SENSOR_PARAMETERS)))
    if components == ("pose",):
        return out
    if "range_m" in components:
        i = components.index("range_m")
        out[:, i, 0] = 1.0
        out[:, i, 1] = predicted[:, i]
    if "bearing_rad" in components:
        out[:, components.index("bearing_rad"), 2] = 1.0
    if "x_m" in components and "y_m" in components:
        axes = [components.index(a) for a in ("x_m", "y_m", "z_m") if a in components]
        place = predicted[:, axes]
        far = np.maximum(np.linalg.norm(place, axis=1), 1e-6)[:, None]
        out[:, axes, 0] = place / far
        out[:, axes, 1] = place
        out[:, axes[0], 2], out[:, axes[1], 2] = -place[:, 1], place[:, 0]
    return out


def only(columns: Floats, kept: list[int]) -> Floats:
    """Columns (..., 3) with all but some set to zero."""
    out = np.zeros_like(columns)
    out[..., kept] = columns[..., kept]
    return out


def scaled(components: tuple[str, ...]) -> Floats:
    """1 for the components (m,) that a range scale stretches, 0 for the others."""
    if components == ("pose",):
        return np.zeros(1)
    return np.array([1.0 if c in ("range_m", "x_m", "y_m", "z_m") else 0.0 for c in components])


def by_state(chain: Chain, per_row: Floats) -> Floats:
    """Mean (E, ...) over the rows of each state of values (n, ...)."""
    flat = per_row.reshape(len(per_row), -1)
    out = np.zeros((len(chain.key), flat.shape[1]))
    for i in range(flat.shape[1]):
        if flat[:, i].any():
            out[:, i] = np.bincount(chain.state, weights=flat[:, i]) / chain.size
    return out.reshape(-1, *per_row.shape[1:])


@dataclass(frozen=True)
class Extras:
    """Variables beyond poses and landmarks: constant errors of sensors, then shared errors.

    ``sensors`` (robot index, name) of each constant error; ``key0`` the first key, ``dims`` (X,) and
    ``offset`` (X + 1,) within the extra vector; ``prior`` (3,) sigmas of the constant errors.
    """

    sensors: tuple[tuple[int, str], ...]
    key0: int
    dims: Ints
    offset: Ints
    prior: Floats

    def values(self, extra: Floats | None, key: Ints | int, size: int) -> Floats:
        """Values (n, size) of extra variables by key; zero for a vector of another system."""
        at = self.offset[np.asarray(key) - self.key0]
        if extra is None or len(extra) != self.offset[-1]:
            return np.zeros((*np.shape(at), size))
        return np.asarray(extra[np.asarray(at)[..., None] + np.arange(size)])


def chain_rows(extras: Extras, chain: Chain, extra: Floats | None, columns: Floats) -> list[Rows]:
    """Whitened rows of a chain: its starts, then its transitions.

    ``columns`` (E, m, 3) derivative of each state's mean by the sensor's constant errors.
    """
    m = chain.sigma.shape[1]
    value = extras.values(extra, chain.key, m)
    mean = np.zeros_like(value)
    if chain.sensor_key >= 0:
        constant = extras.values(extra, chain.sensor_key, len(SENSOR_PARAMETERS))
        # The range scale stretches each row's own range and is no part of the mean.
        columns = only(columns, [0, 2])
        mean = columns @ constant
    unit = (value - mean) / chain.sigma
    rate = columns / chain.sigma[:, :, None]
    eye = np.eye(m)
    out = []
    starts = np.flatnonzero(chain.before < 0)
    if len(starts):
        keys, jacobians = [chain.key[starts]], [eye / chain.sigma[starts][:, :, None]]
        if chain.sensor_key >= 0:
            keys.append(np.full(len(starts), chain.sensor_key))
            jacobians.append(-rate[starts])
        out.append(Rows(keys, jacobians, -unit[starts]))
    goes_on = np.flatnonzero(chain.before >= 0)
    if len(goes_on):
        last, phi = chain.before[goes_on], chain.phi[goes_on]
        fresh = np.sqrt(1.0 - phi**2)
        keys = [chain.key[goes_on], chain.key[last]]
        jacobians = [
            eye / (chain.sigma[goes_on] * fresh)[:, :, None],
            -eye * (phi / (chain.sigma[last] * fresh))[:, :, None],
        ]
        if chain.sensor_key >= 0:
            keys.append(np.full(len(goes_on), chain.sensor_key))
            jacobians.append(-(rate[goes_on] - phi[:, :, None] * rate[last]) / fresh[:, :, None])
        out.append(Rows(keys, jacobians, -(unit[goes_on] - phi * unit[last]) / fresh))
    return out


def sensor_rows(extras: Extras, extra: Floats | None) -> list[Rows]:
    """Whitened prior rows of the constant errors."""
    n = len(extras.sensors)
    if not n:
        return []
    key = extras.key0 + np.arange(n)
    value = extras.values(extra, key, len(SENSOR_PARAMETERS))
    weight = np.broadcast_to(np.diag(1.0 / extras.prior), (n, 3, 3))
    return [Rows([key], [weight], -value / extras.prior)]


def sensor_index(models: Mapping[int, SharedModel]) -> int:
    """Number of constant errors that the models name."""
    return max((m.sensor for m in models.values()), default=-1) + 1
