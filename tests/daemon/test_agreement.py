"""The rig's greeting against the configuration: every disagreement in one go, and whose limits."""

from dataclasses import replace

import numpy as np
import pytest

from drivers.messages import Channel, Greeting, Role
from drivers.tables import table_crc
from trialrunner.agreement import agree, limits_in_force
from trialrunner.config import Config, load_text

TEXT = """\
[run]
name = "gantry"
[link]
url = "zmq+tcp://127.0.0.1:7000"
[trial]
n_samples = 200
period_s = 0.001
[[inputs]]
name = "x_force"
unit = "N"
low = -10.0
high = 10.0
rate_limit_per_s = 500.0
[[inputs]]
name = "y_force"
unit = "N"
low = -5.0
high = 5.0
[[outputs]]
name = "x"
unit = "mm"
low = -100.0
high = 100.0
[[outputs]]
name = "y"
unit = "mm"
low = -100.0
high = 100.0
[reference]
kind = "profile"
waypoints = [[0.0, 0.0]]
velocity_limit_per_s = 1.0
[law]
kind = "pd"
proportional = 1.0
"""

GREETING = Greeting(
    number=1,
    version=1,
    name="bench",
    tick_hz=1_000_000,
    period_ticks=1000,
    clock_steps=False,
    sample_type="f4",
    table_capacity=1000,
    max_samples=1000,
    samples_kept=1000,
    watchdog_ms=1000,
    starts=(0, 1),
    inject="actuator",
    reference_owner="daemon",
    reference_crc=0,
    n_inputs=2,
    n_outputs=2,
    n_auxiliary=1,
)

CHANNELS = (
    Channel(2, Role.INPUT, 0, "x_force", "N", -8.0, 12.0, 1000.0, ""),
    Channel(3, Role.INPUT, 1, "y_force", "N", -8.0, 4.0, float("inf"), ""),
    Channel(4, Role.OUTPUT, 0, "x", "mm", -300.0, 300.0, float("inf"), ""),
    Channel(5, Role.OUTPUT, 1, "y", "mm", -300.0, 300.0, float("inf"), ""),
    Channel(6, Role.AUXILIARY, 0, "limited", "1", 0.0, 1.0, float("inf"), "limited"),
)


@pytest.fixture
def config() -> Config:
    return load_text(TEXT)


def test_a_rig_as_described_agrees(config: Config) -> None:
    """Otherwise the other tests would prove nothing."""
    assert agree(config, GREETING, CHANNELS) == []


def test_the_order_of_arrival_of_channels_does_not_matter(config: Config) -> None:
    """Their index says which is which."""
    assert agree(config, GREETING, CHANNELS[::-1]) == []
    assert np.array_equal(limits_in_force(config, CHANNELS[::-1]).low, [-8.0, -5.0])


def test_the_tighter_limit_of_both_sides_holds(config: Config) -> None:
    """For each bound by itself."""
    limits = limits_in_force(config, CHANNELS)
    assert limits.low.tolist() == [-8.0, -5.0]
    assert limits.high.tolist() == [10.0, 4.0]
    assert limits.rate_per_s.tolist() == [500.0, float("inf")]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"period_ticks": 1001}, "trial.period_s: the rig samples every 0.001001 s"),
        ({"max_samples": 199}, "trial.n_samples: the rig takes trials of at most 199 samples"),
        ({"starts": (1,)}, "trial.start: the rig offers rig, the configuration says daemon"),
        ({"starts": ()}, "trial.start: the rig offers none"),
        ({"starts": (7,)}, "trial.start: the rig offers none"),
        ({"inject": "reference"}, "trial.inject: the rig adds the feedforward to its reference"),
        ({"reference_owner": "rig"}, "reference.kind: the rig owns the reference"),
        ({"watchdog_ms": 20_000}, "link.silence_s: the rig may be silent for 5 s"),
    ],
)
def test_a_greeting_that_does_not_fit_is_named_by_setting(
    config: Config, change: dict[str, object], words: str
) -> None:
    """One change, one sentence with both sides' values."""
    (line,) = agree(config, replace(GREETING, **change), CHANNELS)
    assert line.startswith(words)


