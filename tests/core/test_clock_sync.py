"""The rig's clock as estimated from exchanges."""

import random

import pytest

from trialrunner.core.clock_sync import ClockSync


def exchange(sync, sent_ns, out_ns, back_ns, rig_offset_ns, drift=0.0, hz=1_000_000):
    """One exchange with a rig whose clock is offset and drifts; held for 10 us by the rig."""

    def tick(host_ns):
        return round((host_ns + rig_offset_ns + drift * host_ns) * hz / 1e9)

    received, answered = sent_ns + out_ns, sent_ns + out_ns + 10_000
    sync.add(sent_ns, tick(received), tick(answered), answered + back_ns)


def test_the_estimate_is_within_half_the_least_delay():
    sync, noise = ClockSync(1_000_000), random.Random(3)
    for k in range(30):
        out, back = noise.randrange(50_000, 900_000), noise.randrange(50_000, 900_000)
        exchange(sync, 1_000_000_000 + k * 10_000_000, out, back, 5_000_000_000)
    now = 1_400_000_000
    found_ns = sync.tick_at(now) * 1000
    assert abs(found_ns - (now + 5_000_000_000)) <= sync.uncertainty_s * 1e9 + 2000


def test_drift_is_found_from_near_floor_exchanges_of_a_steady_clock():
    sync = ClockSync(1_000_000_000)
    for k in range(60):
        exchange(sync, k * 1_000_000_000, 60_000, 60_000, 7_000_000, drift=20e-6, hz=10**9)
    assert sync.drift == pytest.approx(20e-6, rel=0.05)
    ahead = 70_000_000_000
    assert sync.tick_at(ahead) == pytest.approx(ahead * (1 + 20e-6) + 7_000_000, abs=20_000)


def test_a_clock_that_jumps_gets_no_drift_and_forgets_before_each_start():
    sync = ClockSync(1_000_000, steps=True)
    for k in range(40):
        exchange(sync, k * 1_000_000_000, 1000, 1000, k * 10**9)
    assert sync.drift == 0.0
    sync.restart()
    assert sync.fresh == 0
    with pytest.raises(ValueError, match="no clock exchange"):
        sync.tick_at(0)


def test_an_exchange_with_a_negative_delay_is_not_believed():
    sync = ClockSync(1_000_000_000)
    sync.add(0, 0, 5000, 1000)
    assert sync.fresh == 0


def test_memory_does_not_grow_with_the_number_of_exchanges():
    sync = ClockSync(1_000_000)
    for k in range(1000):
        exchange(sync, k * 1_000_000, 1000, 1000, 0)
    assert len(sync._kept) == 64
