"""The bead rig: one axis alone, or a gantry of two that disturb each other; pure."""

from collections.abc import Sequence
from random import Random

from mock_rig.axis import Axis, AxisParameters
from mock_rig.friction import LuGre
from mock_rig.plant import TICK_HZ, ChannelInfo, Disturbance

PERIOD_TICKS = 2_000
SUBSTEPS = 8
RATE_N_PER_S = 4_000.0

X_AXIS = AxisParameters(
    motor_kg=3.0,
    load_kg=1.2,
    belt_n_per_m=49_000.0,
    belt_ns_per_m=14.0,
    friction=LuGre(2.0e5, 400.0, 14.0, 8.0, 10.0, 0.03),
    cogging_n=1.5,
    cogging_pitch_m=0.04,
    gain_n_per_m=6_000.0,
    damping_ns_per_m=220.0,
    derivative_s=0.004,
    force_limit_n=160.0,
    encoder_m=1e-6,
    process_noise_n=0.25,
    start_spread_m=1e-5,
)
Y_AXIS = AxisParameters(
    motor_kg=2.0,
    load_kg=0.8,
    belt_n_per_m=38_000.0,
    belt_ns_per_m=11.0,
    friction=LuGre(1.5e5, 300.0, 10.0, 6.0, 7.5, 0.03),
    cogging_n=1.0,
    cogging_pitch_m=0.05,
    gain_n_per_m=4_500.0,
    damping_ns_per_m=150.0,
    derivative_s=0.004,
    force_limit_n=120.0,
    encoder_m=1e-6,
    process_noise_n=0.2,
    start_spread_m=1e-5,
)

X_FROM_Y, Y_FROM_X = 0.10, 0.06
"""Share of one axis's belt force that reaches the other's load through the frame."""

COLD_CEL, WARMING_CEL_PER_TRIAL, WARM_CEL = 24.0, 0.2, 41.0


def _input(name: str, limit: float) -> ChannelInfo:
    return ChannelInfo(name, "N", -limit, limit, RATE_N_PER_S)


def _limited(name: str) -> ChannelInfo:
    return ChannelInfo(name, "1", 0.0, 1.0, meaning="limited")


_MOTOR = ChannelInfo("motor_temperature", "Cel", 0.0, 120.0)


class BeadPlant:
    """Axes that share a frame."""

    period_ticks = PERIOD_TICKS
    inject = "actuator"
    return_s = 1.5

    def __init__(
        self, name: str, axes: Sequence[AxisParameters], letters: Sequence[str], seed: int
    ) -> None:
        self.name = name
        self._seed = seed
        self._axes = [Axis(one, PERIOD_TICKS / TICK_HZ, SUBSTEPS) for one in axes]
        self.inputs = tuple(
            _input(f"belt_force{x}", 0.75 * one.force_limit_n)
            for x, one in zip(letters, axes, strict=True)
        )
        self.outputs = tuple(ChannelInfo(f"head_position{x}", "m", -0.05, 0.6) for x in letters)
        self.auxiliary = (*(_limited(f"force_limited{x}") for x in letters), _MOTOR)
        self._temperature = COLD_CEL

    def begin(
        self, trial: int, reference0: Sequence[float], disturbance: Disturbance
    ) -> list[float]:
        chance = Random(f"{self._seed}/{self.name}/{trial}")
        offsets = (*disturbance.offset, *([0.0] * len(self._axes)))
        self._temperature = min(COLD_CEL + WARMING_CEL_PER_TRIAL * trial, WARM_CEL)
        for axis, start, offset in zip(self._axes, reference0, offsets, strict=False):
            axis.begin(start + offset, start, disturbance, chance)
        return [axis.measured() for axis in self._axes]

    def step(
        self, feedforward: Sequence[float], reference: Sequence[float]
    ) -> tuple[list[float], list[float]]:
        outputs = [axis.measured() for axis in self._axes]
        for axis, force, wanted in zip(self._axes, feedforward, reference, strict=True):
            axis.command(force, wanted)
        limited = [float(axis.limited) for axis in self._axes]
        self._move()
        return outputs, [*limited, self._temperature]

    def _move(self) -> None:
        if len(self._axes) == 1:
            move = self._axes[0].move
            for _ in range(SUBSTEPS):
                move(0.0)
            return
        x, y = self._axes
        from_x = from_y = 0.0
        for _ in range(SUBSTEPS):
            from_x, from_y = x.move(-X_FROM_Y * from_y), y.move(-Y_FROM_X * from_x)


def bead_axis(seed: int) -> BeadPlant:
    return BeadPlant("bead_axis", [X_AXIS], [""], seed)


def bead_gantry(seed: int) -> BeadPlant:
    return BeadPlant("bead_gantry", [X_AXIS, Y_AXIS], ["_x", "_y"], seed)
