"""The mock rig's plants: deterministic, honest about limits, each disturbance as it says."""

import math

import numpy as np
import pytest

from mock_rig.axis import RESONANCE_HZ as AXIS_RESONANCE_HZ
from mock_rig.chamber import RESONANCE_HZ as CHAMBER_RESONANCE_HZ
from mock_rig.plant import TICK_HZ, Disturbance, Plant
from mock_rig.plants import PLANTS

QUIET = Disturbance(noise=0.0)
N = 240
REST = {"bead_axis": 0.1, "bead_gantry": 0.1, "chamber": 40.0}
"""Where each plant stands in these tests, in the unit of its outputs."""
TRAVEL = {"bead_axis": 0.05, "bead_gantry": 0.05, "chamber": 10.0}
FORCE = {"bead_axis": 40.0, "bead_gantry": 30.0, "chamber": 150.0}
"""A feedforward that moves the plant well beyond its noise, in the unit of its inputs."""

every_plant = pytest.mark.parametrize("name", sorted(PLANTS))
every_axis = pytest.mark.parametrize("name", ["bead_axis", "bead_gantry"])


def period_s(plant: Plant) -> float:
    return plant.period_ticks / TICK_HZ


def resting(name: str, n: int = N) -> np.ndarray:
    """(n, n_outputs): the reference of a plant that stays where it is."""
    return np.full((n, len(PLANTS[name](1).outputs)), REST[name])


def moving(name: str, n: int = N) -> np.ndarray:
    """(n, n_outputs): out and back."""
    bump = 0.5 * (1.0 - np.cos(2 * np.pi * np.arange(n) / n))
    return resting(name, n) + TRAVEL[name] * bump[:, np.newaxis]


def pushing(name: str, n: int = N) -> np.ndarray:
    """(n, n_inputs): a feedforward that works on every input, different on each."""
    phase = np.arange(len(PLANTS[name](1).inputs))
    return FORCE[name] * np.sin(2 * np.pi * np.arange(n)[:, np.newaxis] / 60 + phase)


def play(
    plant: Plant,
    reference: np.ndarray,
    feedforward: np.ndarray | None = None,
    disturbance: Disturbance = QUIET,
    trial: int = 3,
) -> tuple[np.ndarray, np.ndarray]:
    """Outputs (n, n_outputs) and auxiliary channels (n, n_auxiliary) of one trial."""
    if feedforward is None:
        feedforward = np.zeros((len(reference), len(plant.inputs)))
    plant.begin(trial, reference[0].tolist(), disturbance)
    rows = [
        plant.step(force, wanted)
        for force, wanted in zip(feedforward.tolist(), reference.tolist(), strict=True)
    ]
    return np.array([outputs for outputs, _ in rows]), np.array([others for _, others in rows])


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


@every_plant
def test_a_plant_declares_its_channels_and_one_limited_flag_for_each_input(name: str) -> None:
    plant = PLANTS[name](1)
    channels = [*plant.inputs, *plant.outputs, *plant.auxiliary]
    assert plant.name == name
    assert len({channel.name for channel in channels}) == len(channels)
    assert all(channel.low < channel.high and channel.unit for channel in channels)
    assert [c.meaning for c in plant.auxiliary].count("limited") == len(plant.inputs)
    assert all(c.meaning == "limited" for c in plant.auxiliary[: len(plant.inputs)])


@every_plant
def test_the_same_seed_gives_the_same_bits_and_another_seed_others(name: str) -> None:
    reference, noisy = moving(name), Disturbance()
    first, _ = play(PLANTS[name](5), reference, disturbance=noisy)
    again, _ = play(PLANTS[name](5), reference, disturbance=noisy)
    other, _ = play(PLANTS[name](6), reference, disturbance=noisy)
    assert first.tobytes() == again.tobytes()
    assert np.any(first != other)


@every_plant
def test_a_trial_does_not_depend_on_what_came_before(name: str) -> None:
    reference, plant = moving(name), PLANTS[name](5)
    alone = play(plant, reference, disturbance=Disturbance(), trial=7)
    fault = Disturbance(-1.0, 9, 3.0, 0.5, 0.2, 20.0, (0.001,))
    play(plant, reference, pushing(name), fault, trial=6)
    after = play(plant, reference, disturbance=Disturbance(), trial=7)
    assert alone[0].tobytes() == after[0].tobytes()
    assert alone[1].tobytes() == after[1].tobytes()


@every_plant
def test_trials_differ_from_each_other_by_far_less_than_the_error_without_feedforward(
    name: str,
) -> None:
    """Otherwise there would be nothing to learn, or nothing to measure as a floor."""
    reference, plant = moving(name), PLANTS[name](1)
    outputs = [play(plant, reference, disturbance=Disturbance(), trial=k)[0] for k in range(6)]
    scatter = rms(np.std(outputs, axis=0, ddof=1))
    error = rms(np.mean(outputs, axis=0) - reference)
    assert 0.0 < scatter < error / 15.0


