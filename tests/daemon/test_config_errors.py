"""A bad configuration: every fault is named with path, line, what was expected and found."""

from pathlib import Path

import pytest

from trialrunner.config import Config, ConfigError, load, load_text

GOOD = """\
[run]
name = "bench"

[link]
url = "serial:///dev/ttyUSB0"

[trial]
n_samples = 1000
period_s = 0.002

[[inputs]]
name = "force"
unit = "N"
low = -10.0
high = 10.0
rate_limit_per_s = 500.0

[[inputs]]
name = "torque"
unit = "N.m"
low = -1.0
high = 1.0

[[outputs]]
name = "x"
unit = "mm"
low = -500.0
high = 500.0

[[outputs]]
name = "angle"
unit = "rad"
low = -2.0
high = 2.0

[reference]
kind = "profile"
waypoints = [[0.0, 0.0], [200.0, 1.0], [0.0, 0.0]]
velocity_limit_per_s = [800.0, 6.0]
acceleration_limit_per_s2 = [8000.0, 60.0]
jerk_limit_per_s3 = [400000.0, 3000.0]
dwell_s = 0.05

[law]
kind = "pd"
proportional = [0.1, 0.1]

[filter]
bandwidth_hz = 40.0

[ladder]
roll_back_to = "best"
"""


def problems_of(text: str, overrides: tuple[str, ...] = ()) -> tuple[str, ...]:
    with pytest.raises(ConfigError) as caught:
        load_text(text, overrides, "bench.toml")
    assert str(caught.value).startswith("bench.toml: ")
    return caught.value.problems


def line_with(text: str, part: str) -> int:
    return text[: text.index(part)].count("\n") + 1


def test_the_text_that_the_other_tests_break_is_good() -> None:
    """Otherwise their faults would prove nothing."""
    config = load_text(GOOD)
    assert isinstance(config, Config)
    assert config.text == GOOD
    assert config.warnings == ()


@pytest.mark.parametrize(
    ("old", "new", "place", "words"),
    [
        # unknown keys and tables
        ("period_s", "periode_s", "trial.periode_s", "did you mean 'period_s'"),
        ("[filter]", "[filtre]", "filtre", "did you mean 'filter'"),
        ("[ladder]", "[ladder]\nbandwidth_hz = 1.0", "ladder.bandwidth_hz", "belongs to [filter]"),
        ("[ladder]", "[ladder]\nzzz = 1", "ladder.zzz", "expected one of roll_back_to"),
        ('kind = "pd"', 'kind = "pd"\nlead = 3', "law.lead", "did you mean 'lead_samples'"),
        ("[ladder]", "[guards.eror_growth]\n[ladder]", "guards.eror_growth", "'error_growth'"),
        ("[ladder]", "[guards.start_state]\nx = 1\n[ladder]", "guards.start_state.x", "enabled"),
        # wrong types
        ("n_samples = 1000", "n_samples = 1000.0", "trial.n_samples", "found 1000.0; write 1000"),
        ("= 0.002", '= "0.002"', "trial.period_s", "write it without quotes"),
        (
            "= 1000",
            "= true",
            "trial.n_samples",
            "expected a whole number of at least 1, found true",
        ),
        ('"force"', "7", "inputs.0.name", "expected text in quotes that is not empty, found 7"),
        ("= 0.05", "= 07:32:00", "reference.dwell_s", "found the date 07:32:00"),
        ("[200.0, 1.0]", '[200.0, "1"]', "reference.waypoints.1.1", 'found "1"'),
        ("[200.0, 1.0]", "3", "reference.waypoints.1", "expected a list of numbers"),
        ("[trial]", "[[trial]]", "trial", "single brackets"),
        ("proportional = [0.1, 0.1]", 'proportional = "0.1"', "law.proportional", "without quotes"),
        # not one of the words
        ("period_s = 0.002", 'period_s = 0.002\nstart = "deamon"', "trial.start", 'mean "daemon"'),
        ('"best"', '"worst"', "ladder.roll_back_to", '"best" or "last_good" or a whole number'),
        ('kind = "pd"', 'kind = "magic"', "law.kind", 'found "magic"'),
        ('kind = "profile"', 'kind = "profil"', "reference.kind", '"profile", "file" or "rig"'),
        # out of bounds
        ("= 0.002", "= 0.0", "trial.period_s", "expected a number above 0, found 0.0"),
        ("= 0.05", "= -0.05", "reference.dwell_s", "of at least 0, found -0.05"),
        ("[800.0, 6.0]", "[800.0, -6.0]", "reference.velocity_limit_per_s.1", "found -6.0"),
        ('"bench"', '"a bench/.."', "run.name", "letters, digits"),
        ("= 1000", "= 999999999999", "trial.n_samples", "at most 16000000 samples"),
        # not numbers
        ("= 0.002", "= nan", "trial.period_s", "a finite number above 0, found nan"),
        ("low = -10.0", "low = nan", "inputs.0.low", "a finite number, found nan"),
        ("low = -10.0", "low = -inf", "inputs.0.low", "a finite number, found -inf"),
        ("[200.0, 1.0]", "[inf, 1.0]", "reference.waypoints.1.0", "found inf"),
        # settings that do not fit together
        ('"torque"', '"force"', "inputs.1.name", "name of inputs.0 too"),
        ('"angle"', '"x"', "outputs.1.name", "name of outputs.0 too"),
        ("high = 10.0", "high = -10.0", "inputs.0.high", "expected a number above low = -10"),
        ("low = -1.0", "low = 0.5", "inputs.1.low", "must contain 0"),
        ("[800.0, 6.0]", "[800.0]", "reference.velocity_limit_per_s", "each of the 2 axes"),
        ("[200.0, 1.0]", "[200.0]", "reference.waypoints.1", "each of the 2 outputs, found 1"),
        ("[0.1, 0.1]", "[0.1, 0.1, 0.1]", "law.proportional", "found 3"),
        ('"N.m"', '"newtonmetre_per_second_squared"', "inputs.1.unit", "at most 24 bytes"),
        ('"serial:///dev/ttyUSB0"', '"/dev/ttyUSB0"', "link.url", "serial://"),
        ('"serial:///dev/ttyUSB0"', '"http://a"', "link.url", "found 'http://a'"),
        (
            "[ladder]",
            '[operator]\ncommand_url = "tcp://0.0.0.0:5000"\n[ladder]',
            "operator.command_url",
            "tunnel",
        ),
        (
            "[ladder]",
            f'[operator]\ncommand_url = "ipc:///{"x" * 120}"\n[ladder]',
            "operator.command_url",
            "at most 107 bytes, found 121",
        ),
        (
            "[ladder]",
            "[guards.divergence]\npeak_limits = {y = 1.0}\n[ladder]",
            "guards.divergence.peak_limits",
            "found y",
        ),
    ],
)
def test_a_fault_is_named_with_its_path_and_line(
    old: str, new: str, place: str, words: str
) -> None:
    """One edit of a good text, one problem, at the right place, in the right words."""
    text = GOOD.replace(old, new, 1)
    assert text != GOOD
    (problem,) = problems_of(text)
    where, _, said = problem.partition(": ")
    path, _, line = where.partition(" (line ")
    assert path == place
    changed = next(
        n for n, (a, b) in enumerate(zip(GOOD.split("\n"), text.split("\n"), strict=False), 1)
        if a != b
    )  # fmt: skip
    assert changed <= int(line.rstrip(")")) <= changed + new.count("\n")
    assert words in said


