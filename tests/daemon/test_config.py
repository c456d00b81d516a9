"""A good configuration: what it becomes, what is stored of it, and when it may change."""

import json
import math
import os
from pathlib import Path

import numpy as np
import pytest

from trialrunner.channel_file import ChannelFileError
from trialrunner.config import (
    ConfigError,
    config_difference,
    exported_schema,
    load,
    load_text,
)
from trialrunner.core.guards import guard_table
from trialrunner.core.laws import law_table
from trialrunner.core.settings import FilterSettings, LearnSettings

CONFIGS = sorted((Path(__file__).parents[2] / "config").glob("*.toml"))

TEXT = """\
# the smallest configuration
[run]
name = "oven"
[link]
url = "zmq+tcp://127.0.0.1:7000"
[trial]
n_samples = 4
period_s = 0.5
[[inputs]]
name = "power"
unit = "%"
low = -20
high = 30.5
[[outputs]]
name = "temperature"
unit = "Cel"
low = 0
high = 150
[reference]
kind = "file"
path = "ramp.csv"
[law]
kind = "pd"
proportional = 0.5
"""

PROFILE = TEXT.replace(
    'kind = "file"\npath = "ramp.csv"',
    'kind = "profile"\nwaypoints = [[20.0]]\nvelocity_limit_per_s = 1.0',
)


@pytest.fixture
def oven(tmp_path: Path) -> Path:
    """A configuration with its reference file beside it."""
    (tmp_path / "ramp.csv").write_text("temperature[Cel]\n20\n21\n22\n23\n")
    path = tmp_path / "oven.toml"
    path.write_text(TEXT)
    return path


def test_what_is_left_out_has_the_cores_defaults() -> None:
    """The shell adds no defaults of its own to the core's."""
    config = load_text(TEXT)
    settings = config.run_settings()
    assert settings.filter == FilterSettings()
    assert settings.learn == LearnSettings()
    assert settings.inputs[0].low == -20.0
    assert math.isinf(settings.inputs[0].rate_limit_per_s)
    assert settings.guards == {name: cls() for name, (_, cls) in guard_table().items()}
    assert list(settings.guards) == list(guard_table())
    assert isinstance(settings.law, law_table()["pd"])


def test_every_number_reaches_the_core_as_written() -> None:
    """Also through JSON inside: no digit is lost."""
    number = "0.1234567890123456789"
    config = load_text(TEXT, [f"trial.period_s={number}", f"law.proportional={number}"])
    assert config.trial.period_s == float(number)
    assert config.law.proportional == float(number)


def test_the_record_is_named_after_the_run_unless_told() -> None:
    """Relative to the current directory, as a file on the command line is."""
    assert load_text(TEXT).record_path == Path("oven.trialrecord")
    assert load_text(TEXT, ["run.record=a/b.rec"]).record_path == Path("a/b.rec")


def test_the_operators_addresses_are_private_to_user_and_run(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A socket named after the run, in the runtime directory where there is one."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", "/run/user/7")
    config = load_text(TEXT)
    assert config.command_url == "ipc:///run/user/7/trialrunner/oven.command"
    assert config.telemetry_url == "ipc:///run/user/7/trialrunner/oven.telemetry"
    monkeypatch.delenv("XDG_RUNTIME_DIR")
    assert f"-{os.getuid()}/oven.command" in config.command_url
    told = load_text(TEXT, ["operator.command_url=tcp://127.0.0.1:7001"])
    assert told.command_url == "tcp://127.0.0.1:7001"


