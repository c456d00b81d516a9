"""One contract for every kind of link: whole frames in order, nothing blocks, nothing grows."""

import random
from pathlib import Path
from typing import Any

import pytest

from drivers.codec import pack_frame
from drivers.errors import LinkBusy, LinkError, LinkLost
from drivers.link import Link
from drivers.open import DAEMON, RIG, open_link


def data_of(received: list[Any]) -> list[bytes]:
    return [one.data for one in received]


def test_frames_arrive_whole_and_in_order(pair: Any) -> None:
    """From the daemon to the rig, 200 of all lengths and contents."""
    chance = random.Random(1)
    frames = [chance.randbytes(chance.randint(1, 600)) for _ in range(200)]
    for frame in frames:
        pair.daemon.send(frame)
    assert data_of(pair.collect(pair.rig, len(frames))) == frames


def test_frames_go_both_ways_at_once(pair: Any) -> None:
    """What one end sends does not hold up what the other sends."""
    out = [b"out %d" % number for number in range(50)]
    back = [b"back %d" % number for number in range(50)]
    for one, other in zip(out, back, strict=True):
        pair.daemon.send(one)
        pair.rig.send(other, pair.peer)
    assert data_of(pair.collect(pair.rig, 50)) == out
    assert data_of(pair.collect(pair.daemon, 50)) == back


