"""The plants' motion against textbook formulas and an independent discretisation."""

import math
from dataclasses import replace
from random import Random

import numpy as np
import pytest
from scipy.linalg import expm

from mock_rig import chamber
from mock_rig.axis import NOISE_S, Axis, AxisParameters
from mock_rig.bead import X_AXIS, Y_AXIS
from mock_rig.friction import LuGre
from mock_rig.plant import Disturbance

QUIET = Disturbance(noise=0.0)
NONE = LuGre(1e5, 0.0, 0.0, 0.0, 0.0, 0.03)

both_axes = pytest.mark.parametrize("parameters", [X_AXIS, Y_AXIS], ids=["x", "y"])


def linear(parameters: AxisParameters, **changes: float) -> AxisParameters:
    """The axis without friction and cogging, with an encoder too fine to matter."""
    return replace(parameters, friction=NONE, cogging_n=0.0, encoder_m=1e-12, **changes)


def open_loop_answer(parameters: AxisParameters) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Frequencies in Hz and accelerations of motor and load per newton, from an impulse."""
    step_s, n = 0.25e-3, 16_384
    free = linear(parameters, gain_n_per_m=0.0, damping_ns_per_m=0.0)
    axis = Axis(free, step_s, 1)
    axis.begin(0.0, 0.0, QUIET, Random(1))
    speeds = np.zeros((n + 1, 2))
    for k in range(n):
        axis.command(1.0 if k == 0 else 0.0, 0.0)
        axis.move(0.0)
        speeds[k + 1] = axis.motor_v, axis.load_v
    spectra = np.fft.rfft(np.diff(speeds, axis=0), axis=0) / step_s
    return np.fft.rfftfreq(n, step_s), spectra[:, 0], spectra[:, 1]


@both_axes
def test_the_resonance_lies_where_two_masses_on_a_spring_put_it(parameters: AxisParameters) -> None:
    """w_r = sqrt(k (m1 + m2) / (m1 m2)), w_a = sqrt(k / m2): textbooks on two-mass drives."""
    m1, m2, k = parameters.motor_kg, parameters.load_kg, parameters.belt_n_per_m
    # Damping moves peak and notch apart; the formulas are those without it.
    damping = parameters.belt_ns_per_m / 4.0
    frequency_hz, motor, _ = open_loop_answer(replace(parameters, belt_ns_per_m=damping))
    band = (frequency_hz > 10.0) & (frequency_hz < 100.0)
    peak = frequency_hz[band][np.argmax(np.abs(motor[band]))]
    notch = frequency_hz[band][np.argmin(np.abs(motor[band]))]
    assert peak == pytest.approx(math.sqrt(k * (m1 + m2) / (m1 * m2)) / (2 * math.pi), rel=0.01)
    assert notch == pytest.approx(math.sqrt(k / m2) / (2 * math.pi), rel=0.01)
    assert parameters.resonance_hz() == pytest.approx(peak, rel=0.01)


@both_axes
def test_the_answer_to_a_force_is_that_of_two_masses_on_a_belt(parameters: AxisParameters) -> None:
    """s^2 X1/F = (m2 s^2 + c s + k) / D and s^2 X2/F = (c s + k) / D with
    D = m1 m2 s^2 + (m1 + m2) (c s + k): Newton's law for two masses, worked by hand."""
    m1, m2 = parameters.motor_kg, parameters.load_kg
    frequency_hz, motor, load = open_loop_answer(parameters)
    band = (frequency_hz > 1.0) & (frequency_hz < 100.0)
    s = 2j * math.pi * frequency_hz[band]
    belt = parameters.belt_ns_per_m * s + parameters.belt_n_per_m
    below = m1 * m2 * s**2 + (m1 + m2) * belt
    for measured, formula in (
        (motor[band], (m2 * s**2 + belt) / below),
        (load[band], belt / below),
    ):
        # The step of 0.25 ms shifts the resonance by 0.1 %, which is 3 % of its sharp peak.
        assert np.max(np.abs(measured - formula)) < 0.05 * np.max(np.abs(formula))
        low = frequency_hz[band] < 20.0
        assert np.max(np.abs(measured - formula)[low]) < 0.002 * np.max(np.abs(formula[low]))


