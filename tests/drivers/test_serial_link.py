"""Serial ports on pseudo-terminals, which have no baud rate, no modem lines and no counters."""

import fcntl
import os
import pty
import select
import socket
import struct
import termios
import tty
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

import drivers.serial_link
from drivers import limits
from drivers.byte_link import STALL_S, ByteLink
from drivers.errors import LinkBusy, LinkError, LinkLost
from drivers.framing import stuff
from drivers.link import Link
from drivers.open import RIG, open_link

FAILURE_S = 10.0


class BareTerminal:
    """The far end of a serial port without any link on it, to write raw bytes."""

    def __init__(self) -> None:
        self.master, slave = pty.openpty()
        tty.setraw(slave)
        self.name = os.ttyname(slave)
        self._slave = slave
        self.open = True

    @property
    def url(self) -> str:
        return f"serial://{self.name}?baud=115200"

    def unplug(self) -> None:
        if self.open:
            os.close(self.master)
            os.close(self._slave)
        self.open = False


def wait(fd: int) -> None:
    """Until something can be read."""
    assert select.select([fd], [], [], FAILURE_S)[0], "nothing came"


def read(fd: int, count: int) -> bytes:
    """So many bytes, or more if more come with them."""
    data = b""
    while len(data) < count:
        wait(fd)
        data += os.read(fd, 4096)
    return data


def take(link: Link, count: int) -> list[bytes]:
    """At least so many frames."""
    received: list[bytes] = []
    while len(received) < count:
        wait(link.pollable)
        received += [one.data for one in link.receive()]
    return received


@pytest.fixture
def terminal() -> Iterator[BareTerminal]:
    terminal = BareTerminal()
    yield terminal
    terminal.unplug()


def test_garbage_between_frames_costs_nothing_but_itself(terminal: BareTerminal) -> None:
    """Noise, a half frame and an overlong run are counted; the frames around them arrive."""
    link = open_link(terminal.url)
    wire = stuff(b"one") + b"\xff\xee\x00" + stuff(b"two") + b"\x05ab\x00"
    os.write(terminal.master, wire + b"\x21" * 900 + b"\x00" + stuff(b"three"))
    received = take(link, 3)
    assert received == [b"one", b"two", b"three"]
    assert link.receive() == []
    assert link.statistics().errors == {"cobs": 2, "length": 1}
    link.close()


def test_what_was_sent_before_opening_is_not_taken_for_a_frame(terminal: BareTerminal) -> None:
    """The tail of an old frame never joins the first new one."""
    os.write(terminal.master, stuff(b"stale")[:-1])
    link = open_link(terminal.url)
    os.write(terminal.master, b"\x00" + stuff(b"new"))
    assert take(link, 1)[-1] == b"new"
    link.close()


def test_the_first_byte_sent_ends_an_old_half_frame(terminal: BareTerminal) -> None:
    """A rig that still holds half a frame of an earlier daemon loses only that."""
    link = open_link(terminal.url)
    link.send(b"hello")
    assert link.flush()
    assert read(terminal.master, 8) == b"\x00" + stuff(b"hello")
    link.close()


def test_all_byte_values_pass_unchanged(terminal: BareTerminal) -> None:
    """No flow-control character, carriage return or interrupt is eaten or added, both ways."""
    link = open_link(terminal.url)
    every = bytes(range(256)) * 2
    link.send(every)
    assert link.flush()
    assert read(terminal.master, 1 + len(stuff(every))) == b"\x00" + stuff(every)
    os.write(terminal.master, stuff(every))
    assert take(link, 1) == [every]
    link.close()


def test_an_unplugged_port_is_lost(terminal: BareTerminal) -> None:
    """Reading says so in words; closing afterwards is harmless."""
    link = open_link(terminal.url)
    terminal.unplug()
    with pytest.raises(LinkLost, match=r"unplugged|reading failed"):
        link.receive()
    link.close()
    link.close()


