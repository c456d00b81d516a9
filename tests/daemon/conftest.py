"""A whole daemon in one thread: session, link in memory, mock rig, hand-moved clock."""

import random

import pytest

from drivers.memory_link import MemoryLink
from mock_rig.faults import FaultScript
from mock_rig.options import RigOptions
from mock_rig.plant import ChannelInfo
from mock_rig.responder import Responder
from mock_rig.runner import Crash
from trialrunner.clock import ManualClock
from trialrunner.config import load_text
from trialrunner.job_queue import InlineExecutor
from trialrunner.launch import Builder, session_settings
from trialrunner.observer import Observer
from trialrunner.operator_desk import answer, rule
from trialrunner.operator_messages import OperatorRequest
from trialrunner.session import Session

CONFIG = """
[run]
name = "bench"
record = "{record}"

[link]
url = "serial:///dev/bench"
silence_s = 1.0
answer_timeout_s = 0.1
clock_exchanges = 3
ready_timeout_s = 30.0

[trial]
n_samples = {n_samples}
period_s = 0.01
start = "{start}"

[[inputs]]
name = "force"
unit = "N"
low = -10.0
high = 10.0

[[outputs]]
name = "position"
unit = "m"
low = -10.0
high = 10.0
start_tolerance = 0.5

[reference]
kind = "profile"
waypoints = [[0.0], [1.0], [0.0]]
velocity_limit_per_s = [8.0]
acceleration_limit_per_s2 = [80.0]
jerk_limit_per_s3 = [4000.0]

[law]
kind = "pd"
proportional = 0.6
lead_samples = 1

[filter]
bandwidth_hz = 20.0

[stop]
trials = {trials}
floor_trials = 3
"""


class LinePlant:
    """A first-order plant with one sample of delay: quick, and an easy thing to learn."""

    name = "line"
    period_ticks = 10_000
    inject = "actuator"
    return_s = 0.2
    inputs = (ChannelInfo("force", "N", -10.0, 10.0),)
    outputs = (ChannelInfo("position", "m", -10.0, 10.0),)
    auxiliary = (ChannelInfo("warmth", "Cel", 0.0, 100.0),)

    def __init__(self, seed=0, noise=1e-4):
        self.seed, self.noise = seed, noise

    def begin(self, trial, reference0, disturbance):
        self.chance = random.Random(f"{self.seed}/{trial}")
        self.effect = disturbance
        self.position = reference0[0] + sum(disturbance.offset[:1])
        return [self.position]

    def step(self, feedforward, reference):
        noise = self.noise * self.effect.noise * self.chance.gauss(0, 1)
        measured = self.position + noise
        push = 0.6 * self.effect.gain * feedforward[0] + 0.4 * reference[0]
        self.position += 0.7 * (push - self.position)
        return [measured], [20.0]


