"""A small thermal-cycling chamber: first order plus delay under a PI loop; slow; pure."""

import math
from collections import deque
from collections.abc import Sequence
from random import Random

from mock_rig.feedforward_path import FeedforwardPath
from mock_rig.plant import TICK_HZ, ChannelInfo, Disturbance

PERIOD_TICKS = 5 * TICK_HZ
GAIN_K_PER_W = 0.25
TIME_CONSTANT_S = 400.0
DELAY_SAMPLES = 6
"""From the power to the air: what is commanded at sample k shows first at sample k + 7."""
RESONANCE_HZ = 0.004
"""Of the resonance that a fault adds to the response to the feedforward."""
PROPORTIONAL_W_PER_K = 12.0
INTEGRAL_W_PER_KS = 0.02
POWER_LIMIT_W = 400.0
SENSOR_K = 0.01
SENSOR_NOISE_K = 0.01
AMBIENT_CEL = 22.0
AMBIENT_SPREAD_K = 0.15
POWER_NOISE_W = 2.0


class Chamber:
    name = "chamber"
    period_ticks = PERIOD_TICKS
    inject = "actuator"
    return_s = 1800.0
    inputs: tuple[ChannelInfo, ...] = (ChannelInfo("heater_power", "W", -300.0, 300.0, 50.0),)
    outputs: tuple[ChannelInfo, ...] = (ChannelInfo("chamber_temperature", "Cel", -20.0, 120.0),)
    auxiliary: tuple[ChannelInfo, ...] = (
        ChannelInfo("power_limited", "1", 0.0, 1.0, meaning="limited"),
        ChannelInfo("ambient_temperature", "Cel", -20.0, 60.0),
    )

    def __init__(self, seed: int) -> None:
        self._seed = seed
        self.begin(0, [AMBIENT_CEL], Disturbance())

    def begin(
        self, trial: int, reference0: Sequence[float], disturbance: Disturbance
    ) -> list[float]:
        self._chance = Random(f"{self._seed}/{self.name}/{trial}")
        self._effect = disturbance
        # Loss of heat sets both: what a watt holds, and how soon it is held.
        self._gain = GAIN_K_PER_W / disturbance.friction
        settling_s = TIME_CONSTANT_S / disturbance.friction
        self._share = 1.0 - math.exp(-PERIOD_TICKS / TICK_HZ / settling_s)
        spread = AMBIENT_SPREAD_K * disturbance.noise
        self._ambient = AMBIENT_CEL + self._chance.gauss(0.0, spread)
        start = reference0[0] + sum(disturbance.offset[:1])
        self._temperature = start + self._chance.gauss(0.0, 0.02 * disturbance.noise)
        holding = (start - AMBIENT_CEL) / self._gain
        self._integral = holding
        self._pipe = deque([holding] * DELAY_SAMPLES)
        self._path = FeedforwardPath(disturbance, PERIOD_TICKS / TICK_HZ, RESONANCE_HZ)
        self._power_noise = 0.0
        return [self._measured()]

    def _measured(self) -> float:
        noise = self._chance.gauss(0.0, SENSOR_NOISE_K * self._effect.noise)
        return round((self._temperature + noise) / SENSOR_K) * SENSOR_K

    def step(
        self, feedforward: Sequence[float], reference: Sequence[float]
    ) -> tuple[list[float], list[float]]:
        measured = self._measured()
        limited = self._command(feedforward[0], reference[0] - measured)
        self._move(self._pipe.popleft())
        return [measured], [float(limited), self._ambient]

    def _command(self, feedforward: float, error: float) -> bool:
        """The PI loop's power goes into the pipe; true while it is limited."""
        effect = self._path.apply(feedforward)
        wanted = effect + PROPORTIONAL_W_PER_K * error + self._integral
        limit = POWER_LIMIT_W * self._effect.load_limit
        power = min(max(wanted, -limit), limit)
        if power == wanted:
            self._integral += INTEGRAL_W_PER_KS * error * PERIOD_TICKS / TICK_HZ
        fresh = self._chance.gauss(0.0, POWER_NOISE_W * self._effect.noise)
        self._power_noise = 0.8 * self._power_noise + 0.6 * fresh
        self._pipe.append(power + self._power_noise)
        return power != wanted

    def _move(self, power: float) -> None:
        """One period at a held power: the exact answer of a first order."""
        settled = self._ambient + self._gain * power
        self._temperature += self._share * (settled - self._temperature)
