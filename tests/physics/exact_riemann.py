"""Exact solution of the Riemann problem of ideal gases.

Written for the tests after Toro, Riemann Solvers and Numerical Methods for Fluid Dynamics, chapter 4; shares
nothing with the kernels. The two sides may have different gamma.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Side:
    """A constant state: density, velocity, pressure, ratio of specific heats."""

    rho: float
    u: float
    p: float
    gamma: float

    @property
    def sound(self) -> float:
        return float(np.sqrt(self.gamma * self.p / self.rho))

    def velocity_change(self, p: float) -> float:
        """Velocity lost by the gas as a wave brings it to pressure ``p`` (Toro, equations 4.6 and 4.7)."""
        g = self.gamma
        if p > self.p:
            return float((p - self.p) * np.sqrt(2.0 / self.rho / ((g + 1.0) * p + (g - 1.0) * self.p)))
        return float(2.0 * self.sound / (g - 1.0) * np.expm1((g - 1.0) / (2.0 * g) * np.log(p / self.p)))

    def density_behind(self, p: float) -> float:
        """Density between this side's wave and the contact."""
        g, ratio = self.gamma, p / self.p
        if ratio > 1.0:
            k = (g - 1.0) / (g + 1.0)
            return self.rho * (ratio + k) / (k * ratio + 1.0)
        return float(self.rho * ratio ** (1.0 / g))

    def wave(self, p: float, u: float, sign: float) -> tuple[float, float]:
        """Speeds of the wave's outer and inner edge (equal for a shock); ``sign`` is -1 left, +1 right."""
        g = self.gamma
        if p > self.p:
            shock = self.u + sign * self.sound * np.sqrt((g + 1) / (2 * g) * p / self.p + (g - 1) / (2 * g))
            return float(shock), float(shock)
        behind = np.sqrt(g * p / self.density_behind(p))
        return self.u + sign * self.sound, float(u + sign * behind)

    def fan(self, speed: Array, sign: float) -> tuple[Array, Array, Array]:
        """Density, velocity and pressure inside this side's rarefaction where x/t = ``speed``."""
        g = self.gamma
        sound = 2.0 / (g + 1.0) * self.sound - sign * (g - 1.0) / (g + 1.0) * (self.u - speed)
        u = speed - sign * sound
        rho = self.rho * (np.abs(sound) / self.sound) ** (2.0 / (g - 1.0))
        return rho, u, self.p * (rho / self.rho) ** g


@dataclass(frozen=True)
class Solution:
    """The Riemann problem's star state and edges of its waves."""

    left: Side
    right: Side
    p: float
    u: float

    @property
    def densities(self) -> tuple[float, float]:
        """Density on the left and on the right of the contact."""
        return self.left.density_behind(self.p), self.right.density_behind(self.p)

    @property
    def left_wave(self) -> tuple[float, float]:
        """Speeds of the left wave's head and tail."""
        return self.left.wave(self.p, self.u, -1.0)

    @property
    def right_wave(self) -> tuple[float, float]:
        """Speeds of the right wave's head and tail."""
        return self.right.wave(self.p, self.u, 1.0)

    def sample(self, speed: Array) -> Array:
        """Density, velocity and pressure, shape (3, n), where x/t = ``speed``."""
        result = np.empty((3, speed.size))
        rho_l, rho_r = self.densities
        for side, rho, sign in ((self.left, rho_l, -1.0), (self.right, rho_r, 1.0)):
            head, tail = side.wave(self.p, self.u, sign)
            mine = (speed - self.u) * sign >= 0.0
            outside = mine & ((speed - head) * sign >= 0.0)
            inside = mine & ((speed - tail) * sign < 0.0)
            between = mine & ~outside & ~inside
            result[:, inside] = np.array([rho, self.u, self.p])[:, None]
            result[:, outside] = np.array([side.rho, side.u, side.p])[:, None]
            result[:, between] = np.array(side.fan(speed[between], sign))
        return result


def solve(left: Side, right: Side) -> Solution:
    """Star pressure by bracketing, to the last bits; the states must not leave a vacuum."""

    def excess(log_p: float) -> float:
        p = float(np.exp(log_p))
        return left.velocity_change(p) + right.velocity_change(p) + right.u - left.u

    p = float(np.exp(brentq(excess, np.log(1e-12), np.log(1e12), xtol=1e-15, rtol=1e-15)))
    u = 0.5 * (left.u + right.u) + 0.5 * (right.velocity_change(p) - left.velocity_change(p))
    return Solution(left, right, p, u)
