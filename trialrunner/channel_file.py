"""Sampled channels from CSV and NPZ files: references and feedforwards.

CSV: a header row with the channel names, as `x` or with the unit as `x[mm]`; a second row without
any number is read as the units; then one row a sample, comma-separated, decimal points. Empty
lines and lines that begin with # are passed over, columns that nobody asked for are ignored.

NPZ: one array a channel, by name, of shape (n_samples,) or (n_samples, 1); no pickled objects.
"""

import csv
import math
import re
import zipfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import chain
from pathlib import Path

import numpy as np

from trialrunner.core.trial import Array

_NAME_AND_UNIT = re.compile(r"\s*(?P<name>[^\[\]]*?)\s*(?:\[(?P<unit>[^\[\]]*)\]\s*)?")


class ChannelFileError(Exception):
    """A file does not hold what was expected of it; the text names file, line and column."""


@dataclass(frozen=True)
class Column:
    """One channel as wanted from a file."""

    name: str
    unit: str
    """The file must not say another one; it may say none."""


def read_channels(path: Path, columns: Sequence[Column], n_samples: int) -> Array:
    """Samples of the wanted columns, (n_samples, n_columns), in the order of `columns`.

    Raises ChannelFileError for a file that cannot be read, lacks a column, is of another length,
    states another unit, or holds anything but finite numbers.
    """
    try:
        if path.suffix.lower() == ".npz":
            return _read_npz(path, columns, n_samples)
        if path.suffix.lower() == ".csv":
            with path.open(encoding="utf-8-sig", newline="") as file:
                return _read_csv(_Rows(path, file), columns, n_samples)
    except OSError as error:
        raise ChannelFileError(f"{path}: cannot be read: {error.strerror or error}") from None
    except UnicodeDecodeError as error:
        raise ChannelFileError(
            f"{path}: expected text in UTF-8, found byte 0x{error.object[error.start]:02x} at "
            f"position {error.start}"
        ) from None
    raise ChannelFileError(f"{path}: expected a file ending in .csv or .npz")


class _Rows:
    """Rows of a CSV file that hold something, with the line on which each ends."""

    def __init__(self, path: Path, file: Iterator[str]) -> None:
        self.path = path
        self._reader = csv.reader(file, strict=True)

    @property
    def line(self) -> int:
        return self._reader.line_num

    def __iter__(self) -> Iterator[list[str]]:
        try:
            for row in self._reader:
                first = row[0].lstrip() if row else ""
                if first[:1] != "#" and (first or any(cell.strip() for cell in row)):
                    yield row
        except csv.Error as error:
            raise self.error(f"not CSV: {error}") from None

    def error(self, text: str) -> ChannelFileError:
        return ChannelFileError(f"{self.path}, line {self.line}: {text}")


def _read_csv(rows: _Rows, columns: Sequence[Column], n_samples: int) -> Array:
    waiting = iter(rows)
    header = next(waiting, None)
    if header is None:
        raise ChannelFileError(f"{rows.path}: expected a header row with column names, found none")
    names, units = _parse_header(header)
    places = [_place(rows, names, column) for column in columns]
    _check_units(rows, columns, [units[i] for i in places])
    first = next(waiting, None)
    if first is not None and not any(_is_number(cell) for cell in first):
        _check_width(rows, first, names)
        _check_units(rows, columns, [first[i].strip() for i in places])
    elif first is not None:
        waiting = chain((first,), waiting)
    return _read_samples(rows, waiting, names, places, n_samples)


def _read_samples(
    rows: _Rows, waiting: Iterator[list[str]], names: list[str], places: list[int], n_samples: int
) -> Array:
    table = np.empty((n_samples, len(places)))
    count = 0
    for row in waiting:
        if count == n_samples:
            raise rows.error(f"expected {n_samples} samples (trial.n_samples), found more")
        _check_width(rows, row, names)
        try:
            values = [float(row[i]) for i in places]
        except ValueError:
            values = [math.nan]
        if not all(map(math.isfinite, values)):
            raise _bad_cell(rows, row, names, places)
        table[count] = values
        count += 1
    if count < n_samples:
        raise ChannelFileError(
            f"{rows.path}: expected {n_samples} samples (trial.n_samples), found {count}"
        )
    return table


def _bad_cell(rows: _Rows, row: list[str], names: list[str], places: list[int]) -> ChannelFileError:
    place = next(i for i in places if not _is_number(row[i]) or not math.isfinite(float(row[i])))
    kind = "a finite number" if _is_number(row[place]) else "a number"
    return rows.error(f"column {names[place]!r}: expected {kind}, found {row[place].strip()!r}")


def _parse_header(header: list[str]) -> tuple[list[str], list[str]]:
    names, units = [], []
    for cell in header:
        match = _NAME_AND_UNIT.fullmatch(cell)
        names.append(match["name"] if match else cell.strip())
        units.append((match["unit"] or "").strip() if match else "")
    return names, units


def _place(rows: _Rows, names: list[str], column: Column) -> int:
    if names.count(column.name) == 1:
        return names.index(column.name)
    if column.name in names:
        raise rows.error(f"column {column.name!r} stands there {names.count(column.name)} times")
    hint = ""
    if len(names) == 1 and any(mark in names[0] for mark in ";\t"):
        hint = "; separate columns with commas"
    elif all(_is_number(name) for name in names):
        hint = "; the first row must hold the column names"
    raise rows.error(f"expected a column {column.name!r}, found {', '.join(names)}{hint}")


def _check_units(rows: _Rows, columns: Sequence[Column], found: Sequence[str]) -> None:
    for column, unit in zip(columns, found, strict=True):
        if unit and unit != column.unit:
            raise rows.error(
                f"column {column.name!r}: expected the unit {column.unit!r} of the configuration, "
                f"found {unit!r}"
            )


def _check_width(rows: _Rows, row: list[str], names: list[str]) -> None:
    if len(row) != len(names):
        raise rows.error(f"expected {len(names)} columns as in the header, found {len(row)}")


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True


def _read_npz(path: Path, columns: Sequence[Column], n_samples: int) -> Array:
    with path.open("rb") as file:
        if not zipfile.is_zipfile(file):
            raise ChannelFileError(f"{path}: not an NPZ file; expected an archive of arrays")
        file.seek(0)
        try:
            archive = np.load(file, allow_pickle=False)
            arrays = [_npz_array(path, archive, column, n_samples) for column in columns]
        except (ValueError, EOFError, zipfile.BadZipFile) as error:
            text = f"not an NPZ file without pickled objects: {error}"
            raise ChannelFileError(f"{path}: {text}") from None
    return np.column_stack(arrays)


def _npz_array(
    path: Path, archive: "np.lib.npyio.NpzFile", column: Column, n_samples: int
) -> Array:
    where = f"{path}, array {column.name!r}"
    if column.name not in archive.files:
        raise ChannelFileError(f"{where}: missing, found {', '.join(archive.files) or 'none'}")
    found = archive[column.name]
    if found.dtype.kind not in "fiu":
        raise ChannelFileError(f"{where}: expected real numbers, found the type {found.dtype}")
    if found.shape not in ((n_samples,), (n_samples, 1)):
        raise ChannelFileError(
            f"{where}: expected shape ({n_samples},) (trial.n_samples), found {found.shape}"
        )
    values = found.reshape(n_samples).astype(np.float64)
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise ChannelFileError(
            f"{where}: expected finite numbers, found {values[bad[0]]} at index {bad[0]}"
        )
    return values
