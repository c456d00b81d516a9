"""What a feedforward goes through before it acts, and what a fault changes there; pure."""

import math
from collections import deque

from mock_rig.plant import Disturbance

DAMPING = 0.02
"""Of the resonance that a fault adds, as a share of critical."""


class FeedforwardPath:
    """Delay, gain and added resonance; without a fault the feedforward passes unchanged."""

    def __init__(self, disturbance: Disturbance, period_s: float, resonance_hz: float) -> None:
        self._gain = disturbance.gain
        self._waiting = deque([0.0] * disturbance.extra_delay)
        self._size = disturbance.resonance
        self._period_s = period_s
        self._omega = 2 * math.pi * resonance_hz
        self._ring = self._ring_v = 0.0

    def apply(self, feedforward: float) -> float:
        """Once a sample: what acts for the next period, in the feedforward's unit."""
        self._waiting.append(feedforward)
        effect = self._gain * self._waiting.popleft()
        return effect + self._size * self._ringing(effect) if self._size else effect

    def _ringing(self, effect: float) -> float:
        """An oscillator of gain 1 at rest, 1 / (2 DAMPING) at its resonance; semi-implicit."""
        omega = self._omega
        push = omega * omega * (effect - self._ring) - 2 * DAMPING * omega * self._ring_v
        self._ring_v += push * self._period_s
        self._ring += self._ring_v * self._period_s
        return self._ring
