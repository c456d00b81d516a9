"""Sampled channels from CSV and NPZ files: what is read, and what every bad file is told."""

from pathlib import Path

import numpy as np
import pytest

from trialrunner.channel_file import ChannelFileError, Column, read_channels

X, Y = Column("x", "mm"), Column("y", "rad")
WANTED = np.array([[1.0, 10.0], [2.0, -20.0], [3.5, 3e-3]])


def write(folder: Path, text: str, name: str = "table.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize(
    "text",
    [
        "x,y\n1,10\n2,-20\n3.5,3e-3\n",
        "x[mm],y [rad]\n1,10\n2,-20\n3.5,3e-3",
        "x,y\nmm,rad\n1,10\n2,-20\n3.5,3e-3\n",
        "time,y,x\r\n0,10,1\r\n0.1,-20,2\r\n0.2,3e-3,3.5\r\n",
        '\ufeff# by hand\n\n"x", y \n1, 10\n\n# middle\n2,-20\n3.5,3e-3\n\n',
        "x,note,y\n1,start,10\n2,,-20\n3.5,end,3e-3\n",
    ],
)
def test_a_csv_file_gives_the_wanted_columns_in_order(tmp_path: Path, text: str) -> None:
    """With or without units, comments, a byte order mark, other columns, another order."""
    found = read_channels(write(tmp_path, text), [X, Y], 3)
    assert found.dtype == np.float64
    assert np.array_equal(found, WANTED)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "expected a header row with column names, found none"),
        ("a,b\n1,2\n", "line 1: expected a column 'x', found a, b"),
        ("x,x,y\n1,2,3\n", "line 1: column 'x' stands there 2 times"),
        ("x;y\n1;2\n", "separate columns with commas"),
        ("1,2\n3,4\n", "first row must hold the column names"),
        ("x[m],y\n1,2\n", "line 1: column 'x': expected the unit 'mm' of the configuration"),
        ("x,y\nmm,deg\n1,2\n", "line 2: column 'y': expected the unit 'rad'"),
        ("x,y\n1,2\n3\n5,6\n", "line 3: expected 2 columns as in the header, found 1"),
        ("x,y\n1,2\n3,4,5\n5,6\n", "line 3: expected 2 columns as in the header, found 3"),
        ("x,y\n1,2\n3,four\n5,6\n", "line 3: column 'y': expected a number, found 'four'"),
        ("x,y\n1,2\n,4\n5,6\n", "line 3: column 'x': expected a number, found ''"),
        ("x,y\n1,2\nnan,4\n5,6\n", "line 3: column 'x': expected a finite number, found 'nan'"),
        ("x,y\n1,2\n3,-inf\n5,6\n", "line 3: column 'y': expected a finite number, found '-inf'"),
        ("x,y\n1,2\n3,4\n", "expected 3 samples (trial.n_samples), found 2"),
        ("x,y\n1,2\n3,4\n5,6\n7,8\n", "line 5: expected 3 samples (trial.n_samples), found more"),
        ('x,y\n1,2\n"3,4\n5,6\n', "not CSV"),
        ("x,y\n1,5,2\n", "found 3"),
    ],
)
def test_a_bad_csv_file_is_refused_with_line_and_column(
    tmp_path: Path, text: str, words: str
) -> None:
    """The message names the file, the place, what was expected and what was found."""
    path = write(tmp_path, text)
    with pytest.raises(ChannelFileError) as caught:
        read_channels(path, [X, Y], 3)
    assert str(caught.value).startswith(str(path))
    assert words in str(caught.value)


def test_an_npz_file_gives_arrays_by_name(tmp_path: Path) -> None:
    """One-dimensional or a single column, of any real type."""
    path = tmp_path / "table.npz"
    np.savez(path, y=WANTED[:, 1:].astype(np.float32), x=np.array([1, 2, 3]), other=np.zeros(7))
    found = read_channels(path, [X, Y], 3)
    assert found.dtype == np.float64
    assert np.array_equal(found[:, 0], [1.0, 2.0, 3.0])
    assert np.array_equal(found[:, 1], WANTED[:, 1].astype(np.float32))


@pytest.mark.parametrize(
    ("arrays", "words"),
    [
        ({"a": np.zeros(3)}, "array 'x': missing, found a"),
        ({"x": np.zeros(4)}, "array 'x': expected shape (3,) (trial.n_samples), found (4,)"),
        ({"x": np.zeros((3, 2))}, "found (3, 2)"),
        ({"x": np.array([1.0, np.nan, 2.0])}, "expected finite numbers, found nan at index 1"),
        ({"x": np.array(["a", "b", "c"])}, "expected real numbers, found the type <U1"),
        ({"x": np.zeros(3, dtype=complex)}, "expected real numbers"),
        ({"x": np.array([{}, {}, {}], dtype=object)}, "without pickled objects"),
    ],
)
def test_a_bad_npz_file_is_refused_by_array(
    tmp_path: Path, arrays: dict[str, np.ndarray], words: str
) -> None:
    """Also one with pickled objects, which could run code."""
    path = tmp_path / "table.npz"
    np.savez(path, **arrays)
    with pytest.raises(ChannelFileError) as caught:
        read_channels(path, [X], 3)
    assert str(caught.value).startswith(str(path))
    assert words in str(caught.value)


def test_a_file_that_is_no_table_is_refused(tmp_path: Path) -> None:
    """Absent, of another kind, or of another content than its name says."""
    bare = tmp_path / "bare.npz"
    with bare.open("wb") as file:
        np.save(file, np.zeros(3))
    for path, words in [
        (tmp_path / "absent.csv", "No such file"),
        (write(tmp_path, "x\n1\n", "table.xlsx"), "ending in .csv or .npz"),
        (write(tmp_path, "x\n1\n", "text.npz"), "not an NPZ file"),
        (bare, "expected an archive of arrays"),
    ]:
        with pytest.raises(ChannelFileError, match=str(path)) as caught:
            read_channels(path, [X], 3)
        assert words in str(caught.value)
    latin = tmp_path / "latin.csv"
    latin.write_bytes(b"x\xb0,y\n")
    with pytest.raises(ChannelFileError, match="UTF-8, found byte 0xb0 at position 1"):
        read_channels(latin, [X], 3)
