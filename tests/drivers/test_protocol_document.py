"""PROTOCOL.md says what the code does: every table of it is compared, its C code is compiled."""

import dataclasses
import inspect
import re
import shutil
import subprocess
import tomllib
from enum import IntEnum
from importlib import resources
from pathlib import Path
from typing import Any, get_args, get_type_hints

import pytest
from cobs import cobs

from drivers import fields, limits, messages
from drivers.codec import pack_frame
from drivers.framing import stuff
from drivers.messages import ANSWERS, BY_TYPE, NUMBERED, Message, Samples, encode

TEXT = resources.files("drivers").joinpath("PROTOCOL.md").read_text("utf-8")
HEADING = re.compile(r"^### (\d+) (\w+) \((daemon|rig)(?:, order -> (\w+))?\)$", re.MULTILINE)
BY_NAME = {cls.__name__: cls for cls in BY_TYPE.values()}

PLAIN = {
    messages.U8: "u8",
    messages.U32: "u32",
    messages.U64: "u64",
    messages.Bool: "bool",
    messages.Bound: "bound",
    messages.Text: "text",
    messages.Unit: "unit",
    messages.Data: "bytes",
}
ITEMS = {fields.number: "numbers", fields.span: "spans"}

CODES = {
    "States": messages.RigState,
    "Tables": messages.Table,
    "Roles": messages.Role,
    "Start modes": messages.StartMode,
    "Reasons": messages.FinishReason,
    "Refusals": messages.Refusal,
    "Faults": messages.FaultCode,
}


def section(heading: str) -> str:
    """The text under a heading, up to the next one."""
    _, _, rest = TEXT.partition(f"\n{heading}\n")
    assert rest, f"no heading {heading!r}"
    return re.split(r"^#+ ", rest, maxsplit=1, flags=re.MULTILINE)[0]


def rows(text: str) -> list[list[str]]:
    """Cells of the table in a piece of text, without its head."""
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[2:]]


def kind_in_words(annotation: Any) -> str:
    """The kind of a field as the document writes it."""
    if annotation in PLAIN:
        return PLAIN[annotation]
    inner = inspect.getclosurevars(get_args(annotation)[1]).nonlocals
    if "words" in inner:
        return " ".join(f'"{word}"' for word in inner["words"])
    return f"list of {inner['max_items']} {_items_in_words(inner['kind'])}"


def _items_in_words(kind: fields.Kind) -> str:
    if kind in ITEMS:
        return ITEMS[kind]
    assert kind(255) == 255
    with pytest.raises(ValueError, match="of 0 to 255"):
        kind(256)
    return "u8"


def test_every_message_has_its_heading() -> None:
    """Number and name, in order, and nothing that the code does not know."""
    found = [(int(number), name) for number, name, _, _ in HEADING.findall(TEXT)]
    assert found == [(number, BY_TYPE[number].__name__) for number in sorted(BY_TYPE)]


@pytest.mark.parametrize("cls", BY_TYPE.values(), ids=lambda cls: cls.__name__)
def test_fields_are_those_of_the_code(cls: type[Message]) -> None:
    """Names in their order, and kinds, row by row."""
    heading = next(found.group(0) for found in HEADING.finditer(TEXT) if found[2] == cls.__name__)
    hints = get_type_hints(cls, include_extras=True)
    expected = [[field.name, kind_in_words(hints[field.name])] for field in dataclasses.fields(cls)]
    assert [row[:2] for row in rows(section(heading))] == expected
    assert all(row[2] for row in rows(section(heading))), "a field without a meaning"


def test_orders_and_their_answers_are_those_of_the_code() -> None:
    """Who sends what, which are numbered, and what answers them."""
    for number, name, sender, answer in HEADING.findall(TEXT):
        cls = BY_TYPE[int(number)]
        assert (cls in NUMBERED) == bool(answer), name
        assert not answer or BY_NAME[answer] in ANSWERS, name
        assert (cls.__doc__ or "").startswith(sender.capitalize()), name


def test_every_answer_answers_something() -> None:
    """Refused stands for all of them."""
    answers = {answer for _, _, _, answer in HEADING.findall(TEXT) if answer}
    assert answers | {"Refused"} == {cls.__name__ for cls in ANSWERS}


@pytest.mark.parametrize(("heading", "codes"), CODES.items())
def test_codes_are_those_of_the_code(heading: str, codes: type[IntEnum]) -> None:
    """Value and name of each, with a meaning."""
    found = rows(section(f"#### {heading}"))
    assert [(int(value), name) for value, name, _ in found] == [
        (code.value, code.name) for code in codes
    ]
    assert all(meaning for _, _, meaning in found)