@pytest.mark.parametrize(
    ("gone", "place", "table", "words"),
    [
        ("period_s = 0.002\n", "trial.period_s", "[trial]", "missing; expected a number above 0"),
        ('unit = "N.m"\n', "inputs.1.unit", '[[inputs]]\nname = "torque"', "expected text"),
        ('url = "serial:///dev/ttyUSB0"\n', "link.url", "[link]", "zmq+tcp://host:port"),
        ('kind = "profile"\n', "reference.kind", "[reference]", '"profile", "file" or "rig"'),
        (
            "velocity_limit_per_s = [800.0, 6.0]\n",
            "reference.velocity_limit_per_s",
            "[refe",
            "Largest velocity",
        ),
    ],
)
def test_a_missing_key_is_named_at_its_table(gone: str, place: str, table: str, words: str) -> None:
    """The line is that of the table; the text says what the key is for."""
    text = GOOD.replace(gone, "", 1)
    (problem,) = problems_of(text)
    assert problem.startswith(f"{place} (line {line_with(text, table)}): missing; ")
    assert words in problem


def test_a_missing_table_is_asked_for_with_its_brackets() -> None:
    """Also told apart: a table from an array of tables."""
    text = GOOD.replace('[run]\nname = "bench"\n', "")
    assert problems_of(text) == ("run: missing; expected a table; add [run] (The run)",)
    text = GOOD[: GOOD.index("[[outputs]]")] + GOOD[GOOD.index("[reference]") :]
    (problem,) = problems_of(text)
    assert problem.startswith(
        "outputs: missing; expected a list of tables, 1 to 32 of them; add [["
    )


def test_a_misspelt_key_is_not_missing_as_well() -> None:
    """One slip, one message."""
    text = GOOD.replace("[run]", "[runn]").replace("period_s", "periode_s")
    assert [one.split(":")[0] for one in problems_of(text)] == [
        "runn (line 1)",
        "trial.periode_s (line 9)",
    ]


