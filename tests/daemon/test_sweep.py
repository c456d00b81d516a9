"""Sweeps: what every setting of a guard would have said of recorded trials."""

import json
import sqlite3
import sys
import tomllib
from concurrent.futures import ThreadPoolExecutor
from xml.etree import ElementTree

import click
import pytest
from click.testing import CliRunner

from trialrunner.cli.replay import command
from trialrunner.config import ConfigError, load_text
from trialrunner.exit_codes import ExitCode
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


def run_cli(*arguments):
    result = CliRunner().invoke(command, [str(one) for one in arguments], standalone_mode=False)
    assert result.exception is None, result.exception
    return result.return_value, result.output


def test_the_command_writes_a_setting_that_loads_and_a_picture(faulty, healthy, tmp_path):
    """In real worker processes, started afresh."""
    toml, picture = tmp_path / "guards.toml", tmp_path / "trade.svg"
    code, output = run_cli(
        faulty, healthy, "--sweep", "guards.error_growth.jump_ratio=1.5,3,50", "--json",
        "--fault-at", f"{faulty.name}=8", "--write", toml, "-o", picture, "--jobs", 2,
    )  # fmt: skip
    assert code == ExitCode.OK
    best = json.loads(output)["recommended"]
    key, _, value = best["set"][0].partition("=")
    fragment = tomllib.loads(toml.read_text())
    assert fragment["guards"]["error_growth"][key.split(".")[-1]] == float(value)
    with RecordReader(healthy) as reader:
        overrides = [f"{key}={fragment['guards']['error_growth']['jump_ratio']}"]
        load_text(reader.facts.config_text, overrides)
    drawn = ElementTree.parse(picture).getroot()
    assert len(drawn.findall("{http://www.w3.org/2000/svg}circle")) == 3


def test_settings_that_all_raise_false_alarms_are_not_recommended(faulty, tmp_path):
    """Every healthy-looking trial counts as false if the fault is said to begin after the end."""
    toml = tmp_path / "guards.toml"
    code, output = run_cli(
        faulty, "--sweep", "guards.error_growth.jump_ratio=1.5,1.6", "--write", toml, "--jobs", 1
    )
    assert code == ExitCode.DIFFERENT
    assert "none is recommended" in " ".join(output.split())
    assert not toml.exists()


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--sweep", "law.proportional=1,2"], "only guards"),
        (["--sweep", "guards.cusum.x=1:2:3", "--set", "a=1"], "do not go with"),
        (["--sweep", "guards.cusum.x=1:2:3", "--fault-at", "other=3"], "none of the records"),
        (["--jobs", "2"], "belong to --sweep"),
    ],
)
def test_a_wrong_command_line_is_refused_in_words(tmp_path, arguments, said):
    result = CliRunner().invoke(
        command, [str(tmp_path / "a.trialrecord"), *arguments], standalone_mode=False
    )
    assert isinstance(result.exception, click.UsageError)
    assert said in str(result.exception)


def test_several_records_are_told_in_a_line_each_and_the_worst_counts(faulty, healthy, tmp_path):
    code, output = run_cli(faulty, healthy)
    assert code == ExitCode.OK
    assert output.count("reproduced, bit for bit") == len(output.splitlines()) == 2
    with sqlite3.connect(healthy) as db:
        db.execute("UPDATE trials SET norm = norm * 1.0000001 WHERE trial = 1")
    db.close()
    code, output = run_cli(faulty, healthy)
    assert code == ExitCode.DIFFERENT
    assert "trial 1: error norm" in output.splitlines()[1]
    code, output = run_cli(tmp_path / "none.trialrecord", healthy, "--json")
    assert code == ExitCode.RECORD
    lines = [json.loads(line) for line in output.splitlines()]
    assert [line["exit_code"] for line in lines] == [ExitCode.RECORD, ExitCode.DIFFERENT]


def test_a_setting_that_cannot_be_is_named_although_a_worker_found_it(healthy):
    result = CliRunner().invoke(
        command,
        [str(healthy), "--sweep", "guards.error_growth.ratio=0.5,2", "--jobs", "1"],
        standalone_mode=False,
    )
    assert isinstance(result.exception, ConfigError)
    assert "guards.error_growth.ratio" in str(result.exception)


def test_dask_is_asked_for_in_words_where_it_is_missing(healthy, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    result = CliRunner().invoke(
        command,
        [str(healthy), "--sweep", "guards.error_growth.ratio=1.5,2", "--dask", "tcp://a:1"],
        standalone_mode=False,
    )
    assert "Dask is not installed" in str(result.exception)