def test_files_are_found_beside_the_configuration(
    oven: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Wherever the command was typed."""
    monkeypatch.chdir("/")
    config = load(oven)
    assert config.load_reference().tolist() == [[20.0], [21.0], [22.0], [23.0]]
    assert config.load_feedforward() is None


def test_a_text_without_its_files_can_be_read_but_not_used() -> None:
    """What a record holds must stay readable when the file has gone."""
    config = load_text(TEXT)
    with pytest.raises(ChannelFileError, match=r"ramp\.csv.*No such file"):
        config.load_reference()


def test_a_bad_reference_file_is_a_problem_of_the_configuration(oven: Path) -> None:
    """Named under reference.path, with its own file and line."""
    ramp = oven.parent / "ramp.csv"
    for content, words in [
        ("temperature[K]\n20\n21\n22\n23\n", "expected the unit 'Cel'"),
        ("temperature\n20\n21\nx\n23\n", "ramp.csv, line 4: column 'temperature'"),
        ("temperature\n20\n21\n", "expected 4 samples"),
        ("temperature\n20\n21\n22\n230\n", "goes from 20 to 230 Cel"),
    ]:
        ramp.write_text(content)
        with pytest.raises(ConfigError) as caught:
            load(oven)
        (problem,) = caught.value.problems
        assert problem.startswith("reference.path (line 21): ")
        assert words in problem


def test_other_column_names_can_be_given(oven: Path) -> None:
    """A recording has its own names; the unit is still checked."""
    (oven.parent / "ramp.csv").write_text("t,T1[Cel]\n0,1\n1,2\n2,3\n3,4\n")
    config = load(oven, ['reference.columns=["T1"]'])
    assert config.load_reference()[:, 0].tolist() == [1.0, 2.0, 3.0, 4.0]


def test_a_reference_held_by_the_rig_still_needs_its_values(oven: Path) -> None:
    """Errors are computed from them; the checksum may be written in hexadecimal."""
    config = load(oven, ["reference.kind=rig", "reference.checksum=0xE3069283"])
    assert config.reference.kind == "rig"
    assert config.reference.checksum == 0xE3069283
    assert config.load_reference().shape == (4, 1)


def test_a_first_feedforward_is_read_and_must_lie_inside_the_limits(oven: Path) -> None:
    """By the inputs' names; a value that could not be sent is refused, not clipped."""
    first = oven.parent / "first.csv"
    first.write_text("power[%]\n0\n1\n2\n0\n")
    config = load(oven, ["run.initial_feedforward=first.csv"])
    feedforward = config.load_feedforward()
    assert feedforward is not None
    assert feedforward[:, 0].tolist() == [0.0, 1.0, 2.0, 0.0]
    first.write_text("power[%]\n0\n1\n31\n0\n")
    with pytest.raises(ConfigError, match=r"run\.initial_feedforward.*leaves the limits"):
        load(oven, ["run.initial_feedforward=first.csv"])
    first.write_text("watts\n0\n1\n31\n0\n")
    with pytest.raises(ConfigError, match="expected a column 'power'"):
        load(oven, ["run.initial_feedforward=first.csv"])


def test_a_profile_needs_no_file_and_starts_at_its_first_waypoint() -> None:
    """Computed from the text alone, so that a record can be read on its own."""
    config = load_text(PROFILE, ["trial.n_samples=50", "reference.waypoints=[[20.0], [25.0]]"])
    reference = config.load_reference()
    assert reference.shape == (50, 1)
    assert reference[0, 0] == 20.0
    assert reference[-1, 0] == 25.0
    assert np.abs(np.diff(reference[:, 0])).max() <= 1.0 * 0.5 * (1 + 1e-12)


def test_a_rehearsal_names_its_plant_faults_and_options() -> None:
    """Values of the mock rig's own options are handed on as they are."""
    text = PROFILE + "[rehearsal]\nplant = 'oven'\nseed = 3\nfaults = ['drop@trial=2']\n"
    text += "options = {table_capacity = 50, rig_starts = true}\n"
    rehearsal = load_text(text).rehearsal
    assert rehearsal is not None
    assert (rehearsal.plant, rehearsal.link, rehearsal.seed) == ("oven", "serial", 3)
    assert rehearsal.faults == ("drop@trial=2",)
    assert rehearsal.options == {"table_capacity": 50, "rig_starts": True}


# --- the stored text --------------------------------------------------------------------------


def test_the_stored_text_is_the_file_as_written_where_nothing_was_overridden(oven: Path) -> None:
    """With its comments: they are part of what the engineer knew."""
    assert load(oven).text == TEXT


def test_the_stored_text_of_an_overridden_run_reads_back_to_the_same_run() -> None:
    """What a record holds says all, without the command line."""
    changes = ["trial.period_s=0.25", "guards.divergence.ratio_to_first=inf", "run.name=oven2"]
    config = load_text(PROFILE, changes)
    again = load_text(config.text)
    assert again.model_dump() == config.model_dump()
    assert again.run_settings() == config.run_settings()
    assert config_difference(config.text, again.text) == []


# --- differences ------------------------------------------------------------------------------


def test_a_setting_written_out_with_its_default_is_no_difference() -> None:
    """What counts is what holds, not how it was written."""
    assert config_difference(PROFILE, PROFILE + "[filter]\nshape = 'gaussian'\n") == []


@pytest.mark.parametrize(
    ("change", "line"),
    [
        ("law.proportional=0.25", "law.proportional: 0.5 -> 0.25"),
        ("trial.n_samples=5", "trial.n_samples: 4 -> 5"),
        ("inputs.0.low=-21.0", "inputs.0.low: -20.0 -> -21.0"),
        ("guards.error_growth.ratio=1.2", "guards.error_growth.ratio: 1.5 -> 1.2"),
        ("guards.divergence.norm_limit=9.5", "guards.divergence.norm_limit: inf -> 9.5"),
        ("stop.baseline_trials=3", "stop.baseline_trials: 0 -> 3"),
        ("run.name=other", 'run.name: "oven" -> "other"'),
        ("run.initial_feedforward=a.csv", 'run.initial_feedforward: left out -> "a.csv"'),
        ("learn.forgetting=0.01", "learn.forgetting: 0.0 -> 0.01"),
    ],
)
def test_a_change_of_what_is_learned_or_judged_is_a_difference(change: str, line: str) -> None:
    """One line: path, old, new."""
    assert config_difference(PROFILE, load_text(PROFILE, [change]).text) == [line]


@pytest.mark.parametrize(
    "change",
    [
        "link.url=serial:///dev/ttyUSB3",
        "link.silence_s=9.0",
        "operator.command_url=tcp://127.0.0.1:7001",
        "rehearsal.plant=oven",
        "run.record=moved.trialrecord",
        "run.on_halt=exit",
        "stop.trials=500",
        "stop.tolerance=0.1",
        "stop.floor_trials=0",
    ],
)
def test_what_changes_no_trial_may_change_in_a_resumed_run(change: str) -> None:
    """Where the rig, the operators and the record are, and when it ends."""
    assert config_difference(PROFILE, load_text(PROFILE, [change]).text) == []


def test_another_number_of_channels_is_one_difference() -> None:
    """Not one line for every setting of the new channel."""
    second = '[[outputs]]\nname = "lid"\nunit = "Cel"\nlow = 0\nhigh = 150\n'
    more = PROFILE.replace("[reference]", second + "[reference]")
    more = more.replace("[[20.0]]", "[[20.0, 20.0]]") + "pairs = [[0, 0]]\n"
    lines = config_difference(PROFILE, more)
    assert "outputs: 1 tables -> 2 tables" in lines


def test_a_recorded_text_that_is_no_longer_understood_is_itself_the_difference() -> None:
    """Another version wrote it; the run is not continued on a guess."""
    (line,) = config_difference(PROFILE + "[ghost]\n", PROFILE)
    assert line.startswith("recorded configuration: not readable by this version")
    assert "ghost" in line


# --- schema and shipped files -----------------------------------------------------------------


def test_every_setting_is_described_in_the_schema() -> None:
    """An editor can say what each key is for, its unit and its bounds."""
    schema = exported_schema()
    bare = [
        f"{table}.{name}"
        for table, node in {"": schema, **schema["$defs"]}.items()
        for name, setting in node["properties"].items()
        if not setting.get("description")
    ]
    assert bare == []


def test_the_exported_schema_is_the_callers_own() -> None:
    """Changing it changes no error message."""
    exported_schema()["properties"].clear()
    assert "trial" in exported_schema()["properties"]
    assert json.loads(json.dumps(exported_schema(), allow_nan=False)) == exported_schema()


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.name)
def test_every_shipped_configuration_loads_without_a_warning(path: Path) -> None:
    """And its own text reads back to the same run."""
    config = load(path)
    assert config.warnings == ()
    assert config.rehearsal is not None
    assert load_text(config.text).run_settings() == config.run_settings()
    assert config.load_reference().shape == (config.trial.n_samples, len(config.outputs))
