"""Error processes: white, correlated in time, walking, drifting, with heavy tails.

References
----------
A. Gelb (ed.), Applied Optimal Estimation, MIT Press 1974, section 2.2: the first-order
Gauss-Markov process has autocorrelation ``sigma^2 exp(-|dt| / tau)``; sampled at irregular times
it is ``x_k = phi_k x_k-1 + sqrt(1 - phi_k^2) sigma w_k`` with ``phi_k = exp(-dt_k / tau)``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_banded

from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def gauss_markov(t_s: Floats, series: Ints, tau_s: float, white: Floats) -> Floats:
    """Stationary Gauss-Markov series of unit variance at irregular times.

    Parameters
    ----------
    t_s : (n,) float
        Instants, seconds; in any order between series.
    series : (n,) int
        Number of the series that each sample belongs to; series are independent.
    tau_s : float
        Correlation time.
    white : (n, c) float
        Independent standard normal draws, one column per component.

    Returns
    -------
    (n, c) float

    Notes
    -----
    All series together are one lower bidiagonal system ``x_k - phi_k x_k-1 = q_k w_k`` with
    ``phi = 0`` where a series begins.
    """
    if not len(t_s):
        return np.zeros_like(white)
    order = np.lexsort((t_s, series))
    phi = np.exp(-np.abs(np.diff(t_s[order])) / tau_s)
    phi = np.where(np.diff(series[order]) == 0, phi, 0.0)
    phi = np.concatenate([[0.0], phi])
    bands = np.ones((2, len(t_s)))
    bands[1, :-1] = -phi[1:]
    drive = np.sqrt(1 - phi**2)[:, None] * white[order]
    result = np.empty_like(white)
    result[order] = solve_banded((1, 0), bands, drive)
    return result


def white_noise(shape: tuple[int, ...], dof: float, rng: np.random.Generator) -> Floats:
    """Noise of unit variance: normal, or Student's t scaled by ``sqrt((dof - 2) / dof)``."""
    normal = rng.normal(size=shape)
    if dof <= 0:
        return normal
    heavy = rng.chisquare(dof, size=shape) / dof
    return np.asarray(normal / np.sqrt(heavy) * np.sqrt((dof - 2) / dof), dtype=np.float64)


def sensor_errors(
    t_s: Floats,
    target: Ints,
    incidence_rad: Floats,
    components: int,
    settings: SimulationSettings,
    streams: Streams,
    *name: object,
) -> Floats:
    """Sum of all error processes of one sensor in units of its sigmas, (n, components).

    Parameters
    ----------
    t_s : (n,) float
        Survey time of each observation, not decreasing.
    target : (n,) int
        Number of the target, which correlated errors belong to.
    incidence_rad : (n,) float
        Incidence angle on the plate; zero where it has no meaning.
    *name : object
        Name of the sensor's streams.
    """
    n = len(t_s)
    shape = (n, components)
    total = white_noise(shape, settings.student_dof, streams.get("white", *name))
    if settings.correlated > 0:
        draws = streams.get("correlated", *name).normal(size=shape)
        total += settings.correlated * gauss_markov(t_s, target, settings.correlation_time_s, draws)
    if settings.bias_walk > 0 and n:
        span = np.diff(t_s, prepend=t_s[0])
        draws = streams.get("walk", *name).normal(size=shape)
        total += settings.bias_walk * np.cumsum(np.sqrt(span / 100.0)[:, None] * draws, axis=0)
    if settings.slow_drift > 0:
        phase = streams.get("drift", *name).uniform(0, 2 * np.pi, components)
        turn = 2 * np.pi * (t_s - settings.start_s) / settings.slow_drift_period_s
        total += settings.slow_drift * np.sin(turn[:, None] + phase)
    if settings.angle_error > 0:
        # one constant per component: a slanted plate looks farther away, and off its middle
        sign = streams.get("angle", *name).uniform(0.5, 1.0, components)
        total += settings.angle_error * np.tan(incidence_rad)[:, None] * sign
    return total


def gross_errors(columns: tuple[str, ...], count: int, rng: np.random.Generator) -> Floats:
    """Gross errors (count, components): metres and radians far outside the noise."""
    sign = np.where(rng.random((count, len(columns))) < 0.5, -1.0, 1.0)
    size = rng.random((count, len(columns)))
    metres = np.array([c.endswith("_m") for c in columns])
    return np.where(metres, 0.6 + 2.4 * size, 0.2 + 0.6 * size) * sign
