"""Gaps of a table or a trial, as both sides name them."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from drivers.limits import MAX_RANGES
from drivers.tables import missing_spans, table_crc


@given(st.lists(st.booleans(), max_size=60))
def test_gaps_are_exactly_what_is_missing(here: list[bool]) -> None:
    """Filling all named gaps leaves none, in rounds of at most MAX_RANGES; no sample twice."""
    mask = np.array(here, dtype=bool)
    named = 0
    while spans := missing_spans(mask):
        assert len(spans) <= MAX_RANGES
        assert list(spans) == sorted(spans)
        for first, count in spans:
            assert count > 0
            assert not mask[first : first + count].any()
            assert first == 0 or mask[first - 1]
            mask[first : first + count] = True
            named += count
    assert mask.all()
    assert named == here.count(False)


def test_the_first_gaps_are_named_first() -> None:
    """Of more gaps than fit, the earliest ones."""
    mask = np.ones(200, dtype=bool)
    mask[::4] = False
    assert missing_spans(mask) == tuple((4 * k, 1) for k in range(MAX_RANGES))


def test_spans_are_plain_integers() -> None:
    """They go into a message, which takes no others."""
    (span,) = missing_spans(np.array([True, False, False]))
    assert span == (1, 2)
    assert {type(number) for number in span} == {int}


@given(st.binary(max_size=300))
def test_a_tables_checksum_is_that_of_its_bytes(data: bytes) -> None:
    """One changed bit gives another one."""
    crc = table_crc(data)
    assert crc == table_crc(bytes(bytearray(data)))
    if data:
        assert table_crc(data[:-1] + bytes([data[-1] ^ 1])) != crc
