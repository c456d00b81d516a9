"""Clients that know nothing of this project: the examples of OPERATOR.md, run as they are written.

Source of the check: pyzmq's own DEALER and SUB sockets, in a process that imports nothing of ours.
"""

import json
import re
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import zmq

import trialrunner
from trialrunner.clock import ManualClock
from trialrunner.operator_messages import OperatorAnswer, OperatorRequest
from trialrunner.operator_socket import OperatorSocket
from trialrunner.telemetry import Publisher

pytestmark = pytest.mark.slow


def example(name: str) -> str:
    """The code of one example, exactly as the document shows it."""
    text = (Path(trialrunner.__file__).parent / "OPERATOR.md").read_text(encoding="utf-8")
    [code] = re.findall(rf"<!-- example: {name} -->\n```python\n(.*?)```", text, re.DOTALL)
    return str(code)


def run(code: str, url: str, socket: "zmq.Socket[Any]", serve: Callable[[], None]) -> str:
    """What the example prints, while `serve` is called for whatever arrives at `socket`.

    -I keeps the checkout off its path.
    """
    command = [sys.executable, "-I", "-c", code, url]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as client:
        assert client.stdout is not None
        poller = zmq.Poller()
        poller.register(socket, zmq.POLLIN)
        poller.register(client.stdout.fileno(), zmq.POLLIN)
        while client.stdout.fileno() not in (ready := dict(poller.poll(20_000))):
            if not ready:
                client.kill()
                pytest.fail("the example neither asked nor printed anything")
            serve()
        printed = client.stdout.read()
    assert client.returncode == 0
    return printed


def test_the_request_example_pauses_a_daemon(tmp_path_factory: pytest.TempPathFactory) -> None:
    """It is understood, and it understands the answer."""
    asked: list[OperatorRequest] = []
    with zmq.Context() as context:
        daemon = OperatorSocket(context, f"ipc://{tmp_path_factory.mktemp('x')}/run.command")

        def serve() -> None:
            for handle, request in daemon.receive():
                asked.append(request)
                text = "paused before trial 8"
                daemon.answer(handle, OperatorAnswer(request.id, True, text, 8, "2026-12-01"))

        printed = run(example("request"), daemon.url, daemon.socket, serve)
        daemon.close()
    assert printed == "True 8 paused before trial 8\n"
    assert [(one.verb, one.who, one.why) for one in asked] == [("pause", "cell 3", "lunch")]


def test_the_telemetry_example_sees_the_state_at_once(
    tmp_path_factory: pytest.TempPathFactory,
) -> None:
    """Although it comes after the fact."""
    with zmq.Context() as context:
        url = f"ipc://{tmp_path_factory.mktemp('x')}/run.telemetry"
        publisher = Publisher(context, url, ManualClock())
        publisher.publish("status", {"state": "running", "trial": 8, "norm_last": 0.25})
        printed = run(example("telemetry"), url, publisher.socket, publisher.serve_subscriptions)
        publisher.close()
    assert printed == "running 8 0.25\n"


def test_the_examples_are_as_short_as_promised() -> None:
    """A stranger can take them in at a glance."""
    for name in ("request", "telemetry"):
        assert len([line for line in example(name).splitlines() if line]) <= 10


def test_a_plain_req_client_can_halt(tmp_path_factory: pytest.TempPathFactory) -> None:
    """The simplest pattern of all, with its envelope handled by the library."""
    code = """
import json, sys, uuid, zmq
socket = zmq.Context.instance().socket(zmq.REQ)
socket.linger = 0
socket.connect(sys.argv[1])
socket.send_json({"version": 1, "id": str(uuid.uuid4()), "verb": "halt", "who": "x", "why": "y"})
print(json.dumps(socket.recv_json()))
"""
    with zmq.Context() as context:
        daemon = OperatorSocket(context, f"ipc://{tmp_path_factory.mktemp('x')}/run.command")

        def serve() -> None:
            for handle, request in daemon.receive():
                answer = OperatorAnswer(request.id, True, f"{request.verb} done", 8, "2026-12-01")
                daemon.answer(handle, answer)

        printed = run(code, daemon.url, daemon.socket, serve)
        daemon.close()
    assert json.loads(printed)["text"] == "halt done"