@pytest.mark.parametrize("fill", [b"\x00", b"\xff", b"\x01\x00"])
def test_the_largest_frame_passes(pair: Any, fill: bytes) -> None:
    """A body as long as the link says that it carries, of whatever bytes."""
    body = fill * (pair.daemon.max_body // len(fill))
    frame = pack_frame(1, 0, body)
    pair.daemon.send(frame)
    pair.rig.send(frame, pair.peer)
    assert data_of(pair.collect(pair.rig, 1)) == [frame]
    assert data_of(pair.collect(pair.daemon, 1)) == [frame]


def test_both_ends_agree_on_sizes(pair: Any) -> None:
    """A block with its head fits into a body."""
    for link in (pair.daemon, pair.rig):
        assert link.block_bytes + 40 <= link.max_body
    assert pair.daemon.max_body == pair.rig.max_body


def test_nothing_to_receive_is_an_empty_list_at_once(pair: Any) -> None:
    """Receiving never waits."""
    assert pair.daemon.receive() == []
    assert pair.rig.receive() == []


def test_an_idle_link_has_nothing_to_write(pair: Any) -> None:
    """So that a loop that waits for room to write does not spin."""
    pair.until(lambda: not pair.daemon.wants_write and not pair.rig.wants_write)
    assert pair.daemon.flush()
    assert pair.rig.flush()


def send_until_lost(link: Link, frame: bytes, most: int) -> int:
    """Frames taken by a link whose other end does not read."""
    for count in range(most):
        try:
            link.send(frame)
        except LinkLost:
            return count
    raise AssertionError("an endless queue")


def test_a_daemon_whose_rig_does_not_read_gives_up_with_bounded_memory(pair: Any) -> None:
    """Sending never blocks; when the queue is full the line counts as lost."""
    frame = bytes(pair.daemon.block_bytes)
    held = send_until_lost(pair.daemon, frame, 200_000)
    # ZeroMQ's own queues of both ends and the system's buffers come before ours.
    assert held * len(frame) < 80 << 20


def test_counters_tell_what_went_through(pair: Any) -> None:
    """Frames and their bytes, in and out, at both ends, since the link was opened."""
    before, rig_before = pair.daemon.statistics(), pair.rig.statistics()
    for _ in range(3):
        pair.daemon.send(bytes(100))
    pair.collect(pair.rig, 3)
    after, rig_after = pair.daemon.statistics(), pair.rig.statistics()
    assert after.frames_out - before.frames_out == 3
    assert after.bytes_out - before.bytes_out == 300
    assert rig_after.frames_in - rig_before.frames_in == 3
    assert rig_after.bytes_in - rig_before.bytes_in == 300
    assert not after.errors
    assert not rig_after.errors


def test_statistics_are_a_snapshot(pair: Any) -> None:
    """What was handed out does not change afterwards."""
    before = pair.daemon.statistics()
    pair.daemon.send(b"more")
    assert before.frames_out == 1
    assert pair.daemon.statistics().frames_out == 2


def use(link: Link, how: str) -> None:
    {"send": lambda: link.send(b"x"), "receive": link.receive, "flush": link.flush}[how]()


@pytest.mark.parametrize("how", ["send", "receive", "flush"])
def test_a_closed_link_is_lost_and_closing_twice_is_harmless(pair: Any, how: str) -> None:
    """Every use after closing is LinkLost, not an error of some library."""
    for link in (pair.daemon, pair.rig):
        link.close()
        link.close()
        with pytest.raises(LinkLost):
            use(link, how)


def loss(link: Link) -> str:
    """Why the link is lost; empty if it is not."""
    try:
        link.receive()
    except LinkLost as error:
        return str(error)
    return ""


def test_the_daemon_notices_that_its_rig_has_gone(pair: Any) -> None:
    """The end of the other end is LinkLost, with the link's address in the text."""
    pair.rig.close()
    # ZeroMQ tells of it beside the socket, so that it is seen at the loop's next turn.
    for _ in range(1000):
        if loss(pair.daemon):
            break
        pair.daemon.pollable.poll(10)
    assert pair.daemon.url in loss(pair.daemon)


def test_what_was_obtained_is_told_in_words(pair: Any) -> None:
    """The address is part of it."""
    for link in (pair.daemon, pair.rig):
        assert link.describe().startswith(link.url)


def test_an_address_can_be_opened_again_after_closing(folder: Path) -> None:
    """A rig that comes back finds its place free, of each kind that has a place."""
    for url in (f"pty://{folder}/tty", f"zmq+ipc://{folder}/s"):
        for _ in range(3):
            open_link(url, RIG).close()
        assert list(folder.iterdir()) == []


@pytest.mark.parametrize(
    ("url", "text"),
    [
        ("tcp://127.0.0.1:5", "expected one of serial://, zmq.tcp://, zmq.ipc://$"),
        ("/dev/ttyUSB0", "no kind of link that a daemon opens"),
        ("", "no kind of link"),
        ("zmq+tcp://[::1", "no address can be read"),
        ("serial://dev/ttyUSB0", "three slashes"),
        ("serial:///dev/x?baud=fast", "baud=fast; expected a whole number of 1 to 12000000"),
        ("serial:///dev/x?baud=0", "baud=0"),
        ("serial:///dev/x?baud=", "baud=;"),
        ("serial:///dev/x?baud=٣", "baud=٣"),
        ("serial:///dev/x?parity=even", "unknown option parity; expected baud or rtscts"),
        ("serial:///dev/x?rtscts=yes", "rtscts=yes; expected true or false"),
        ("serial:///dev/no-such-port", "there is no port /dev/no-such-port; check the cable"),
        ("serial:///dev/null", "/dev/null cannot be opened as a serial port"),
        ("pty:///tmp/x", "no kind of link that a daemon opens"),
        ("zmq+tcp://127.0.0.1", "expected zmq.tcp://host:port"),
        ("zmq+tcp://127.0.0.1:0", "expected zmq.tcp://host:port"),
        ("zmq+tcp://127.0.0.1:99999", "expected zmq.tcp://host:port"),
        ("zmq+tcp://:5555", "expected zmq.tcp://host:port"),
        ("zmq+tcp://127.0.0.1:5555?hwm=1", "no options"),
        ("zmq+ipc://relative", "three slashes"),
        ("zmq+ipc:///" + "x" * 107, "over 107 bytes"),
    ],
)
def test_addresses_that_cannot_work_are_refused_in_words(url: str, text: str) -> None:
    """LinkError names the address, what was expected, and what to do."""
    with pytest.raises(LinkError, match=text) as caught:
        open_link(url, DAEMON)
    assert url in str(caught.value)


@pytest.mark.parametrize(
    ("url", "text"),
    [
        ("pty://relative/path", "expected pty:///path"),
        ("pty:///", "expected pty:///path"),
        ("pty:///tmp/x?baud=9600", "expected pty:///path"),
        ("pty:///no/such/directory/tty", "cannot be made: No such file"),
        ("zmq+ipc:///no/such/directory/s", "the directory does not exist; make it first"),
        ("zmq+tcp://192.0.2.1:5555", "none of this machine"),
        ("loop://x", "a rig opens; expected one of serial://, pty://"),
    ],
)
def test_places_that_a_rig_cannot_have_are_refused_in_words(url: str, text: str) -> None:
    """The rig's side of the same."""
    with pytest.raises(LinkError, match=text):
        open_link(url, RIG)


@pytest.mark.parametrize("kind", ["pty", "zmq+ipc"])
def test_a_file_in_the_way_is_never_removed(kind: str, folder: Path) -> None:
    """A slip of the pen in an address must not cost anybody's data."""
    precious = folder / "record"
    precious.write_text("years of work")
    alias = folder / "alias"
    alias.symlink_to(precious)
    for path in (precious, alias, folder):
        with pytest.raises(LinkError, match="choose another path"):
            open_link(f"{kind}://{path}", RIG)
    assert precious.read_text() == "years of work"
    assert alias.is_symlink()


def test_what_a_killed_rig_left_behind_is_cleared_away(folder: Path) -> None:
    """A stale socket file, and a stale link to a terminal that is no more."""
    import socket

    with socket.socket(socket.AF_UNIX) as left:
        left.bind(str(folder / "s"))
    (folder / "tty").symlink_to("/dev/pts/99999")
    for url in (f"pty://{folder}/tty", f"zmq+ipc://{folder}/s"):
        open_link(url, RIG).close()


def test_a_second_rig_at_one_address_is_told_that_it_is_taken(zmq_pair: Any) -> None:
    """Binding twice would silently steal an ipc address."""
    with pytest.raises(LinkBusy, match="another program listens there; stop it or choose another"):
        open_link(zmq_pair.rig.url, RIG)
    zmq_pair.daemon.send(b"still here")
    assert data_of(zmq_pair.collect(zmq_pair.rig, 1)) == [b"still here"]
