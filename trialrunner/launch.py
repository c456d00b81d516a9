"""Puts a daemon together from a configuration: locks, sockets, record, session."""

from __future__ import annotations

import ctypes
import secrets
import signal
import sys
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import zmq

from drivers.messages import Channel, StartMode
from drivers.open import open_link
from trialrunner import __version__
from trialrunner.advancing import make_advancer
from trialrunner.agreement import LimitsInForce, agree, limits_in_force
from trialrunner.clock import Clock, SystemClock
from trialrunner.config import Config, config_difference
from trialrunner.conversation.events import Greeted
from trialrunner.core.advance import Advancer
from trialrunner.core.trial import Array
from trialrunner.daemon import Daemon, Waker
from trialrunner.locks import hold_lock, link_lock_path
from trialrunner.logs import get_logger
from trialrunner.observer import Observer
from trialrunner.operator_messages import OperatorAnswer, parse_answer
from trialrunner.operator_socket import OperatorSocket
from trialrunner.record import DaemonRow, RecordReader, RecordWriter, RunFacts, sqlite_warning
from trialrunner.run_parts import Built, RunRefused, SessionSettings
from trialrunner.session import Session
from trialrunner.telemetry import Publisher
from trialrunner.trial_intake import Intake

_M_TRIM_THRESHOLD, _M_TOP_PAD, _M_MMAP_THRESHOLD = -1, -2, -3
_KEEP_BYTES = 1 << 30


