"""What only ZeroMQ links have: several peers, parts of messages, a full pipe, a silent peer."""

from collections.abc import Callable, Iterator
from typing import Any

import pytest
import zmq

from drivers import limits
from drivers.errors import LinkLost
from drivers.link import Link
from drivers.open import DAEMON, RIG, open_link
from drivers.zmq_link import MAX_PEERS

FAILURE_MS = 10_000


@pytest.fixture
def rig() -> Iterator[Link]:
    rig = open_link("zmq+tcp://127.0.0.1:0", RIG)
    yield rig
    rig.close()


@pytest.fixture
def stranger(rig: Link) -> Iterator[Callable[[], Any]]:
    """Makes plain DEALERs that may send whatever they like."""
    context: zmq.Context[Any] = zmq.Context()
    made = []

    def make() -> Any:
        socket = context.socket(zmq.DEALER)
        made.append(socket)
        socket.connect(rig.url.removeprefix("zmq+"))
        return socket

    yield make
    context.destroy(linger=0)


def wait(link: Link) -> None:
    assert link.pollable.poll(FAILURE_MS), "nothing came"


def drain(link: Link) -> None:
    """Until all that waits is written."""
    while not link.flush():
        assert link.pollable.poll(FAILURE_MS, zmq.POLLOUT), "nothing is taken"


def test_port_0_becomes_the_port_that_was_found(rig: Link) -> None:
    """So that a rig in a test or a script can say where it is."""
    assert rig.url.startswith("zmq+tcp://127.0.0.1:")
    assert not rig.url.endswith(":0")
    assert rig.url in rig.describe()


def test_peers_are_told_apart_and_answered_apart(rig: Link) -> None:
    """A second daemon gets its own number, and only its own answers."""
    one, two = open_link(rig.url, DAEMON), open_link(rig.url, DAEMON)
    peers = []
    for link, text in ((one, b"one"), (two, b"two")):
        link.send(text)
        drain(link)
        wait(rig)
        (received,) = rig.receive()
        assert received.data == text
        peers.append(received.peer)
    assert peers[0] != peers[1]
    for peer, text in zip(peers, (b"for one", b"for two"), strict=True):
        rig.send(text, peer)
    for link, text in ((one, b"for one"), (two, b"for two")):
        wait(link)
        assert [received.data for received in link.receive()] == [text]
        link.close()


def test_a_peer_that_speaks_is_never_forgotten_for_strangers(
    rig: Link, stranger: Callable[[], Any]
) -> None:
    """More passers-by than the rig remembers do not cost it its daemon."""
    daemon = open_link(rig.url, DAEMON)
    daemon.send(b"hello")
    drain(daemon)
    wait(rig)
    (hello,) = rig.receive()
    for _ in range(MAX_PEERS + 10):
        passer_by = stranger()
        passer_by.send(b"psst")
        wait(rig)
        rig.receive()
        passer_by.close(0)
        daemon.send(b"still here")
        wait(rig)
        assert rig.receive()[0].peer == hello.peer
    rig.send(b"good", hello.peer)
    wait(daemon)
    assert [one.data for one in daemon.receive()] == [b"good"]
    daemon.close()


def test_an_answer_to_nobody_is_counted_and_dropped(rig: Link) -> None:
    """A peer that was never there, or has gone, does not hold up the others."""
    rig.send(b"anybody?", 12345)
    assert rig.flush()
    assert rig.statistics().errors == {"no peer": 1}


@pytest.mark.parametrize("parts", [[b"a", b"b"], [b""] * 50, [b"x"] * 1000])
def test_messages_of_several_parts_are_refused(
    rig: Link, stranger: Callable[[], Any], parts: list[bytes]
) -> None:
    """One frame is one part; what comes after it is served."""
    peer = stranger()
    peer.send_multipart(parts)
    peer.send(b"sound")
    received: list[Any] = []
    while not received:
        wait(rig)
        received += rig.receive()
    assert [one.data for one in received] == [b"sound"]
    assert rig.statistics().errors == {"parts": 1}


