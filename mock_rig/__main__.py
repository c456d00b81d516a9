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

from drivers.errors import DriverError, LinkLost
from drivers.link import Link
from drivers.open import RIG, open_link
from mock_rig.faults import KINDS, FaultScript, FaultSpecError
from mock_rig.options import RigOptions
from mock_rig.plants import PLANTS
from mock_rig.responder import Responder
from mock_rig.runner import Crash

EXIT_LINK = 4

FAULT_HELP = "\n".join(
    f"  {kind:15s} {meaning} ({size:g})" for kind, (size, meaning) in KINDS.items()
)


@click.command(
    help="A rig made of software.\n\nExit codes: 0 stopped by a signal, 2 wrong arguments, "
    f"{EXIT_LINK} the link cannot be opened.",
    epilog="\b\nFaults, written KIND@trial=N, KIND@from=N or KIND@p=X, then ,size=S:\n"
    + FAULT_HELP,
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
@click.option("--table-capacity", default=200_000, show_default=True, help="Samples.")
@click.option("--max-samples", default=2_000_000, show_default=True)
@click.option("--watchdog-ms", default=1000, show_default=True)
@click.option("--keep-nothing", is_flag=True, help="Refuse every resend request.")
@click.option(
    "--reference", type=click.Path(exists=True, dir_okay=False), help="NPY file: own reference."
)
def main(plant: str, link: str, seed: int, faults: tuple[str, ...], **options: Any) -> None:
    try:
        script = FaultScript(faults, seed)
        chosen = _options(options, seed)
    except (FaultSpecError, ValueError, OSError) as error:
        raise click.UsageError(str(error)) from None
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(0))
    signal.signal(signal.SIGINT, lambda *_: sys.exit(0))
    try:
        serve(plant, link, chosen, script)
    except DriverError as error:
        click.echo(f"mock_rig: {error}", err=True)
        sys.exit(EXIT_LINK)


def _options(options: dict[str, Any], seed: int) -> RigOptions:
    path = options["reference"]
    reference = None if path is None else np.load(Path(path), allow_pickle=False).astype(float)
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
        print(json.dumps({"listening": url, "plant": plant, "is": link.describe()}), flush=True)
        rig = Responder(
            PLANTS[plant](options.seed),
            options,
            script,
            link.max_body,
            link.block_bytes,
            time.monotonic_ns(),
        )
        try:
            _loop(link, rig)
        except Crash as crash:
            link.close()
            time.sleep(crash.away_s)
            # What killed it once would kill it for ever.
            script = FaultScript(
                [s for s in script.texts if not s.startswith("crash")], options.seed
            )
        except LinkLost as lost:
            click.echo(f"mock_rig: {lost}", err=True)
            link.close()
            time.sleep(0.1)
        finally:
            link.close()


def _loop(link: Link, rig: Responder) -> None:
    poller = zmq.Poller()
    while True:
        poller.register(link.pollable, zmq.POLLIN | (zmq.POLLOUT if link.wants_write else 0))
        wait_ns = rig.next_wake_ns(time.monotonic_ns()) - time.monotonic_ns()
        poller.poll(max(0, -(-wait_ns // 1_000_000)))
        for data, peer in link.receive():
            rig.receive(data, peer, time.monotonic_ns())
        rig.advance(time.monotonic_ns())
        for frame, peer in rig.outgoing(time.monotonic_ns()):
            link.send(frame, peer)
        link.flush()


if __name__ == "__main__":
    main()
