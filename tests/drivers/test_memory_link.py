"""The link for tests: faults on demand, each at the end that sends."""

from collections.abc import Iterable

import pytest

from drivers.errors import LinkLost
from drivers.memory_link import MAX_HELD_BYTES, MemoryLink


def data_of(link: MemoryLink) -> list[bytes]:
    return [one.data for one in link.receive()]


def test_a_frame_can_be_lost_doubled_or_changed() -> None:
    """The fault decides what arrives of each frame."""
    daemon, rig = MemoryLink.pair()
    fates = {b"lost": (), b"twice": (b"twice", b"twice"), b"bad": (b"b\xffd",)}
    daemon.fault = lambda frame: fates.get(frame, (frame,))
    for frame in (b"lost", b"twice", b"bad", b"good"):
        daemon.send(frame)
    assert data_of(rig) == [b"twice", b"twice", b"b\xffd", b"good"]


def test_frames_can_overtake_each_other() -> None:
    """A fault may hold a frame back and let it go with the next one."""
    daemon, rig = MemoryLink.pair()
    held: list[bytes] = []

    def swap(frame: bytes) -> Iterable[bytes]:
        if held:
            return (frame, held.pop())
        held.append(frame)
        return ()

    daemon.fault = swap
    for frame in (b"1", b"2", b"3", b"4"):
        daemon.send(frame)
    assert data_of(rig) == [b"2", b"1", b"4", b"3"]


def test_faults_of_one_end_leave_the_other_direction_alone() -> None:
    """Only what this end sends is changed."""
    daemon, rig = MemoryLink.pair()
    daemon.fault = lambda frame: ()
    rig.send(b"back")
    assert data_of(daemon) == [b"back"]


def test_cutting_the_line_is_seen_at_both_ends() -> None:
    """Either end may cut it."""
    for end in (0, 1):
        pair = MemoryLink.pair()
        pair[end].cut()
        for link in pair:
            with pytest.raises(LinkLost, match="the line is cut"):
                link.receive()


def test_what_was_read_is_no_longer_held() -> None:
    """More than a link holds may go through it."""
    daemon, rig = MemoryLink.pair()
    frame = bytes(MAX_HELD_BYTES // 4)
    for _ in range(6):
        daemon.send(frame)
        assert data_of(rig) == [frame]


def test_memory_links_need_no_poller() -> None:
    """They are turned by the test itself."""
    assert MemoryLink.pair()[0].pollable is None