def keep_freed_memory() -> bool:
    """Tell glibc to keep freed arrays: page faults cost more than the FFTs at long horizons.

    True if the C library took it; other libraries have no mallopt and lose nothing but speed.
    """
    try:
        mallopt = ctypes.CDLL(None).mallopt
    except (AttributeError, OSError):
        return False
    return all(
        mallopt(option, _KEEP_BYTES if option == _M_MMAP_THRESHOLD else _KEEP_BYTES // 4)
        for option in (_M_MMAP_THRESHOLD, _M_TRIM_THRESHOLD, _M_TOP_PAD)
    )


def answer_quickly() -> None:
    """Let the loop interrupt the update's thread after 0.1 ms instead of 5 ms."""
    sys.setswitchinterval(1e-4)


@dataclass(frozen=True)
class Builder:
    """Builds what needs the rig's greeting; called once, in the loop's thread."""

    config: Config
    clock: Clock
    executor: Executor
    """The record's connection belongs to this executor's thread."""
    new_run: bool = False
    """Begin a new record beside one of another configuration."""

    def __call__(self, greeted: Greeted) -> Built:
        """Raises RunRefused, RecordError, CoreError."""
        channels = (*greeted.inputs, *greeted.outputs, *greeted.auxiliary)
        self._require_agreement(greeted, channels)
        limits = limits_in_force(self.config, channels)
        sample_type = greeted.greeting.sample_type
        reference = self.config.load_reference().astype(f"<{sample_type}").astype(np.float64)
        names = tuple(channel.name for channel in greeted.auxiliary)
        settings = self.config.run_settings()
        advancer = make_advancer(settings, limits, reference, sample_type, names)
        intake = Intake(greeted, reference)
        writer = self._record(advancer, greeted, limits, reference)
        return Built(advancer, writer, intake, writer.state, writer.carry)

    def _require_agreement(self, greeted: Greeted, channels: tuple[Channel, ...]) -> None:
        found = agree(self.config, greeted.greeting, channels)
        if found:
            lines = "\n  ".join(found)
            raise RunRefused(
                f"the rig {greeted.greeting.name} is not the one that the configuration "
                f"describes:\n  {lines}"
            )

    def _record(
        self, advancer: Advancer, greeted: Greeted, limits: LimitsInForce, reference: Array
    ) -> RecordWriter:
        path = self.config.record_path
        if path.exists() and not self.new_run:
            return self._resume(path, limits, reference, greeted.greeting.sample_type)
        state, carry = advancer.begin(self.config.load_feedforward())
        facts = RunFacts.of(
            config_text=self.config.text,
            greeted=greeted,
            limits=limits,
            version=__version__,
            started_utc=self.clock.utc(),
        )
        return self._in_executor(
            lambda: RecordWriter.create(
                path, facts, reference, state, carry, self.clock.now_ns, self.new_run
            )
        )

    def _resume(
        self, path: Path, limits: LimitsInForce, reference: Array, sample_type: str
    ) -> RecordWriter:
        with RecordReader(path) as reader:
            changed = config_difference(reader.facts.config_text, self.config.text)
            if not np.array_equal(reader.reference, reference):
                changed.append("reference: the samples differ from those of the record")
            if reader.facts.sample_type != sample_type:
                changed.append(f"rig sample type: {reader.facts.sample_type} -> {sample_type}")
            if not reader.facts.same_limits(limits):
                changed.append("rig limits: not those under which the record was begun")
        if changed:
            lines = "\n  ".join(changed)
            raise RunRefused(
                f"{path} was recorded with other settings:\n  {lines}\nGo back to the old ones to "
                "resume it, or begin a new run with --new-run (the old record is kept beside it)."
            )
        daemon = DaemonRow.start(self.config.text, __version__, self.clock.utc())
        return self._in_executor(lambda: RecordWriter.open(path, daemon, self.clock.now_ns))

    def _in_executor(self, work: Callable[[], RecordWriter]) -> RecordWriter:
        return self.executor.submit(work).result()


def earlier_answers(path: Path) -> dict[str, OperatorAnswer]:
    """Answers to requests on record by their id: one sent again after a restart is not redone."""
    if not path.exists():
        return {}
    with RecordReader(path) as reader:
        return {row.id: parse_answer(row.answer.encode()) for row in reader.requests()}


@dataclass(frozen=True)
class Launched:
    daemon: Daemon
    session: Session
    waker: Waker


@contextmanager
def launched(
    config: Config, *, new_run: bool = False, exit_on_halt: bool = False
) -> Iterator[Launched]:
    """A daemon ready to run; leaving the context closes link, record, sockets and locks.

    Raises Busy, LinkError, RunRefused, RecordError.
    """
    with ExitStack() as stack:
        url = config.link.url
        stack.enter_context(hold_lock(link_lock_path(url), f"the link {url}"))
        clock = SystemClock()
        waker = Waker()
        stack.callback(waker.close)
        executor = ThreadPoolExecutor(1, thread_name_prefix="update")
        stack.callback(executor.shutdown)
        context = stack.enter_context(zmq.Context())
        operator = OperatorSocket(
            context, config.command_url, known=earlier_answers(config.record_path).get
        )
        stack.callback(operator.close)
        publisher = Publisher(context, config.telemetry_url)
        stack.callback(publisher.close)
        logger = get_logger("trialrunner")
        known_bug = sqlite_warning()
        if known_bug:
            logger.info(known_bug)
        observer = Observer(
            run=config.run.name,
            record=str(config.record_path),
            link_url=url,
            trials=config.stop.trials,
            clock=clock,
            publish=publisher.publish,
            log=lambda level, event, **values: getattr(logger, level)(event, **values),
        )
        session = Session(
            session_settings(config, exit_on_halt),
            clock,
            open_link=lambda: open_link(url, "daemon"),
            new_session=lambda: secrets.randbelow(2**32 - 1) + 1,
            build=Builder(config, clock, executor, new_run),
            executor=executor,
            observer=observer,
            wake=waker.wake,
        )
        stack.callback(_close_session, session, executor)
        daemon = Daemon(session, operator, publisher, waker)
        yield Launched(daemon, session, waker)


def session_settings(config: Config, exit_on_halt: bool) -> SessionSettings:
    return SessionSettings(
        name=config.run.name,
        timing=config.link,
        start=StartMode[config.trial.start.upper()],
        dwell_s=config.trial.dwell_s,
        update_deadline_s=config.learn.update_deadline_s,
        stop_grace_s=config.run.stop_grace_s,
        exit_on_halt=exit_on_halt or config.run.on_halt == "exit",
    )


def catch_signals(waker: Waker) -> None:
    """SIGTERM and SIGINT end the run through the loop."""
    signal.signal(signal.SIGTERM, waker.on_signal)
    signal.signal(signal.SIGINT, waker.on_signal)


def _close_session(session: Session, executor: Executor) -> None:
    session.line.close()
    built = session.built
    if built is not None:
        executor.submit(built.writer.close, session.clock.utc()).result()