def test_writing_to_an_unplugged_port_is_lost(terminal: BareTerminal) -> None:
    """Also if the break is first met while writing."""
    link = open_link(terminal.url)
    terminal.unplug()
    link.send(b"anybody?")
    with pytest.raises(LinkLost, match="writing failed"):
        link.flush()
    link.close()


def test_a_port_in_use_is_busy(terminal: BareTerminal) -> None:
    """A second daemon is told which port and what to do."""
    link = open_link(terminal.url)
    with pytest.raises(LinkBusy, match=f"{terminal.name} is in use.*fuser {terminal.name}"):
        open_link(terminal.url)
    link.close()
    open_link(terminal.url).close()


def test_other_programs_find_the_port_closed_to_them(terminal: BareTerminal) -> None:
    """TIOCEXCL is set while the link is open, and taken back after (TIOCGEXCL, ioctl_tty(2))."""

    def exclusive() -> int:
        asked = fcntl.ioctl(terminal._slave, 0x80045440, bytes(4))
        return int(struct.unpack("i", asked)[0])

    link = open_link(terminal.url)
    assert exclusive() == 1
    link.close()
    assert exclusive() == 0


def test_a_port_without_permission_says_which_group_helps(
    terminal: BareTerminal, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The system refuses; tests may run as root, so that the refusal is played."""

    def refuse(*_: Any, **__: Any) -> int:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("serial.serialposix.os.open", refuse)
    with pytest.raises(LinkError, match=r"no permission to open .* group dialout"):
        open_link(terminal.url)


def test_a_port_that_fails_while_it_is_set_up_is_given_back(
    terminal: BareTerminal, monkeypatch: pytest.MonkeyPatch
) -> None:
    """No descriptor stays open and no lock stays held."""

    def fail(*_: Any) -> None:
        raise termios.error(5, "Input/output error")

    before = len(os.listdir("/proc/self/fd"))
    with monkeypatch.context() as broken:
        broken.setattr(drivers.serial_link, "_end_of_file_means_gone", fail)
        with pytest.raises(LinkError, match="cannot be opened as a serial port"):
            open_link(terminal.url)
    assert len(os.listdir("/proc/self/fd")) == before
    open_link(terminal.url).close()


def test_what_a_port_cannot_do_is_told(terminal: BareTerminal) -> None:
    """A pseudo-terminal has neither low-latency mode nor counters, and takes any baud rate."""
    link = open_link(f"serial://{terminal.name}?baud=1000000&rtscts=true")
    text = link.describe()
    assert "1000000 baud, RTS/CTS, no low-latency mode (" in text
    assert text.endswith("no error counters")
    link.close()


def test_the_uarts_own_counters_are_reported_since_opening(
    terminal: BareTerminal, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As the kernel lays them out (struct serial_icounter_struct); played, for a pty has none."""
    counts = [0] * 20
    counts[6:11] = [100, 200, 300, 400, 500]
    real = fcntl.ioctl

    def ioctl(fd: int, request: int, *rest: Any) -> Any:
        if request == 0x545D:
            return struct.pack("20i", *counts)
        return real(fd, request, *rest)

    monkeypatch.setattr("drivers.serial_link.fcntl.ioctl", ioctl)
    link = open_link(terminal.url)
    assert link.statistics().errors == {}
    counts[6], counts[7], counts[10] = 101, 207, 502
    assert link.statistics().errors == {"framing": 1, "overrun": 7, "buffer overrun": 2}
    link.close()
    assert link.statistics().errors == {}


class ManualClock:
    now = 100.0

    def __call__(self) -> float:
        return self.now


class OnSocket(ByteLink):
    """The byte link on a socket, whose buffer takes and gives room at definite moments."""

    def close(self) -> None:
        self._fd = -1


@pytest.fixture
def far_end() -> Iterator[tuple[OnSocket, socket.socket, ManualClock]]:
    near, far = socket.socketpair()
    far.settimeout(FAILURE_S)
    clock = ManualClock()
    yield OnSocket("test://", near.fileno(), clock), far, clock
    near.close()
    far.close()


def fill(link: ByteLink) -> bytes:
    """Send numbered frames until some wait; what must come out at the far end."""
    wire = b""
    for number in range(1000):
        frame = bytes([number % 250 + 1]) * 600
        link.send(frame)
        wire += stuff(frame)
        link.flush()
    assert link.wants_write
    return wire


def test_a_line_that_takes_nothing_for_seconds_is_lost(far_end: Any) -> None:
    """A driver that never says that the line is dead must not hold the daemon for ever."""
    link, _, clock = far_end
    fill(link)
    clock.now += STALL_S
    assert not link.flush()
    clock.now += 0.1
    with pytest.raises(LinkLost, match="took no byte for 5 s"):
        link.flush()


def test_a_slow_line_is_not_lost(far_end: Any) -> None:
    """As long as some bytes go, patience begins anew, and nothing is lost or doubled."""
    link, far, clock = far_end
    expected = fill(link)
    wire, turns = b"", 0
    while link.wants_write:
        clock.now += 0.9 * STALL_S
        wire += far.recv(100_000)
        link.flush()
        turns += 1
    assert turns > 2
    while len(wire) < len(expected):
        wire += far.recv(100_000)
    assert wire == expected


def test_a_software_rig_drops_what_nobody_reads_and_never_blocks(folder: Path) -> None:
    """Like a UART: it goes on, counts the loss, and the line is in step again afterwards."""
    clock = ManualClock()
    rig = open_link(f"pty://{folder}/tty", RIG, clock)
    frame = bytes(600)
    for _ in range(4 * limits.MAX_BACKLOG_BYTES // len(frame)):
        rig.send(frame)
        rig.flush()
    assert rig.statistics().errors["dropped"] > 1000
    clock.now += 2 * STALL_S
    rig.flush()
    clock.now += 2 * STALL_S
    rig.flush()
    rig.send(b"after")
    reader = os.open(folder / "tty", os.O_RDWR | os.O_NOCTTY)
    wire = b""
    while not wire.endswith(stuff(b"after")):
        rig.flush()
        wait(reader)
        wire += os.read(reader, 4096)
    # The half frame that was on the line already has its own end.
    assert wire.split(b"\0")[-2] + b"\0" == stuff(b"after")
    os.close(reader)
    rig.close()


def test_a_software_rig_is_raw_before_anybody_opens_it(folder: Path) -> None:
    """No echo and no line editing, so that it never hears its own bytes."""
    rig = open_link(f"pty://{folder}/tty", RIG)
    reader = os.open(folder / "tty", os.O_RDWR | os.O_NOCTTY)
    local = termios.tcgetattr(reader)[3]
    assert not local & (termios.ECHO | termios.ICANON | termios.ISIG)
    os.close(reader)
    rig.close()


def test_a_software_rig_outlives_its_daemons(folder: Path) -> None:
    """One after the other opens the port, speaks and leaves; the rig's end stays open."""
    rig = open_link(f"pty://{folder}/tty", RIG)
    for number in range(3):
        daemon = open_link(f"serial://{folder}/tty")
        daemon.send(b"daemon %d" % number)
        assert daemon.flush()
        assert take(rig, 1) == [b"daemon %d" % number]
        daemon.close()
    assert rig.receive() == []
    rig.close()
    assert not (folder / "tty").exists()


def test_closing_a_rig_leaves_another_ones_link_alone(folder: Path) -> None:
    """The path may belong to somebody else by then."""
    old = open_link(f"pty://{folder}/tty", RIG)
    new = open_link(f"pty://{folder}/tty", RIG)
    old.close()
    assert (folder / "tty").is_symlink()
    new.close()
    assert not (folder / "tty").is_symlink()
