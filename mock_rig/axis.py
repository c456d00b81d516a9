"""One belt-driven axis: motor, belt, load, friction, cogging, its own feedback loop; pure."""

import math
from dataclasses import dataclass
from random import Random

from mock_rig.feedforward_path import FeedforwardPath
from mock_rig.friction import LuGre
from mock_rig.plant import Disturbance


@dataclass(frozen=True)
class AxisParameters:
    motor_kg: float
    load_kg: float
    belt_n_per_m: float
    belt_ns_per_m: float
    friction: LuGre
    cogging_n: float
    cogging_pitch_m: float
    gain_n_per_m: float
    """Feedback from the motor's position."""
    damping_ns_per_m: float
    """Feedback from the filtered derivative of the tracking error."""
    derivative_s: float
    """Time constant of that filter."""
    force_limit_n: float
    encoder_m: float
    """Step of both encoders."""
    process_noise_n: float
    """Standard deviation of a force that differs from trial to trial, slowly varying."""
    start_spread_m: float

    def resonance_hz(self) -> float:
        """Of motor and load against each other: sqrt(k (m1 + m2) / (m1 m2)) / 2 pi."""
        total = self.motor_kg + self.load_kg
        squared = self.belt_n_per_m * total / (self.motor_kg * self.load_kg)
        return math.sqrt(squared) / (2 * math.pi)


NOISE_S = 0.05
"""Correlation time of the process noise."""

RESONANCE_HZ = 17.0
"""Of the resonance that a fault adds to the response to the feedforward."""


class Axis:
    """State of one axis; `period_s` is split into `substeps` of fixed length."""

    def __init__(self, parameters: AxisParameters, period_s: float, substeps: int) -> None:
        self.parameters = parameters
        self._period_s = period_s
        self._step_s = period_s / substeps
        self.substeps = substeps
        self.begin(0.0, 0.0, Disturbance(), Random(0))

    def begin(
        self, start: float, reference: float, disturbance: Disturbance, chance: Random
    ) -> None:
        """Stand at a start, up to its spread; the loop has been holding against `reference`."""
        p = self.parameters
        self._chance = chance
        spread = p.start_spread_m * disturbance.noise
        self.motor = self.load = start + chance.gauss(0.0, spread)
        self.motor_v = self.load_v = 0.0
        self._bristles = 0.0
        self._friction = p.friction.scaled(disturbance.friction)
        self._limit = p.force_limit_n * disturbance.load_limit
        self._noise_n = p.process_noise_n * disturbance.noise
        self._noise = chance.gauss(0.0, self._noise_n)
        self._path = FeedforwardPath(disturbance, self._period_s, RESONANCE_HZ)
        self._filtered = 0.0
        self._last_error = self._error(reference)
        self._force = 0.0
        self.limited = False

    def measured(self) -> float:
        """Position of the load as its encoder tells it."""
        return self._encoded(self.load)

    def _encoded(self, position: float) -> float:
        step = self.parameters.encoder_m
        return round(position / step) * step

    def _error(self, reference: float) -> float:
        """What the loop sees: it closes over the motor's encoder, not the load's."""
        return reference - self._encoded(self.motor)

    def command(self, feedforward: float, reference: float) -> None:
        """Once a sample: the controller's force for the next period (one sample of delay)."""
        p = self.parameters
        effect = self._path.apply(feedforward)
        error = self._error(reference)
        share = self._period_s / (p.derivative_s + self._period_s)
        rate = (error - self._last_error) / self._period_s
        self._filtered += share * (rate - self._filtered)
        self._last_error = error
        wanted = effect + p.gain_n_per_m * error + p.damping_ns_per_m * self._filtered
        self._force = min(max(wanted, -self._limit), self._limit)
        self.limited = self._force != wanted
        keep = math.exp(-self._period_s / NOISE_S)
        fresh = self._noise_n * math.sqrt(1 - keep * keep)
        self._noise = keep * self._noise + self._chance.gauss(0.0, fresh)

    def move(self, outside_n: float) -> float:
        """One substep under a force on the load from outside; the belt's force on the load."""
        p, h = self.parameters, self._step_s
        belt = p.belt_n_per_m * (self.motor - self.load) + p.belt_ns_per_m * (
            self.motor_v - self.load_v
        )
        self._bristles, friction = self._friction.step(self._bristles, self.motor_v, h)
        cogging = p.cogging_n * math.sin(2 * math.pi * self.motor / p.cogging_pitch_m)
        force = self._force + self._noise - friction - cogging - belt
        self.motor_v += h * force / p.motor_kg
        self.load_v += h * (belt + outside_n) / p.load_kg
        self.motor += h * self.motor_v
        self.load += h * self.load_v
        return belt