def test_a_reference_outside_its_range_is_placed_at_the_reference() -> None:
    """The numbers of both sides are in the text."""
    (problem,) = problems_of(GOOD.replace("high = 500.0", "high = 150.0"))
    assert problem == (
        "reference.waypoints (line 38): goes from 0 to 200 mm on 'x'; expected within that "
        "output's range, -500 to 150"
    )


def test_a_profile_longer_than_the_trial_is_refused_with_both_lengths() -> None:
    """How many samples it needs, and how many there are."""
    (problem,) = problems_of(GOOD, ("trial.n_samples=200",))
    assert problem.startswith("reference.waypoints (line 38): the moves and dwells need ")
    assert "the trial has 200" in problem


@pytest.mark.parametrize("key", ["velocity_limit_per_s", "acceleration_limit_per_s2"])
def test_a_limit_that_next_to_forbids_to_move_is_a_long_move(key: str) -> None:
    """The smallest number there is must not end in an arithmetic error."""
    (problem,) = problems_of(GOOD, (f"reference.{key}=5e-324",))
    assert "the moves and dwells need" in problem


def test_everything_wrong_is_said_at_once_in_the_order_of_the_file() -> None:
    """Nobody wants to mend a file one message at a time."""
    text = GOOD
    for old, new in (
        ("= 0.002", "= nan"),
        ('"N"', "5"),
        ("dwell_s", "dwel_s"),
        ("[filter]", "[f]"),
    ):
        text = text.replace(old, new, 1)
    problems = problems_of(text)
    places = [one.split(" ")[0] for one in problems]
    assert places == ["trial.period_s", "inputs.0.unit", "reference.dwel_s", "f"]
    with pytest.raises(ConfigError, match="4 problems"):
        load_text(text)


def test_faults_that_need_a_whole_configuration_are_said_together() -> None:
    """Cross checks do not stop at the first."""
    text = GOOD.replace('"torque"', '"force"').replace("high = 2.0", "high = -3.0")
    assert len(problems_of(text)) == 2


def test_an_override_is_blamed_as_such() -> None:
    """A value from the command line has no line in the file."""
    (problem,) = problems_of(GOOD, ("trial.period_s=-1",))
    assert problem.startswith("trial.period_s (override): expected a number above 0, found -1")


def test_a_malformed_override_is_refused() -> None:
    """Without KEY=VALUE nothing is guessed."""
    (problem,) = problems_of(GOOD, ("trial.period_s",))
    assert "expected KEY=VALUE" in problem


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[run\nname = 1", "not TOML: "),
        ("[run]\nname = 1\nname = 2\n", "line 3"),
        ("[run]\nname = bench", "line 2"),
        ("[run]\n[run]", "line 2"),
    ],
)
def test_a_text_that_is_not_toml_is_refused_with_the_line(text: str, words: str) -> None:
    """Syntax comes first; nothing else can be said of such a file."""
    (problem,) = problems_of(text)
    assert words in problem


def test_a_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    """Absent, a directory, not UTF-8, or far too large."""
    with pytest.raises(ConfigError, match=r"absent\.toml.*\n.*No such file"):
        load(tmp_path / "absent.toml")
    with pytest.raises(ConfigError, match="directory"):
        load(tmp_path)
    latin = tmp_path / "latin.toml"
    latin.write_bytes(b'[run]\nname = "\xe4"\n')
    with pytest.raises(ConfigError, match="UTF-8 text, found byte 0xe4 at position 14"):
        load(latin)
    huge = tmp_path / "huge.toml"
    huge.write_bytes(b"#" * 1_000_001)
    with pytest.raises(ConfigError, match="larger than 1000000 bytes"):
        load(huge)


def test_a_byte_order_mark_is_passed_over(tmp_path: Path) -> None:
    """Some editors write one."""
    path = tmp_path / "marked.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.encode())
    assert load(path).run.name == "bench"


@pytest.mark.parametrize(
    ("change", "place", "words"),
    [
        ("filter.bandwidth_hz=250.0", "filter.bandwidth_hz", "half the sampling rate"),
        ("filter.bandwidth_hz=0.01", "filter.bandwidth_hz", "one trial resolves 0.25 Hz"),
        ("filter.shape=none", "filter.bandwidth_hz", "no effect"),
        ("inputs.0.rate_limit_per_s=1.0", "inputs.0.rate_limit_per_s", "reaches 0.999 N"),
        ("guards.divergence.enabled=false", "guards.divergence.enabled", "off"),
    ],
)
def test_what_is_probably_not_meant_is_a_warning(change: str, place: str, words: str) -> None:
    """Allowed, and said."""
    (warning,) = load_text(GOOD, [change]).warnings
    assert warning.startswith(place)
    assert words in warning
