"""Sweeps: what every setting of a guard would have said of recorded trials."""

from concurrent.futures import ThreadPoolExecutor

import pytest

from trialrunner.record import RecordReader
from trialrunner.replay import Replay, ReplayError
from trialrunner.sweep import Axis, Task, played, run_task, sweep

QUIET = ["guards.error_growth.action='warn'", "guards.error_growth.growth_action='warn'"]


@pytest.fixture
def faulty(world):
    """A run whose gain rises from trial 8 on, and whose guards only warn."""
    options = {"trials": 14, "faults": ["gain@from=8,size=5"], "overrides": QUIET}
    return world(record="faulty.trialrecord", **options).run().config.record_path


@pytest.fixture
def healthy(world):
    return world(trials=14, record="healthy.trialrecord", overrides=QUIET).run().config.record_path


def swept(paths, texts, fault_at, shares=1):
    with ThreadPoolExecutor(2) as executor:
        axes = [Axis.parse(text) for text in texts]
        return sweep(paths, axes, fault_at, executor, shares)


def test_the_recorded_setting_is_told_exactly_as_recorded(faulty):
    """Delay and false alarms are those that can be counted in the record by hand."""
    with RecordReader(faulty) as reader:
        alarms = [
            one.summary.index
            for one in reader.trials()
            if any(v.guard == "error_growth" and v.level > 0 for v in one.verdicts)
        ]
    (point,) = swept([faulty], ["guards.error_growth.ratio=1.5"], {faulty: 8}).points
    assert point.false_alarms == sum(index < 8 for index in alarms)
    assert point.worst_delay == min(index for index in alarms if index >= 8) - 8


@pytest.mark.parametrize("ratio", ["1.01", "3.0"])
def test_the_first_alarm_is_that_of_a_full_replay(faulty, ratio):
    """Replay runs the law too and parts after its first alarm; up to there both must agree."""
    override = f"guards.error_growth.ratio={ratio}"
    with RecordReader(faulty) as reader:
        first = next(
            row.index
            for row in Replay(reader, [override]).trials()
            if any(v.guard == "error_growth" and v.level > 0 for v in row.replayed.verdicts)
        )
    task = Task(faulty, ((override,),), frozenset({"error_growth"}), 0)
    assert run_task(task).findings[0].delay == first


def test_a_tighter_limit_costs_false_alarms_and_a_wider_one_costs_delay(faulty, healthy):
    found = swept(
        [faulty, healthy],
        ["guards.error_growth.ratio=1.01,2,900", "guards.error_growth.jump_ratio=1.01,2,900"],
        {faulty: 8},
    )
    assert len(found.points) == 9
    tight, wide = found.points[0], found.points[-1]
    assert tight.false_alarms >= wide.false_alarms == 0
    assert wide.missed == 1
    assert found.recommended.false_alarms == found.recommended.missed == 0
    fair = [one for one in found.points if not one.false_alarms and not one.missed]
    assert found.recommended.worst_delay == min(one.worst_delay for one in fair)


def test_shares_change_nothing(faulty, healthy):
    """How the settings are dealt out to workers is no part of the result."""
    texts = ["guards.error_growth.ratio=1.1:3:5"]
    whole = swept([faulty, healthy], texts, {faulty: 8})
    assert swept([faulty, healthy], texts, {faulty: 8}, shares=3) == whole


def test_the_pass_holds_one_trial_at_a_time(healthy):
    """Memory does not grow with the record: earlier trials are let go."""
    import gc
    import weakref

    living: list = []
    most = 0
    with RecordReader(healthy) as reader:
        for recorded, *_ in played(reader):
            living.append(weakref.ref(recorded.trial))
            del recorded, _
            gc.collect()
            most = max(most, sum(one() is not None for one in living))
    assert len(living) >= 14
    assert most <= 1


@pytest.mark.parametrize(
    ("text", "values"),
    [
        ("guards.error_growth.ratio=1.2:3.0:7", ("1.2", "1.5", "1.8", "2.1", "2.4", "2.7", "3.0")),
        ("guards.error_growth.trials_above=1:3:3", ("1", "2", "3")),
        ("guards.error_growth.action=warn,halt", ("warn", "halt")),
    ],
)
def test_axes_are_read(text, values):
    axis = Axis.parse(text)
    assert axis.values == values
    assert axis.guard == "error_growth"


@pytest.mark.parametrize(
    "text",
    ["law.proportional=1:2:3", "guards.x.y=1:2", "guards.x.y=1:1:3", "guards.x.y=1:2:1",
     "guards.x.y=", "guards.x.y=nan:2:3"],
)  # fmt: skip
def test_what_cannot_be_swept_is_refused_in_words(text):
    with pytest.raises(ReplayError, match="--sweep"):
        Axis.parse(text)
