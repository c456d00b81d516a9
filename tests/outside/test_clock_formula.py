"""Clock offset and delay against RFC 5905, section 8: theta and delta of one exchange."""

from trialrunner.core.clock_sync import Exchange


def test_worked_example_of_the_two_way_exchange():
    """T1..T4 = 0, 110, 111, 21: offset 100, delay 20, recomputed by hand."""
    exchange = Exchange(0, 110, 111, 21)
    assert exchange.offset_ns == 100
    assert exchange.delay_ns == 20


def test_the_error_of_the_offset_is_at_most_half_the_delay():
    """RFC 5905: the true offset lies within delta / 2, whatever the asymmetry of the way."""
    for out in range(0, 50, 7):
        for back in range(0, 50, 7):
            exchange = Exchange(0, out + 1000, out + 1003, out + back + 3)
            assert abs(exchange.offset_ns - 1000) <= exchange.delay_ns / 2
