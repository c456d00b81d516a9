"""Where in a TOML text each key and table stands; tomllib does not tell.

The scanner only skips over values, it does not interpret them, and is used on text that tomllib
has accepted. A path is a tuple of keys and list indices: ("inputs", 0, "high").
"""

import tomllib
from bisect import bisect_right
from contextlib import suppress

Path = tuple[str | int, ...]

_BLANK = " \t"
_END_OF_SCALAR = ",]}#\n"


def find_lines(text: str) -> dict[Path, int]:
    """Line number, counted from 1, of every key, table and list element.

    `text` must be valid TOML. A table named only by its children ([a.b] alone) has the line of
    the first of them.
    """
    scanner = _Scanner(text)
    # On text beyond what the scanner understands: the lines found so far, none invented.
    with suppress(IndexError):
        scanner.document()
    return scanner.lines


def line_of(lines: dict[Path, int], path: Path) -> int | None:
    """Line of a path, or of the nearest table round it; None if even that is unknown."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return None


class _Scanner:
    def __init__(self, text: str) -> None:
        self._text = text.replace("\r\n", "\n") + "\n"
        self._at = 0
        self._starts = [i for i, letter in enumerate(self._text) if letter == "\n"]
        self._list_lengths: dict[Path, int] = {}
        self.lines: dict[Path, int] = {}

    def document(self) -> None:
        table: Path = ()
        while self._skip_to_content():
            if self._text.startswith("[[", self._at):
                table = self._list_header()
            elif self._text[self._at] == "[":
                table = self._table_header()
            else:
                self._key_value(table)

    def _note(self, path: Path) -> None:
        line = bisect_right(self._starts, self._at - 1) + 1
        for length in range(1, len(path) + 1):
            self.lines.setdefault(path[:length], line)

    def _skip(self, letters: str) -> None:
        while self._text[self._at] in letters:
            self._at += 1

    def _skip_to_content(self) -> bool:
        """Go past blanks, line ends and comments; false at the end of the text."""
        while self._at < len(self._text):
            letter = self._text[self._at]
            if letter == "#":
                self._at = self._text.index("\n", self._at)
            elif letter in " \t\n":
                self._at += 1
            else:
                return True
        return False

    def _table_header(self) -> Path:
        self._at += 1
        path = self._with_indices(self._dotted_key())
        self._note(path)
        self._at += 1
        return path

    def _list_header(self) -> Path:
        self._at += 2
        *parents, last = self._dotted_key()
        path = (*self._with_indices(parents), last)
        index = self._list_lengths.get(path, 0)
        self._list_lengths[path] = index + 1
        self._note((*path, index))
        self._at += 2
        return (*path, index)

    def _with_indices(self, keys: list[str]) -> Path:
        """Keys with the index of the newest element after each array of tables."""
        path: Path = ()
        for key in keys:
            path = (*path, key)
            if path in self._list_lengths:
                path = (*path, self._list_lengths[path] - 1)
        return path

    def _dotted_key(self) -> list[str]:
        keys = []
        while True:
            self._skip(_BLANK)
            keys.append(self._simple_key())
            self._skip(_BLANK)
            if self._text[self._at] != ".":
                return keys
            self._at += 1

    def _simple_key(self) -> str:
        start = self._at
        if self._text[start] in "\"'":
            self._string()
            decoded: str = tomllib.loads(f"key = {self._text[start : self._at]}")["key"]
            return decoded
        while self._text[self._at].isalnum() or self._text[self._at] in "_-":
            self._at += 1
        if self._at == start:
            raise IndexError("no key here")
        return self._text[start : self._at]

    def _key_value(self, table: Path) -> None:
        start = self._at
        path = (*table, *self._dotted_key())
        after, self._at = self._at, start
        self._note(path)
        self._at = after + 1
        self._skip(_BLANK)
        self._value(path)

    def _value(self, path: Path) -> None:
        self._note(path)
        letter = self._text[self._at]
        if letter in "\"'":
            self._string()
        elif letter == "[":
            self._array(path)
        elif letter == "{":
            self._inline_table(path)
        else:
            while self._text[self._at] not in _END_OF_SCALAR:
                self._at += 1

    def _string(self) -> None:
        quote = self._text[self._at]
        fence = quote * 3 if self._text.startswith(quote * 3, self._at) else quote
        self._at += len(fence)
        while not self._text.startswith(fence, self._at):
            self._at += 2 if quote == '"' and self._text[self._at] == "\\" else 1
            self._text[self._at]  # past the end: IndexError ends the scan
        self._at += len(fence)
        while len(fence) == 3 and self._text[self._at] == quote:
            # Up to two quotes may stand directly before the closing three.
            self._at += 1

    def _array(self, path: Path) -> None:
        self._at += 1
        index = 0
        while self._skip_to_content() and self._text[self._at] != "]":
            if self._text[self._at] == ",":
                self._at += 1
                continue
            self._value((*path, index))
            index += 1
        self._at += 1

    def _inline_table(self, path: Path) -> None:
        self._at += 1
        while self._skip_to_content() and self._text[self._at] != "}":
            if self._text[self._at] == ",":
                self._at += 1
                continue
            self._key_value(path)
        self._at += 1
