"""TOML text: where things stand, what overrides do, and that writing loses nothing."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.config.lines import find_lines, line_of
from trialrunner.config.toml_text import OverrideError, apply_overrides, write_toml

TEXT = '''\
# a comment with [brackets] and = signs
[run]
name = "a"   # "quoted" [x]
text = """
[not.a.table]
key = 1 \\""" still text """""

[[inputs]]
name = 'x # no comment'
low.first = 1
[inputs.more]
"quoted \\u0041.key" = [
    1,  # one
    [2, 3],
    {a = 1, b = { c = 2 }},
]
[[inputs]]
name = "y"
[[inputs.rows]]
k = 1979-05-27 07:32:00
[[inputs.rows]]
k = 2
[deep.er]
z = +inf
'''


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("run",), 2),
        (("run", "name"), 3),
        (("run", "text"), 4),
        (("inputs", 0), 8),
        (("inputs", 0, "name"), 9),
        (("inputs", 0, "low"), 10),
        (("inputs", 0, "low", "first"), 10),
        (("inputs", 0, "more"), 11),
        (("inputs", 0, "more", "quoted A.key"), 12),
        (("inputs", 0, "more", "quoted A.key", 0), 13),
        (("inputs", 0, "more", "quoted A.key", 1, 1), 14),
        (("inputs", 0, "more", "quoted A.key", 2, "a"), 15),
        (("inputs", 0, "more", "quoted A.key", 2, "b", "c"), 15),
        (("inputs", 1, "name"), 18),
        (("inputs", 1, "rows", 0, "k"), 20),
        (("inputs", 1, "rows", 1, "k"), 22),
        (("deep",), 23),
        (("deep", "er", "z"), 24),
    ],
)
def test_every_key_is_found_on_its_line(path: tuple[str | int, ...], line: int) -> None:
    """Tables, arrays of tables, dotted and quoted keys, lists over several lines."""
    tomllib.loads(TEXT)
    assert find_lines(TEXT)[path] == line
    assert find_lines(TEXT.replace("\n", "\r\n"))[path] == line


def test_nothing_inside_a_string_is_taken_for_a_key() -> None:
    """A table header inside a text is text."""
    assert ("not",) not in find_lines(TEXT)


def test_a_missing_key_is_placed_at_its_table() -> None:
    """The nearest table that exists gives the line."""
    lines = find_lines(TEXT)
    assert line_of(lines, ("inputs", 1, "unit")) == 17
    assert line_of(lines, ("nowhere",)) is None


def test_a_text_cut_anywhere_gives_the_lines_before_the_cut() -> None:
    """The scanner never raises and never moves a key; it is only a help for messages."""
    whole = find_lines(TEXT)
    for cut in range(TEXT.index("[deep"), 0, -1):
        for path, line in find_lines(TEXT[:cut]).items():
            assert line <= TEXT.count("\n", 0, cut) + 1
            assert whole.get(path, line) == line


_KEYS = st.text(st.characters(codec="utf-8", exclude_categories=("Cs",)), max_size=5)
_SCALARS = (
    st.booleans()
    | st.integers(-(2**63), 2**63 - 1)
    | st.floats(allow_nan=False)
    | st.text(st.characters(codec="utf-8", exclude_categories=("Cs",)), max_size=8)
)
_VALUES = st.recursive(
    _SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(_KEYS, inner, max_size=3),
    max_leaves=12,
)
_DOCUMENTS = st.dictionaries(_KEYS, _VALUES, max_size=4)


@settings(max_examples=60, deadline=None)
@given(_DOCUMENTS)
def test_a_written_document_reads_back_equal(document: dict[str, object]) -> None:
    """What a record stores is what was run, to the last bit."""
    assert tomllib.loads(write_toml(document)) == document


@settings(max_examples=60, deadline=None)
@given(_DOCUMENTS)
def test_every_leaf_of_a_written_document_has_a_line(document: dict[str, object]) -> None:
    """The scanner follows whatever the writer writes."""
    text = write_toml(document)
    lines = find_lines(text)

    def leaves(value: object, path: tuple[str | int, ...]) -> None:
        if isinstance(value, dict):
            for key, item in value.items():
                leaves(item, (*path, key))
        elif isinstance(value, list):
            for index, item in enumerate(value):
                leaves(item, (*path, index))
        else:
            assert path in lines

    leaves(document, ())


def test_overrides_set_values_of_every_toml_type() -> None:
    """Dotted keys reach into tables and lists; new tables are made on the way."""
    document: dict[str, object] = {"trial": {"n_samples": 1}, "inputs": [{"high": 1.0}, {}]}
    done = apply_overrides(
        document,
        ["trial.n_samples=500", "inputs.1.high = 2.5", "guards.a.b=true", "law.kp=[1, 2]"],
    )
    assert document == {
        "trial": {"n_samples": 500},
        "inputs": [{"high": 1.0}, {"high": 2.5}],
        "guards": {"a": {"b": True}},
        "law": {"kp": [1, 2]},
    }
    assert ("inputs", 1, "high") in done


def test_an_override_without_quotes_is_text() -> None:
    """The shell eats quotes; a URL must not need two layers of them."""
    document: dict[str, object] = {}
    apply_overrides(document, ["link.url=serial:///dev/ttyUSB0", 'run.name="a b"'])
    assert document == {"link": {"url": "serial:///dev/ttyUSB0"}, "run": {"name": "a b"}}


@pytest.mark.parametrize(
    ("override", "complaint"),
    [
        ("trial.n_samples", "expected KEY=VALUE"),
        ("=5", "expected KEY=VALUE"),
        ("a..b=5", "expected KEY=VALUE"),
        ("inputs.2.high=1", "index of 0 to 1"),
        ("inputs.x.high=1", "index of 0 to 1"),
        ("name.deeper=1", "inside a value"),
        ("a=[1, 2", "not TOML"),
        ("a=", "not TOML"),
        ("a=1\nb=2", "expected one value"),
    ],
)
def test_a_bad_override_is_refused_by_name(override: str, complaint: str) -> None:
    """The message repeats the override and says what was expected."""
    document: dict[str, object] = {"inputs": [{}, {}], "name": "x"}
    with pytest.raises(OverrideError, match=complaint) as caught:
        apply_overrides(document, [override])
    assert repr(override) in str(caught.value)