@both_axes
def test_the_closed_loop_is_that_of_an_exact_discretisation(parameters: AxisParameters) -> None:
    """Oracle: matrix exponential of the two masses (zero-order hold) and the loop written out:
    the output before the force of its sample, a PD law with a first-order filter on the rate."""
    period_s, substeps, n = 0.002, 8, 400
    p = linear(parameters)
    axis = Axis(p, period_s, substeps)
    axis.begin(0.0, 0.0, QUIET, Random(1))
    reference = 0.01 * np.sin(2 * np.pi * 5.0 * period_s * np.arange(n)) ** 2
    pulse = np.where((np.arange(n) > 50) & (np.arange(n) < 80), 10.0, 0.0)
    ours = np.empty(n)
    for k in range(n):
        ours[k] = axis.measured()
        axis.command(pulse[k], reference[k])
        for _ in range(substeps):
            axis.move(0.0)
    assert np.max(np.abs(ours - exact_loop(p, period_s, reference, pulse))) < 0.01 * np.ptp(ours)


def exact_loop(
    p: AxisParameters, period_s: float, reference: np.ndarray, force: np.ndarray
) -> np.ndarray:
    """Load positions of a linear axis under its own loop, states [x1, v1, x2, v2]."""
    k, c = p.belt_n_per_m, p.belt_ns_per_m
    flow = np.array(
        [
            [0, 1, 0, 0, 0],
            [-k / p.motor_kg, -c / p.motor_kg, k / p.motor_kg, c / p.motor_kg, 1 / p.motor_kg],
            [0, 0, 0, 1, 0],
            [k / p.load_kg, c / p.load_kg, -k / p.load_kg, -c / p.load_kg, 0],
            [0, 0, 0, 0, 0],
        ]
    )
    hold = expm(flow * period_s)
    state, rate, last = np.zeros(4), 0.0, 0.0
    positions = np.empty(len(reference))
    for index, (wanted, outside) in enumerate(zip(reference, force, strict=True)):
        positions[index] = state[2]
        error = wanted - state[0]
        # tau d/dt(rate) + rate = d/dt(error), with backward differences
        rate = (p.derivative_s * rate + error - last) / (p.derivative_s + period_s)
        last = error
        total = outside + p.gain_n_per_m * error + p.damping_ns_per_m * rate
        state = hold[:4, :4] @ state + hold[:4, 4] * total
    return positions


def test_cogging_is_a_force_with_a_potential_that_repeats_with_the_pitch() -> None:
    """F = -A sin(2 pi x / p): m v^2 / 2 falls by A p / (2 pi) (1 - cos(2 pi x / p)), by energy."""
    force_n, pitch_m = 50.0, 0.04
    free = linear(X_AXIS, gain_n_per_m=0.0, damping_ns_per_m=0.0)
    alone = replace(free, belt_n_per_m=0.0, belt_ns_per_m=0.0)
    axis = Axis(replace(alone, cogging_n=force_n, cogging_pitch_m=pitch_m), 0.25e-3, 1)
    axis.begin(0.0, 0.0, QUIET, Random(1))
    axis.motor_v = 2.0
    seen = np.empty((400, 2))
    for k in range(len(seen)):
        axis.move(0.0)
        seen[k] = axis.motor, axis.motor_v
    held = force_n * pitch_m / (2 * np.pi) * (1.0 - np.cos(2 * np.pi * seen[:, 0] / pitch_m))
    assert seen[-1, 0] > 3 * pitch_m
    assert np.ptp(seen[:, 1]) > 0.05
    assert np.allclose(seen[:, 1], np.sqrt(4.0 - 2.0 * held / X_AXIS.motor_kg), atol=0.01)


