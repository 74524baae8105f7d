"""The table of points as spreadsheets of all countries write it."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from rig.errors import SweepFileError
from rig.sweepfile import PointEntry, read_points_table, render_points_csv
from rig.sweepfile.table import points_from_bytes

PLAIN = (
    PointEntry(file="a.wav", drive_hz=25.5, level=0.2, direction="up", extras=(("gap", "1"),)),
    PointEntry(file="b.wav", drive_hz=None, level=1.0, direction="none", extras=(("gap", ""),)),
)
SPELLINGS = {
    "plain": b"file,drive_hz,level,direction,gap\na.wav,25.5,0.2,up,1\nb.wav,,,,\n",
    "mark and carriage returns": "\ufefffile,drive_hz,level,direction,gap\r\n"
    "a.wav,25.5,0.2,up,1\r\nb.wav,,,,\r\n".encode(),
    "decimal comma": b"file;drive_hz;level;direction;gap\na.wav;25,5;0,2;up;1\nb.wav;;;;\n",
    "semicolon and point": b"file;drive_hz;level;direction;gap\na.wav;25.5;0.2;up;1\nb.wav;;;;\n",
    "tabs": b"file\tdrive_hz\tlevel\tdirection\tgap\na.wav\t25,5\t,2\tup\t1\nb.wav\t\t\t\t\n",
    "utf-16": "file;drive_hz;level;direction;gap\na.wav;25,5;2e-1;up;1\nb.wav;;;;\n".encode(
        "utf-16"
    ),
    "blank and comment lines": b"\n# made by hand, twice\n\nfile,drive_hz,level,direction,gap\n\n"
    b",,,,\na.wav , 25.5,0.2,UP,1\n\nb.wav,,1,none,\n\n",
    "trailing delimiters": b"file,drive_hz,level,direction,gap,,\n"
    b"a.wav,25.5,0.2,up,1,,\nb.wav,,,,,,\n",
    "capitals and quotes": b'"File","Drive_Hz","LEVEL","Direction","gap"\n'
    b'"a.wav","25.5","0.2","Up","1"\n"b.wav",,,,\n',
}


@pytest.mark.parametrize("name", SPELLINGS)
def test_every_spelling_gives_the_same_points(tmp_path: Path, name: str) -> None:
    """A decimal comma read as a delimiter would be a wrong frequency, silently."""
    path = tmp_path / "points.csv"
    path.write_bytes(SPELLINGS[name])
    assert read_points_table(path) == PLAIN


def test_single_byte_text_of_old_spreadsheets_is_read() -> None:
    """A name with an umlaut saved in a single-byte code page."""
    points = points_from_bytes("p.csv", "file\nlöwe.wav\n".encode("cp1252"), "amplitude")
    assert points[0].file == "löwe.wav"


BAD_TABLES = [
    (b"", ["is empty", "'file'"]),
    (b"\n\n", ["is empty"]),
    (b"file,drive_hz\n", ["a header but no row"]),
    (b"name,drive_hz\na,1\n", ["line 1", "column 'file' is missing", "'name', 'drive_hz'"]),
    (b"file,drive_herz\na,1\n", ["line 1", "'drive_herz'", "did you mean 'drive_hz'?"]),
    (b"file,Drive (Hz)\na,1\n", ["'Drive (Hz)'", "did you mean 'drive_hz'?"]),
    (b"file,levels\na,1\n", ["'levels'", "did you mean 'level'?"]),
    (b"file,gap,gap\na,1,2\n", ["column 'gap' twice"]),
    (b"file,,gap\na,1,2\n", ["a column without a name"]),
    (b"file,level\n\na,0\n", ["line 3 level", "above 0", "'amplitude'", "got 0", "free_running"]),
    (b"file,level\na,-1\n", ["line 2 level", "got -1"]),
    (b"file,level\na,nan\n", ["line 2 level", "finite", "'nan'"]),
    (b"file,level\na,1e999\n", ["line 2 level", "finite", "inf"]),
    (b"file,drive_hz\na,0\n", ["line 2 drive_hz", "above 0 Hz", "got 0"]),
    (b"file,drive_hz\na,25 Hz\n", ["line 2 drive_hz", "without unit", "'25 Hz'"]),
    (b'file,drive_hz\na,"1,5"\n', ["line 2 drive_hz", "'1,5'"]),
    (b"file;drive_hz\na;1.000,5\n", ["thousands marks", "'1.000,5'"]),
    (b"file;drive_hz\na;1.5\nb;2,5\n", ["line 3", "'2,5'", "another decimal mark", "'1.5'"]),
    (b"file,direction\na,upp\n", ["line 2 direction", "up, down, none", "did you mean 'up'?"]),
    (b"file,gap\na,1,2\n", ["line 2", "3 cells, 2 expected", "'a'"]),
    (b"file,gap\na\n", ["line 2", "1 cells, 2 expected"]),
    (b"file,gap\n,1\n", ["line 2 file", "is empty"]),
    (b"file\na\nb\na\n", ["line 4 file", "'a' stands already in", "line 2"]),
    (b"file\na\0b\n", ["line 2", "NUL byte"]),
    (b'file\n"a\n', ["line 2", "Check the quotes"]),
]


@pytest.mark.parametrize(("data", "words"), BAD_TABLES)
def test_a_broken_rule_names_line_column_and_value(
    tmp_path: Path, data: bytes, words: list[str]
) -> None:
    """A table of a hundred rows is repaired by line and column, not by search."""
    path = tmp_path / "points.csv"
    path.write_bytes(data)
    with pytest.raises(SweepFileError) as caught:
        read_points_table(path)
    message = str(caught.value)
    assert message.startswith(str(path))
    assert "\n" not in message
    for word in words:
        assert word in message


def test_a_decibel_level_may_be_zero_or_negative() -> None:
    """0 dBm is a power like any other."""
    points = points_from_bytes("p.csv", b"file,level\na,0\nb,-12.5\n", "decibel")
    assert [point.level for point in points] == [0.0, -12.5]


@given(st.binary(max_size=200))
def test_any_bytes_are_read_or_refused_in_one_line(data: bytes) -> None:
    """A wrong file handed over as a table must not end in a traceback."""
    try:
        points = points_from_bytes("p.csv", b"file\n" + data, "amplitude")
    except SweepFileError as error:
        message = str(error)
    else:
        assert all(point.file for point in points)
        message = ""
    assert "\n" not in message


NAMES = st.text(st.characters(exclude_categories=["Cs", "Cc"]), min_size=1).filter(
    lambda text: text == text.strip() and not text.startswith("# ")
)


@given(st.lists(NAMES, min_size=1, unique=True), st.floats(1e-3, 1e9))
def test_any_name_and_number_survive_the_table(names: list[str], drive_hz: float) -> None:
    """The draft writes what it found; the sweep must find the same files."""
    points = tuple(PointEntry(file=name, drive_hz=drive_hz) for name in names)
    data = render_points_csv(points).encode()
    assert points_from_bytes("p.csv", data, "amplitude") == points
