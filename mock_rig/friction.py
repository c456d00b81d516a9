"""LuGre friction (Canudas de Wit, Olsson, Astrom, Lischinsky 1995); pure.

dz/dt = v - s0 |v| z / g(v), g(v) = Fc + (Fs - Fc) exp(-(v/vs)^2), F = s0 z + s1 dz/dt + s2 v.
"""

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class LuGre:
    """Parameters; see the module for the equations."""

    s0: float
    """Stiffness of the bristles, N/m."""
    s1: float
    """Damping of the bristles, N s/m."""
    s2: float
    """Viscous friction, N s/m."""
    coulomb: float
    """Fc, N."""
    stiction: float
    """Fs, N."""
    stribeck: float
    """vs, m/s."""

    def scaled(self, factor: float) -> "LuGre":
        """With `factor` times the Coulomb and static friction."""
        return LuGre(
            self.s0, self.s1, self.s2, self.coulomb * factor, self.stiction * factor, self.stribeck
        )

    def level(self, velocity: float) -> float:
        """g(v): what the bristles carry in steady sliding, N."""
        excess = self.stiction - self.coulomb
        return self.coulomb + excess * math.exp(-((velocity / self.stribeck) ** 2))

    def steady(self, velocity: float) -> float:
        """Friction force at a constant velocity, N."""
        return math.copysign(self.level(velocity), velocity) + self.s2 * velocity

    def step(self, z: float, velocity: float, step_s: float) -> tuple[float, float]:
        """Bristle deflection after a step at held velocity, and the mean force over it.

        For a held velocity the bristles follow a linear equation, solved exactly: no step is too
        long for stability, where explicit integration needs a microsecond.
        """
        speed = abs(velocity)
        if speed < 1e-12:
            return z, self.s0 * z
        length = self.level(velocity) / self.s0
        if length == 0.0:  # no dry friction
            return 0.0, self.s2 * velocity
        settled = math.copysign(length, velocity)
        after = settled + (z - settled) * math.exp(-speed * step_s / length)
        rate = (after - z) / step_s
        return after, self.s0 * 0.5 * (z + after) + self.s1 * rate + self.s2 * velocity
