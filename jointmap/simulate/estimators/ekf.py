"""Extended Kalman filter of one robot and the landmarks that it saw (Smith, Self & Cheeseman 1990).

State: x, y, yaw of the body and x, y of every landmark, in the filter's frame; errors are additive.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap._rotations import wrap

Floats = NDArray[np.float64]

#: Normalised squares of innovations above this are taken for gross errors (chi-square, 2 degrees
#: of freedom, 0.999).
GATE = 13.8155


class Filter:
    """State ``x`` (3 + 2 n,), covariance ``p``, names of landmarks in their order."""

    def __init__(self) -> None:
        self.x = np.zeros(3)
        self.p = np.zeros((3, 3))
        self.names: list[str] = []

    def at(self, name: str) -> int:
        """First scalar of a landmark, -1 when unknown."""
        return 3 + 2 * self.names.index(name) if name in self.names else -1

    def predict(self, motion: Floats, cov: Floats) -> None:
        """Move by an increment in the body frame."""
        c, s = np.cos(self.x[2]), np.sin(self.x[2])
        dx, dy = c * motion[0] - s * motion[1], s * motion[0] + c * motion[1]
        f = np.array([[1.0, 0.0, -dy], [0.0, 1.0, dx], [0.0, 0.0, 1.0]])
        g = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
        self.x[0] += dx
        self.x[1] += dy
        self.x[2] = wrap(self.x[2] + motion[2])
        self.p[:3] = f @ self.p[:3]
        self.p[:, :3] = self.p[:, :3] @ f.T
        self.p[:3, :3] += g @ cov @ g.T

    def see(self, name: str, observed: Floats, variance: Floats, mount: Floats) -> bool:
        """Range and bearing of a landmark from a sensor at ``mount``; False when gated out."""
        at = self.at(name)
        if at < 0:
            self._add(name, observed, variance, mount)
            return True
        c, s = np.cos(self.x[2]), np.sin(self.x[2])
        ox, oy = c * mount[0] - s * mount[1], s * mount[0] + c * mount[1]
        dx = self.x[at] - self.x[0] - ox
        dy = self.x[at + 1] - self.x[1] - oy
        square = dx * dx + dy * dy
        r = np.sqrt(square)
        if r < 1e-3:
            return False
        h = np.zeros((2, len(self.x)))
        h[0, at], h[0, at + 1] = dx / r, dy / r
        h[1, at], h[1, at + 1] = -dy / square, dx / square
        h[:, 0], h[:, 1] = -h[:, at], -h[:, at + 1]
        # The sensor's origin turns with the body.
        h[:, 2] = -h[:, at] * -oy - h[:, at + 1] * ox
        h[1, 2] -= 1.0
        expected = np.array([r, np.arctan2(dy, dx) - self.x[2] - mount[2]])
        residual = observed - expected
        residual[1] = wrap(residual[1])
        return self.update(h, residual, np.diag(variance), GATE)

    def update(self, h: Floats, residual: Floats, noise: Floats, gate: float = np.inf) -> bool:
        """Kalman update in Joseph's form; False when the normalised square passes the gate."""
        ph = self.p @ h.T
        s = h @ ph + noise
        inverse = np.linalg.inv(s)
        if residual @ inverse @ residual > gate:
            return False
        gain = ph @ inverse
        self.x = self.x + gain @ residual
        self.x[2] = wrap(self.x[2])
        keep = np.eye(len(self.x)) - gain @ h
        p = keep @ self.p @ keep.T + gain @ noise @ gain.T
        self.p = 0.5 * (p + p.T)
        return True

    def _add(self, name: str, observed: Floats, variance: Floats, mount: Floats) -> None:
        c, s = np.cos(self.x[2]), np.sin(self.x[2])
        ox, oy = c * mount[0] - s * mount[1], s * mount[0] + c * mount[1]
        direction = self.x[2] + mount[2] + observed[1]
        cd, sd = np.cos(direction), np.sin(direction)
        point = np.array([self.x[0] + ox + observed[0] * cd, self.x[1] + oy + observed[0] * sd])
        n = len(self.x)
        g = np.zeros((2, n))
        g[0, 0] = g[1, 1] = 1.0
        g[0, 2], g[1, 2] = -(point[1] - self.x[1]), point[0] - self.x[0]
        polar = np.array([[cd, -observed[0] * sd], [sd, observed[0] * cd]])
        side = g @ self.p
        own = side @ g.T + polar @ np.diag(variance) @ polar.T
        p = np.empty((n + 2, n + 2))
        p[:n, :n], p[n:, :n], p[:n, n:], p[n:, n:] = self.p, side, side.T, own
        self.x, self.p = np.concatenate([self.x, point]), p
        self.names.append(name)

    def snapshot(self) -> Snapshot:
        """What the robot tells others: its landmarks and their covariance."""
        return Snapshot(tuple(self.names), self.x[3:].copy(), self.p[3:, 3:].copy())


class Snapshot:
    """Landmarks ``position`` (2 n,) with covariance ``cov`` (2 n, 2 n), in the sender's frame."""

    def __init__(self, names: tuple[str, ...], position: Floats, cov: Floats) -> None:
        self.names, self.position, self.cov = names, position, cov

    def of(self, names: list[str]) -> tuple[Floats, Floats]:
        """Position and covariance of some landmarks, in this order."""
        index = np.array([self.names.index(n) for n in names], np.int64)
        rows = (2 * index[:, None] + np.arange(2)).ravel()
        return self.position[rows], self.cov[np.ix_(rows, rows)]