@every_plant
def test_a_sample_is_measured_before_its_own_feedforward_acts(name: str) -> None:
    reference, at = moving(name), 100
    calm, pulse = np.zeros_like(pushing(name)), np.zeros_like(pushing(name))
    pulse[at] = 3.0 * FORCE[name]
    without, _ = play(PLANTS[name](1), reference, calm)
    with_pulse, _ = play(PLANTS[name](1), reference, pulse)
    changed = np.flatnonzero(np.any(without != with_pulse, axis=1))
    delay = 7 if name == "chamber" else 1
    assert changed[0] == at + delay


@every_plant
def test_begin_tells_the_start_that_the_first_sample_shows(name: str) -> None:
    reference = resting(name)
    start = PLANTS[name](1).begin(3, reference[0].tolist(), QUIET)
    outputs, _ = play(PLANTS[name](1), reference)
    assert list(start) == outputs[0].tolist()


@every_plant
@pytest.mark.parametrize("gain", [-1.0, 0.5, 2.0])
def test_gain_scales_the_feedforward(name: str, gain: float) -> None:
    reference = moving(name)
    small = 0.25 * pushing(name)
    faulty, _ = play(PLANTS[name](1), reference, small, Disturbance(gain=gain))
    scaled, _ = play(PLANTS[name](1), reference, gain * small, Disturbance())
    assert faulty.tobytes() == scaled.tobytes()


@every_plant
@pytest.mark.parametrize("delay", [1, 8])
def test_extra_delay_shifts_the_feedforward_by_whole_samples(name: str, delay: int) -> None:
    reference, feedforward = moving(name), pushing(name)
    shifted = np.zeros_like(feedforward)
    shifted[delay:] = feedforward[:-delay]
    faulty, _ = play(PLANTS[name](1), reference, feedforward, Disturbance(extra_delay=delay))
    expected, _ = play(PLANTS[name](1), reference, shifted, Disturbance())
    assert faulty.tobytes() == expected.tobytes()


@every_axis
def test_friction_makes_an_axis_lag_more(name: str) -> None:
    reference = moving(name)
    errors = [
        rms(
            play(PLANTS[name](1), reference, None, Disturbance(friction=f, noise=0.0))[0]
            - reference
        )
        for f in (0.0, 1.0, 3.0)
    ]
    assert errors[0] < errors[1] < errors[2]


def test_a_leakier_chamber_cools_sooner() -> None:
    reference = resting("chamber", 60)
    cooling = np.full((60, 1), -150.0)
    ends = [
        play(PLANTS["chamber"](1), reference, cooling, Disturbance(friction=f, noise=0.0))[0][8:, 0]
        for f in (1.0, 3.0)
    ]
    assert ends[0][0] < REST["chamber"]
    # The same fall at first, for the same heat is stored; then the leaky one settles earlier.
    early, late = (end[1] - end[0] for end in ends)
    assert early == pytest.approx(late, rel=0.1)
    assert abs(ends[1][20] - ends[1][10]) < abs(ends[0][20] - ends[0][10])