def test_a_message_beyond_the_limit_ends_the_connection_and_nothing_else(
    rig: Link, stranger: Callable[[], Any]
) -> None:
    """It is cut off by its announced length, before it takes memory."""
    largest = limits.HEADER_BYTES + limits.MAX_MESSAGE_BODY_BYTES + limits.CRC_BYTES
    peer = stranger()
    monitor = peer.get_monitor_socket(zmq.EVENT_DISCONNECTED)
    peer.send(bytes(largest + 1))
    assert monitor.poll(FAILURE_MS), "the connection stands"
    monitor.close(0)
    peer.disable_monitor()
    assert rig.receive() == []
    other = stranger()
    other.send(bytes(largest))
    wait(rig)
    assert len(rig.receive()[0].data) == largest


def test_a_daemon_may_speak_before_its_rig_is_there(folder: Any) -> None:
    """What it says waits, bounded, and arrives in order when the rig comes."""
    url = f"zmq+ipc://{folder}/s"
    daemon = open_link(url, DAEMON)
    daemon.send(b"one")
    daemon.send(b"two")
    assert daemon.wants_write
    assert not daemon.flush()
    rig = open_link(url, RIG)
    assert daemon.pollable.poll(FAILURE_MS, zmq.POLLOUT)
    daemon.send(b"three")
    drain(daemon)
    received: list[bytes] = []
    while len(received) < 3:
        wait(rig)
        received += [one.data for one in rig.receive()]
    assert received == [b"one", b"two", b"three"]
    daemon.close()
    rig.close()


def test_a_queue_that_was_written_has_room_again(folder: Any) -> None:
    """What went out counts no more when the next rig is waited for."""
    url = f"zmq+ipc://{folder}/s"
    daemon = open_link(url, DAEMON)
    for _ in range(limits.MAX_BACKLOG_BYTES // limits.MESSAGE_BLOCK_BYTES + 1):
        daemon.send(bytes(limits.MESSAGE_BLOCK_BYTES))
    rig = open_link(url, RIG)
    drain(daemon)
    rig.close()
    for _ in range(1000):
        if not daemon.pollable.poll(0, zmq.POLLOUT):
            break
        # Its end comes beside the socket: give ZeroMQ a turn.
        daemon.pollable.poll(10)
    daemon.send(b"next")
    assert daemon.wants_write
    daemon.close()


def test_a_daemon_without_a_rig_holds_a_bounded_queue(folder: Any) -> None:
    """About MAX_BACKLOG_BYTES, then the line counts as lost."""
    daemon = open_link(f"zmq+ipc://{folder}/nobody", DAEMON)
    for _ in range(limits.MAX_BACKLOG_BYTES // limits.MESSAGE_BLOCK_BYTES + 1):
        daemon.send(bytes(limits.MESSAGE_BLOCK_BYTES))
    with pytest.raises(LinkLost, match=r"the rig takes nothing; [0-9]+ bytes wait"):
        daemon.send(b"one too many")
    daemon.close()


def test_a_rig_whose_daemon_does_not_read_goes_on_and_counts(zmq_pair: Any) -> None:
    """What it cannot send is lost and told, as on a wire; it never stops measuring."""
    frame = bytes(limits.MESSAGE_BLOCK_BYTES)
    for _ in range(2000):
        zmq_pair.rig.send(frame, zmq_pair.peer)
    assert zmq_pair.rig.statistics().errors["dropped"] > 0
    after = [b"after %d" % number for number in range(5)]
    for text in after:
        zmq_pair.rig.send(text, zmq_pair.peer)
    received: list[bytes] = []
    while after[-1] not in received:
        zmq_pair.turn()
        zmq_pair.wait()
        received += [one.data for one in zmq_pair.daemon.receive()]
    assert received[-5:] == after
    assert set(received[:-5]) == {frame}


def test_a_flood_is_taken_in_batches(zmq_pair: Any) -> None:
    """One call returns soon, whatever waits."""
    for _ in range(600):
        zmq_pair.daemon.send(b"x")
    largest, taken = 0, 0
    while taken < 600:
        zmq_pair.wait()
        zmq_pair.turn()
        batch = zmq_pair.rig.receive()
        largest, taken = max(largest, len(batch)), taken + len(batch)
    assert largest <= 256