def test_limits_are_those_of_the_code() -> None:
    """Every named constant with its value, and no other."""
    found = {name.strip("`"): int(value) for name, value, _ in rows(section("## Limits"))}
    named = {name: value for name, value in vars(limits).items() if name.isupper()}
    assert found == {
        name: value[-1] if isinstance(value, tuple) else value for name, value in named.items()
    }


def test_links_inside_the_document_lead_somewhere() -> None:
    """Each anchor is a heading."""
    headings = re.findall(r"^#+ (.*)$", TEXT, re.MULTILINE)
    anchors = {re.sub(r"[^\w -]", "", one).lower().replace(" ", "-") for one in headings}
    assert set(re.findall(r"\]\(#([^)]*)\)", TEXT)) <= anchors


def test_the_version_is_that_of_code_and_examples() -> None:
    """One number in three places."""
    vectors = tomllib.loads(resources.files("drivers").joinpath("vectors.toml").read_text("utf-8"))
    assert f"Version {limits.PROTOCOL_VERSIONS[-1]}." in TEXT
    assert vectors["protocol_version"] == limits.PROTOCOL_VERSIONS[-1]


MAIN = """
#include <stdio.h>
#include <string.h>

static uint8_t line[4096], frame[4096], again[4096];

/* A line of hex: stuffed bytes without the zero. Prints length, checksum, and whether stuffing the
 * frame gives the line again. */
int main(void)
{
    char text[8200];
    while (fgets(text, sizeof text, stdin)) {
        size_t n = 0;
        unsigned byte;
        while (sscanf(text + 2 * n, "%2x", &byte) == 1)
            line[n++] = (uint8_t)byte;
        size_t length = cobs_unstuff(line, n, frame);
        size_t back = cobs_stuff(frame, length, again);
        int same = back == n && memcmp(again, line, n) == 0;
        size_t covered = length >= 4 ? length - 4 : 0;
        printf("%zu %08x %d\\n", length, crc32c(0, frame, covered), same);
    }
    uint32_t crc = crc32c(0, (const uint8_t *)"1234", 4);
    printf("check %08x\\n", crc32c(crc, (const uint8_t *)"56789", 5));
    return 0;
}
"""


@pytest.fixture(scope="module")
def program(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The document's C code, compiled with every warning as an error."""
    compiler = shutil.which("cc")
    if compiler is None:
        pytest.skip("no C compiler (cc) on this machine")
    folder = tmp_path_factory.mktemp("c")
    source = "\n".join(re.findall(r"^```c\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)) + MAIN
    (folder / "wire.c").write_text(source)
    flags = [
        "-std=c99",
        "-Wall",
        "-Wextra",
        "-Werror",
        "-fsanitize=undefined",
        "-fno-sanitize-recover",
    ]
    built = subprocess.run(
        [compiler, *flags, "-o", folder / "wire", folder / "wire.c"], capture_output=True, text=True
    )
    assert built.returncode == 0, built.stderr
    return folder / "wire"


def test_the_c_code_reads_and_writes_the_examples(program: Path) -> None:
    """Length, checksum and stuffing of each; the check value, taken in two pieces."""
    vectors = tomllib.loads(resources.files("drivers").joinpath("vectors.toml").read_text("utf-8"))
    wires = [bytes.fromhex(one["wire"]) for one in vectors["message"] + vectors["boundary"]]
    given = "".join(wire[:-1].hex() + "\n" for wire in wires)
    ran = subprocess.run([program], input=given, capture_output=True, text=True, check=True)
    *lines, check = ran.stdout.splitlines()
    assert check == "check e3069283"
    assert len(lines) == len(wires)
    for line, wire in zip(lines, wires, strict=True):
        length, crc, same = line.split()
        assert same == "1"
        frame = cobs.decode(wire[:-1])
        assert int(length) == len(frame)
        assert int(crc, 16) == int.from_bytes(frame[-4:], "little")


def test_the_c_code_refuses_what_no_encoder_makes(program: Path) -> None:
    """A code byte that points beyond the end gives length 0."""
    given = "051122\n02\nff01\n"
    ran = subprocess.run([program], input=given, capture_output=True, text=True, check=True)
    assert [line.split()[0] for line in ran.stdout.splitlines()[:3]] == ["0", "0", "0"]


def test_full_serial_frames_are_at_least_95_percent_samples() -> None:
    """With every number at its widest and no zero byte, as the document says."""
    block = b"\x3f" * limits.SERIAL_BLOCK_BYTES
    wire = stuff(pack_frame(0x11223344, 0, encode(Samples(2**32 - 1, 2**32 - 2, block))))
    assert len(block) / len(wire) >= 0.95
    assert f"{len(block)} of at most {len(wire)}" in TEXT