@every_plant
def test_resonance_amplifies_the_feedforward_at_its_frequency_alone(name: str) -> None:
    plant = PLANTS[name](1)
    frequency_hz = CHAMBER_RESONANCE_HZ if name == "chamber" else AXIS_RESONANCE_HZ
    n = round(12.0 / frequency_hz / period_s(plant))
    reference = resting(name, n)
    at_rest, _ = play(plant, reference)

    def answer(frequency: float, resonance: float) -> float:
        wave = np.sin(2 * np.pi * frequency * period_s(plant) * np.arange(n))
        force = np.repeat(0.1 * FORCE[name] * wave[:, np.newaxis], len(plant.inputs), axis=1)
        fault = Disturbance(resonance=resonance, noise=0.0)
        return rms((play(plant, reference, force, fault)[0] - at_rest)[n // 2 :])

    assert answer(frequency_hz, 0.5) > 4.0 * answer(frequency_hz, 0.0)
    assert answer(3.0 * frequency_hz, 0.5) < 1.5 * answer(3.0 * frequency_hz, 0.0)


@every_plant
def test_an_early_load_limit_is_reported_and_holds_the_plant_back(name: str) -> None:
    reference, feedforward = moving(name), pushing(name)
    healthy, flags = play(PLANTS[name](1), reference, feedforward, QUIET)
    held, early_flags = play(
        PLANTS[name](1), reference, feedforward, Disturbance(load_limit=0.1, noise=0.0)
    )
    n_inputs = len(PLANTS[name](1).inputs)
    assert not np.any(flags[:, :n_inputs])
    assert np.all(np.any(early_flags[:, :n_inputs], axis=0))
    assert set(np.unique(early_flags[:, :n_inputs])) == {0.0, 1.0}
    assert np.any(healthy != held)


def test_the_chambers_loop_takes_a_constant_heat_away_in_the_end() -> None:
    reference = resting("chamber", 1200)
    outputs, _ = play(PLANTS["chamber"](1), reference, np.full((1200, 1), 40.0))
    assert np.max(outputs) > REST["chamber"] + 1.0
    assert np.max(np.abs(outputs[-100:] - REST["chamber"])) < 0.1


def test_the_chambers_loop_does_not_wind_up_while_the_heater_is_at_its_limit() -> None:
    """Hours at an unreachable 90 degrees are forgotten once 45 are wanted."""
    reference = resting("chamber", 1000)
    reference[1:600], reference[600:] = 90.0, 45.0
    fault = Disturbance(load_limit=0.3, noise=0.0)
    outputs, others = play(PLANTS["chamber"](1), reference, None, fault)
    assert np.all(others[20:600, 0] == 1.0)
    assert np.max(outputs) < 80.0
    assert np.max(np.abs(outputs[900:] - 45.0)) < 1.5


def test_only_the_axis_at_its_limit_says_so() -> None:
    reference = resting("bead_gantry", 20)
    force = np.zeros((20, 2))
    force[5:10, 1] = 1000.0
    _, others = play(PLANTS["bead_gantry"](1), reference, force)
    assert np.flatnonzero(others[:, 1]).tolist()[:5] == [5, 6, 7, 8, 9]
    assert not np.any(others[:10, 0])


@every_plant
def test_without_noise_trials_are_equal_and_with_more_they_scatter_more(name: str) -> None:
    reference, plant = moving(name), PLANTS[name](1)

    def scatter(noise: float) -> float:
        trials = [play(plant, reference, None, Disturbance(noise=noise), k)[0] for k in range(5)]
        return rms(np.ptp(trials, axis=0))

    assert scatter(0.0) == 0.0
    assert scatter(20.0) > 5.0 * scatter(1.0) > 0.0


@every_plant
def test_an_offset_moves_the_start_of_the_outputs_that_it_names(name: str) -> None:
    reference, plant = resting(name), PLANTS[name](1)
    offset = 0.1 * TRAVEL[name]
    start = plant.begin(3, reference[0].tolist(), Disturbance(offset=(offset,), noise=0.0))
    expected = [REST[name] + offset] + [REST[name]] * (len(plant.outputs) - 1)
    assert list(start) == pytest.approx(expected, abs=1e-6)


@every_axis
def test_an_axis_that_stands_a_little_off_starts_without_a_kick(name: str) -> None:
    """Its loop has been holding it there: the derivative must not see the offset as a jump."""
    reference = resting(name)
    offset = (0.005,) * reference.shape[1]
    _, others = play(PLANTS[name](1), reference, None, Disturbance(offset=offset, noise=0.0))
    assert not np.any(others[:, : reference.shape[1]])


@every_axis
def test_the_loop_of_an_axis_holds_it_where_it_should_be(name: str) -> None:
    """What stays is what dry friction and cogging can hold against the loop's stiffness."""
    outputs, _ = play(PLANTS[name](1), resting(name, 500), None, Disturbance())
    assert np.max(np.abs(outputs - REST[name])) < 2e-3


@pytest.mark.parametrize("mover", [0, 1])
def test_each_axis_of_the_gantry_disturbs_the_other_a_little(mover: int) -> None:
    reference, feedforward = resting("bead_gantry"), np.zeros((N, 2))
    feedforward[:, mover] = FORCE["bead_gantry"] * np.sin(2 * np.pi * np.arange(N) / 40)
    calm, _ = play(PLANTS["bead_gantry"](1), reference)
    pushed, _ = play(PLANTS["bead_gantry"](1), reference, feedforward)
    moved = np.sqrt(np.mean((pushed - calm) ** 2, axis=0))
    assert 0.003 < moved[1 - mover] / moved[mover] < 0.3


def test_the_motor_warms_up_over_the_trials_and_stays_within_its_range() -> None:
    plant = PLANTS["bead_axis"](1)

    def temperature(trial: int) -> float:
        _, others = play(plant, resting("bead_axis", 2), trial=trial)
        return float(others[0, 1])

    seen = [temperature(trial) for trial in (0, 10, 50, 1000)]
    assert seen == sorted(seen)
    assert seen[0] < seen[-1] < plant.auxiliary[1].high


@every_plant
def test_whatever_is_wrong_the_outputs_stay_finite(name: str) -> None:
    plant = PLANTS[name](1)
    wild = 100.0 * pushing(name)
    for fault in (
        Disturbance(gain=-1000.0),
        Disturbance(friction=1000.0),
        Disturbance(friction=0.1),
        Disturbance(resonance=1000.0),
        Disturbance(load_limit=0.0),
        Disturbance(extra_delay=10 * N),
        Disturbance(noise=1000.0),
    ):
        outputs, others = play(plant, moving(name), wild, fault)
        assert np.all(np.isfinite(outputs)), fault
        assert np.all(np.isfinite(others)), fault


@every_axis
def test_positions_come_in_whole_steps_of_the_encoder(name: str) -> None:
    outputs, _ = play(PLANTS[name](1), moving(name), None, Disturbance())
    steps = outputs / 1e-6
    assert np.max(np.abs(steps - np.round(steps))) < 1e-6
    assert not math.isclose(float(np.ptp(outputs)), 0.0)