def test_the_chamber_without_its_loop_answers_as_first_order_with_delay(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Ke^(-Ls)/(Ts + 1): T(t) = T0 + K P (1 - e^(-(t - L)/T)) after L (any control textbook)."""
    monkeypatch.setattr(chamber, "PROPORTIONAL_W_PER_K", 0.0)
    monkeypatch.setattr(chamber, "INTEGRAL_W_PER_KS", 0.0)
    plant, power, n = chamber.Chamber(1), 100.0, 300
    plant.begin(0, [30.0], QUIET)
    measured = np.array([plant.step([power], [30.0])[0][0] for _ in range(n)])
    period_s = chamber.PERIOD_TICKS / 1e6
    delay_s = chamber.DELAY_SAMPLES * period_s
    late_s = np.maximum(period_s * np.arange(n) - delay_s, 0.0)
    rise = chamber.GAIN_K_PER_W * power * (1.0 - np.exp(-late_s / chamber.TIME_CONSTANT_S))
    assert np.max(np.abs(measured - 30.0 - rise)) <= 0.5 * chamber.SENSOR_K + 1e-9


def test_the_chambers_sensor_is_as_noisy_as_stated(monkeypatch: pytest.MonkeyPatch) -> None:
    """s^2 + q^2 / 12: rounding adds like uniform noise, for s is as large as q (Widrow)."""
    monkeypatch.setattr(chamber, "POWER_NOISE_W", 0.0)
    monkeypatch.setattr(chamber, "PROPORTIONAL_W_PER_K", 0.0)
    plant = chamber.Chamber(1)
    plant.begin(0, [30.0], Disturbance())
    measured = np.array([plant.step([0.0], [30.0])[0][0] for _ in range(20_000)])
    expected = chamber.SENSOR_NOISE_K**2 + chamber.SENSOR_K**2 / 12.0
    # Differences of neighbours, so that slow changes of the air itself do not count.
    assert np.var(np.diff(measured)) / 2.0 == pytest.approx(expected, rel=0.05)


def test_rounding_to_the_encoder_step_has_the_variance_of_uniform_noise() -> None:
    """q^2 / 12 and no mean: Widrow's model of quantisation, for positions spread over many q."""
    axis = Axis(X_AXIS, 0.002, 8)
    positions = np.random.default_rng(1).uniform(0.0, 0.3, 20_000)
    errors = np.empty(len(positions))
    for index, position in enumerate(positions.tolist()):
        axis.load = position
        errors[index] = axis.measured() - position
    q = X_AXIS.encoder_m
    assert np.var(errors) == pytest.approx(q**2 / 12.0, rel=0.03)
    assert abs(np.mean(errors)) < 3.0 * q / math.sqrt(12.0 * len(errors))


def test_process_noise_is_as_large_and_as_slow_as_stated() -> None:
    """A first-order process: variance s^2, autocorrelation e^(-t/tau) (any text on time series)."""
    period_s, n = 0.002, 40_000
    free = linear(X_AXIS, gain_n_per_m=0.0, damping_ns_per_m=0.0)
    axis = Axis(replace(free, belt_n_per_m=0.0, belt_ns_per_m=0.0), period_s, 1)
    axis.begin(0.0, 0.0, Disturbance(), Random(1))
    speeds = np.empty(n + 1)
    speeds[0] = 0.0
    for k in range(n):
        axis.command(0.0, 0.0)
        axis.move(0.0)
        speeds[k + 1] = axis.motor_v
    force = X_AXIS.motor_kg * np.diff(speeds) / period_s
    lag = round(NOISE_S / period_s)
    correlation = np.mean(force[lag:] * force[:-lag]) / np.mean(force**2)
    assert np.std(force) == pytest.approx(X_AXIS.process_noise_n, rel=0.15)
    assert correlation == pytest.approx(math.exp(-1.0), abs=0.1)