def test_a_period_that_ticks_cannot_express_exactly_still_agrees(config: Config) -> None:
    """0.001 s is no binary number; only a real difference counts."""
    fast = replace(GREETING, tick_hz=3_000_000, period_ticks=3000)
    assert agree(config, fast, CHANNELS) == []


@pytest.mark.parametrize(
    ("index", "change", "words"),
    [
        (0, {"name": "force_x"}, "inputs: the rig has force_x, y_force, the configuration x_force"),
        (3, {"name": "z"}, "outputs: the rig has x, z, the configuration x, y"),
        (2, {"unit": "m"}, "outputs.0.unit: x is in 'm' on the rig, in 'mm' in the configuration"),
        (1, {"unit": "kN"}, "inputs.1.unit: y_force is in 'kN' on the rig"),
        (0, {"low": 1.0}, "inputs.0: x_force may go from 1 to 12 N on the rig"),
        (0, {"low": -20.0, "high": -15.0}, "inputs.0: x_force may go from -20 to -15 N on the rig"),
    ],
)
def test_a_channel_that_does_not_fit_is_named(
    config: Config, index: int, change: dict[str, object], words: str
) -> None:
    """Names, units and what is left of the limits."""
    channels = list(CHANNELS)
    channels[index] = replace(channels[index], **change)
    (line,) = agree(config, GREETING, channels)
    assert line.startswith(words)


def test_a_missing_channel_and_another_order_are_told_apart(config: Config) -> None:
    """The remedy differs."""
    (line,) = agree(config, GREETING, CHANNELS[:3] + CHANNELS[4:])
    assert line == "outputs: the rig has x, the configuration x, y"
    swapped = (replace(CHANNELS[0], index=1), replace(CHANNELS[1], index=0), *CHANNELS[2:])
    (line,) = agree(config, GREETING, swapped)
    assert line.endswith("put the tables into the rig's order")


def test_all_disagreements_are_said_at_once(config: Config) -> None:
    """Somebody at a rig wants one list."""
    wrong = replace(GREETING, period_ticks=2000, inject="reference", max_samples=10)
    channels = [replace(one, unit="V") for one in CHANNELS]
    assert len(agree(config, wrong, channels)) == 4 + 3


def test_a_reference_of_the_rig_is_compared_by_checksum(tmp_path_factory) -> None:
    """Configured checksum, the rig's, and that of the samples that errors are computed from."""
    folder = tmp_path_factory.mktemp("rig_reference")
    values = np.linspace(0.0, 1.0, 400).reshape(200, 2)
    np.savez(folder / "held.npz", x=values[:, 0], y=values[:, 1])
    right = table_crc(values.astype("<f4").tobytes())
    text = TEXT.replace('kind = "profile"', f'kind = "rig"\nchecksum = 0x{right:08x}')
    text = text.replace("waypoints = [[0.0, 0.0]]\nvelocity_limit_per_s = 1.0", 'path = "PATH"')
    config = load_text(text.replace("PATH", str(folder / "held.npz")))
    owner = replace(GREETING, reference_owner="rig", reference_crc=right)
    assert agree(config, owner, CHANNELS) == []
    (line,) = agree(config, replace(owner, reference_crc=right ^ 1), CHANNELS)
    assert line.startswith("reference.checksum: the rig's reference has the checksum")
    (line,) = agree(config, replace(owner, sample_type="f8"), CHANNELS)
    assert line.startswith(f"reference.path: the samples in {folder}")
    (line,) = agree(config, GREETING, CHANNELS)
    assert line.startswith("reference.kind: the daemon owns the reference according to the rig")