class World:
    """Runs daemon and rig against each other until something is the case."""

    def __init__(
        self,
        folder,
        *,
        n_samples=100,
        trials=8,
        start="daemon",
        faults=(),
        seed=0,
        options=None,
        overrides=(),
        plant=None,
        record="run.trialrecord",
    ):
        self.clock = ManualClock()
        text = CONFIG.format(
            record=folder / record, n_samples=n_samples, trials=trials, start=start
        )
        self.config = load_text(text, overrides, "bench.toml")
        # Small chunks, so that a trial takes several turns and things can happen in its middle.
        self.options = options or RigOptions(rig_starts=start == "rig", seed=seed, chunk=20)
        self.faults, self.seed = tuple(faults), seed
        self.plant = plant or LinePlant(seed)
        self.published, self.logged = [], []
        self.far = None
        self.rig = None
        self.rig_back_ns = None
        self.line_down = False
        self.disturb = lambda frame: (frame,)
        self.crashes = 0
        sessions = iter(range(1000 * (seed + 1), 10**9))
        self.observer = Observer(
            run="bench",
            record=str(self.config.record_path),
            link_url="memory://rig",
            trials=trials,
            clock=self.clock,
            publish=lambda topic, values: self.published.append((topic, dict(values))),
            log=lambda level, event, **values: self.logged.append((level, event, values)),
        )
        executor = InlineExecutor()
        self.session = Session(
            session_settings(self.config, exit_on_halt=False),
            self.clock,
            open_link=self.open_link,
            new_session=lambda: next(sessions),
            build=Builder(self.config, self.clock, executor),
            executor=executor,
            observer=self.observer,
        )
        self.boot_rig()

    # -- the line and the rig ---------------------------------------------------------------

    def open_link(self):
        from drivers.errors import LinkError

        if self.line_down:
            raise LinkError("memory://rig: there is no port")
        near, self.far = MemoryLink.pair()
        self.far.fault = lambda frame: self.disturb(frame)
        return near

    def boot_rig(self):
        self.rig = Responder(
            self.plant,
            self.options,
            FaultScript(self.faults, self.seed),
            131072,
            65536,
            self.clock.now_ns(),
        )

    def unplug(self):
        self.line_down = True
        if self.far is not None:
            self.far.cut()

    def plug_in(self):
        self.line_down = False

    def turn(self):
        self.session.turn()
        now_ns = self.clock.now_ns()
        if self.rig is None and self.rig_back_ns is not None and now_ns >= self.rig_back_ns:
            self.faults = tuple(f for f in self.faults if not f.startswith("crash"))
            self.boot_rig()
        if self.rig is not None:
            self.turn_rig(now_ns)
        self.session.turn()
        wakes = [self.session.next_wake_ns()]
        if self.rig is not None:
            wakes.append(self.rig.next_wake_ns(now_ns))
        if self.rig_back_ns is not None and self.rig is None:
            wakes.append(self.rig_back_ns)
        # At least a little: so that a wake that is due and does nothing cannot stop time.
        self.clock.advance_to(max(min(wakes), now_ns + 50_000))

    def turn_rig(self, now_ns):
        from drivers.errors import LinkLost

        try:
            for data, peer in self.far.receive() if self.far is not None else ():
                self.rig.receive(data, peer, now_ns)
            self.rig.advance(now_ns)
            for frame, _ in self.rig.outgoing(now_ns):
                if self.far is not None:
                    self.far.send(frame)
        except LinkLost:
            self.far = None
        except Crash as crash:
            self.crashes += 1
            self.rig, self.rig_back_ns = None, now_ns + int(crash.away_s * 1e9)

    # -- waiting ----------------------------------------------------------------------------

    def until(self, condition, turns=200_000):
        for _ in range(turns):
            if condition():
                return
            if self.session.finished:
                break
            self.turn()
        pytest.fail(
            f"never happened: cycle {self.session.cycle}, trial {self.session.state.trial}, "
            f"last {self.logged[-5:]}"
        )

    def run(self):
        self.until(lambda: self.session.finished)
        self.close()
        return self

    def close(self):
        self.session.line.close()
        if self.session.built is not None:
            self.session.built.writer.close()

    def until_trial(self, trial):
        self.until(lambda: self.session.state.trial >= trial)

    def until_state(self, state):
        self.until(lambda: self.session.cycle.state == state)

    def tell(self, verb, why="test", **arguments):
        number = len(self.published)
        request = OperatorRequest(f"request-{number:08d}-{verb}", verb, "tester", why, arguments)
        ruling = rule(request, self.session)
        reply = answer(request, ruling, self.clock.utc(), {})
        self.session.carry_out(request, ruling, reply)
        return reply

    def topics(self, topic):
        return [values for name, values in self.published if name == topic]


@pytest.fixture
def world(tmp_path):
    """Builds worlds in this test's directory and closes them at its end."""
    made = []

    def make(**choices):
        made.append(World(tmp_path, **choices))
        return made[-1]

    yield make
    for one in made:
        one.close()
