"""`python -m mock_rig`: the rig as a process."""

import json
import signal
import sys
import time
from pathlib import Path
from typing import Any

import click
import numpy as np
import zmq
from numpy.typing import NDArray

from drivers.errors import DriverError, LinkLost
from drivers.limits import MAX_SAMPLES
from drivers.link import Link
from drivers.open import RIG, open_link
from mock_rig.faults import KINDS, FaultScript, FaultSpecError
from mock_rig.options import RigOptions
from mock_rig.plant import Plant
from mock_rig.plants import PLANTS
from mock_rig.responder import Responder
from mock_rig.runner import Crash

EXIT_LINK = 4
AGAIN_S = 0.1
"""After this time a line that broke is opened again."""

FAULT_HELP = "\n".join(f"  {kind:15s} {row.meaning} ({row.size:g})" for kind, row in KINDS.items())


SAMPLES = click.IntRange(1, MAX_SAMPLES)


@click.command(
    help="A rig made of software, for rehearsals.\n\nPrints one line of JSON each time it "
    "listens: what it listens on and what a daemon connects to.\n\nExit codes: 0 stopped by "
    f"a signal, 2 wrong arguments, {EXIT_LINK} the link cannot be opened.",
    epilog="\b\nFaults, written KIND@trial=N (in that trial), KIND@from=N (from then on) or\n"
    "KIND@p=X (in each trial with that probability), then ,size=S if the default in\n"
    "brackets does not fit:\n" + FAULT_HELP,
)
@click.option("--plant", type=click.Choice(list(PLANTS)), default="bead_axis", show_default=True)
@click.option(
    "--link",
    required=True,
    help="pty:///path, serial:///dev/NAME?baud=N, zmq+ipc:///path or zmq+tcp://127.0.0.1:PORT",
)
@click.option("--seed", default=0, show_default=True, help="Of all noise and faults.")
@click.option("--real-time", is_flag=True, help="Keep the host's time instead of jumping ahead.")
@click.option("--fault", "faults", multiple=True, metavar="SPEC", help="See below; repeatable.")
@click.option("--rig-starts", is_flag=True, help="Start armed trials itself.")
@click.option("--sample-type", type=click.Choice(["f4", "f8"]), default="f4", show_default=True)
@click.option("--table-capacity", type=SAMPLES, default=200_000, show_default=True, help="Samples.")
@click.option("--max-samples", type=SAMPLES, default=2_000_000, show_default=True)
@click.option("--watchdog-ms", type=click.IntRange(10, 600_000), default=1000, show_default=True)
@click.option("--keep-nothing", is_flag=True, help="Refuse every resend request.")
@click.option(
    "--reference",
    type=click.Path(exists=True, dir_okay=False),
    help="NPY file, (samples, outputs): the rig then owns the reference.",
)
def main(plant: str, link: str, seed: int, faults: tuple[str, ...], **options: Any) -> None:
    try:
        script = FaultScript(faults, seed)
        chosen = _options(options, plant, seed)
    except (FaultSpecError, ReferenceUnreadable) as error:
        raise click.UsageError(str(error)) from None
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(0))
    signal.signal(signal.SIGINT, lambda *_: sys.exit(0))
    try:
        serve(plant, link, chosen, script)
    except DriverError as error:
        click.echo(f"mock_rig: {error}", err=True)
        sys.exit(EXIT_LINK)


class ReferenceUnreadable(Exception):
    """The file of the rig's own reference; says what was expected."""


def _reference(path: str, plant: str) -> NDArray[np.float64]:
    """Raises ReferenceUnreadable."""
    n_outputs = len(PLANTS[plant](0).outputs)
    try:
        with Path(path).open("rb") as file:
            found: NDArray[Any] = np.lib.format.read_array(file, allow_pickle=False)
    except OSError as error:
        raise ReferenceUnreadable(f"{path}: {error.strerror}") from None
    except (ValueError, EOFError):
        raise ReferenceUnreadable(f"{path}: expected an NPY file, found something else") from None
    if found.dtype.kind not in "fiu":
        raise ReferenceUnreadable(f"{path}: expected an array of numbers, found {found.dtype}")
    values = found.astype(np.float64)
    if values.ndim != 2 or values.shape[1] != n_outputs or not 0 < len(values) <= MAX_SAMPLES:
        raise ReferenceUnreadable(
            f"{path}: shape {values.shape}; {plant} needs (samples, {n_outputs})"
        )
    if not np.isfinite(values).all():
        raise ReferenceUnreadable(f"{path}: holds values that are not finite")
    return values


def _options(options: dict[str, Any], plant: str, seed: int) -> RigOptions:
    path = options["reference"]
    reference = None if path is None else _reference(path, plant)
    return RigOptions(
        fast=not options["real_time"],
        rig_starts=options["rig_starts"],
        sample_type=options["sample_type"],
        table_capacity=options["table_capacity"],
        max_samples=options["max_samples"],
        samples_kept=not options["keep_nothing"],
        watchdog_ms=options["watchdog_ms"],
        reference=reference,
        seed=seed,
    )


def serve(plant: str, url: str, options: RigOptions, script: FaultScript) -> None:
    """Until a signal comes; a crash closes the link and comes back as a rig that knows nothing."""
    while True:
        link = open_link(url, RIG)
        try:
            # A port that the system chose stays the same when the rig comes back.
            url = link.url
            print(json.dumps(_announcement(link, plant)), flush=True)
            _loop(link, _rig(PLANTS[plant](options.seed), link, options, script))
        except Crash as crash:
            link.close()
            time.sleep(crash.away_s)
            script = script.without_struck("crash")
        except LinkLost as lost:
            click.echo(f"mock_rig: {lost}", err=True)
            link.close()
            time.sleep(AGAIN_S)
        finally:
            link.close()


def _rig(plant: Plant, link: Link, options: RigOptions, script: FaultScript) -> Responder:
    now_ns = time.monotonic_ns()
    return Responder(plant, options, script, link.max_body, link.block_bytes, now_ns)


def _announcement(link: Link, plant: str) -> dict[str, str]:
    """A pseudo-terminal is made by the rig; to the daemon it is a serial port."""
    url = link.url
    connect = "serial" + url.removeprefix("pty") if url.startswith("pty:") else url
    return {"listening": url, "connect": connect, "plant": plant, "is": link.describe()}


def _loop(link: Link, rig: Responder) -> None:
    poller = zmq.Poller()
    while True:
        poller.register(link.pollable, zmq.POLLIN | (zmq.POLLOUT if link.wants_write else 0))
        now_ns = time.monotonic_ns()
        wait_ns = rig.next_wake_ns(now_ns, room=not link.wants_write) - now_ns
        poller.poll(max(0, -(-wait_ns // 1_000_000)))
        link.flush()
        for data, peer in link.receive():
            rig.receive(data, peer, time.monotonic_ns())
        rig.advance(time.monotonic_ns(), room=not link.wants_write)
        for frame, peer in rig.outgoing(time.monotonic_ns()):
            link.send(frame, peer)
        link.flush()


if __name__ == "__main__":
    main()
