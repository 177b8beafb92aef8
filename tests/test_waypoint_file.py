"""Waypoint files: every accepted spelling, and every fault with its line."""

import codecs
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from profileplan.errors import InputError
from profileplan.inputs import Waypoint, read_waypoints


def write(folder: Path, text: str, encoding: str = "utf-8") -> Path:
    """Write a waypoint file, line ends as they are."""
    path = folder / "points.csv"
    path.write_bytes(text.encode(encoding))
    return path


def faults(path: Path) -> list[tuple[str, str]]:
    """Return place and message of every fault of a file."""
    with pytest.raises(InputError) as caught:
        read_waypoints(path)
    assert {path} == {fault.file for fault in caught.value.faults}
    return [(fault.place, fault.message) for fault in caught.value.faults]


TWO_POINTS = (Waypoint({"x": 1.5, "y": 2.0}), Waypoint({"x": -3.0, "y": 0.25}))


@pytest.mark.parametrize(
    "text",
    [
        "x,y\n1.5,2\n-3,0.25\n",
        "x;y\n1.5;2\n-3;0.25\n",
        "x;y\n1,5;2,0\n-3;,25\n",
        "x,y\r\n1.5,2\r\n-3,0.25\r\n",
        "x,y\r1.5,2\r-3,0.25\r",
        "x,y\n1.5,2\n-3,0.25",
        '"x","y"\n"1.5","2"\n"-3","0.25"\n',
        '"x";"y"\n"1,5";2\n-3;"0,25"\n',
        "\n  \nx , y\n\n 1.5 ,\t2\n\n-3e0,.25\n\n",
        "x,y,speed,wait,name\n1.5,2,,,\n-3,0.25,,,\n",
    ],
    ids=[
        "comma",
        "semicolon",
        "decimal comma",
        "CRLF",
        "CR",
        "no last line end",
        "quoted",
        "quoted decimal comma",
        "blanks",
        "empty extras",
    ],
)
def test_every_spelling_gives_the_same_points(tmp_path: Path, text: str) -> None:
    """Spreadsheets of all countries and systems write the same points differently."""
    assert read_waypoints(write(tmp_path, text)) == TWO_POINTS


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    """Spreadsheets put it before the first heading."""
    path = tmp_path / "points.csv"
    path.write_bytes(codecs.BOM_UTF8 + b"x,y\n1.5,2\n-3,0.25\n")
    assert read_waypoints(path) == TWO_POINTS


def test_the_optional_columns_are_read(tmp_path: Path) -> None:
    """Speed, stop and name of a point may stand in any column."""
    text = 'name;x;wait;speed\n"a; ""b""";1;0,5;200\n;2;;\n'
    expected = (
        Waypoint({"x": 1.0}, speed=200.0, wait=0.5, name='a; "b"'),
        Waypoint({"x": 2.0}),
    )
    assert read_waypoints(write(tmp_path, text)) == expected


def test_an_empty_cell_leaves_the_axis_where_it_is(tmp_path: Path) -> None:
    """Not naming an axis is not the same as sending it to 0."""
    points = read_waypoints(write(tmp_path, "x,y\n1,\n,2\n"))
    assert [point.to for point in points] == [{"x": 1.0}, {"y": 2.0}]


def test_points_know_their_lines(tmp_path: Path) -> None:
    """Later faults must be found in the file, blank lines included."""
    points = read_waypoints(write(tmp_path, "x\n\n1\n \n2\n"))
    assert [point.line for point in points] == [3, 5]


def test_lines_are_counted_through_quoted_line_ends(tmp_path: Path) -> None:
    """A row is found where it begins, even after a cell of several lines."""
    path = write(tmp_path, 'x,name\n1,"two\nlines"\na,b\n')
    assert [place for place, _ in faults(path)] == ["line 2, column name", "line 4, column x"]


def test_a_hundred_thousand_rows_are_read(tmp_path: Path) -> None:
    """Files from other programs are as long as that, and no row may get lost."""
    rows = "".join(f"{index},{index / 8}\n" for index in range(100_000))
    points = read_waypoints(write(tmp_path, "x,y\n" + rows))
    assert len(points) == 100_000
    assert points[-1] == Waypoint({"x": 99_999.0, "y": 99_999 / 8})
    assert points[-1].line == 100_001


@pytest.mark.parametrize(
    ("text", "place", "words"),
    [
        ("", "", "is empty; a header of axis names and points are needed"),
        ("\n \n", "", "is empty"),
        ("x,y\n", "", "has a header only; at least one point is needed"),
        ("x,y,x\n1,2,3\n", "line 1, column x", '"x" stands twice'),
        ("x,speed,speed\n1,2,3\n", "line 1, column speed", '"speed" stands twice'),
        ("x,,y\n1,2,3\n", "line 1, column 2", "has no name"),
        ("speed,name\n1,a\n", "line 1", "names no axis"),
        ("x,y\n1,2\n3\n", "line 3", "1 cells; the header has 2 columns"),
        ("x,y\n1,2\n3,4,5\n", "line 3", "3 cells; the header has 2 columns"),
        ("x,y\n\n1,a\n", "line 3, column y", '"a"; a number in axis units is needed'),
        ("x,y\n1,5 mm\n", "line 2, column y", '"5 mm"; a number in axis units'),
        ("x,y\n1,1_0\n", "line 2, column y", '"1_0"; a number'),
        ("x,y\n1,\u0663\n", "line 2, column y", "a number in axis units"),
        ('x,y\n1,"2,5"\n', "line 2, column y", "decimal comma is understood where ;"),
        ("x;y\n1;1.234,5\n", "line 2, column y", '"1.234,5"; a number'),
        ("x,y\n1,nan\n", "line 2, column y", "nan mm or deg; allowed: -1e+07 to 1e+07"),
        ("x,y\n1,-inf\n", "line 2, column y", "-inf mm or deg; allowed"),
        ("x,y\n1,1e8\n", "line 2, column y", "100000000 mm or deg; allowed"),
        ("x,speed\n1,0\n", "line 2, column speed", "0 mm/s; allowed: above 0"),
        ("x,wait\n1,-1\n", "line 2, column wait", "-1 s; allowed: 0 to 1e+06 s"),
        ("x,name\n1,a\u0007\n", "line 2, column name", "printable characters"),
        ("x,y,name\n,,a\n", "line 2", "names no axis; at least one position is needed"),
        ("x,y\n1,\0\n", "line 2", "has a NUL character"),
        ('x,y\n1,2\n3,"4\n5,6\n', "line 3", "the quoting of this row is faulty"),
        ('x,y\n"1"2,3\n', "line 2", "the quoting of this row is faulty"),
        ("x,y\n1," + "9" * 200_000 + "\n", "line 2", "field larger than field limit"),
    ],
)
def test_a_fault_is_reported_at_its_line(tmp_path: Path, text: str, place: str, words: str) -> None:
    """One slip gives one fault, with what was found and what is needed."""
    found = faults(write(tmp_path, text))
    assert [place] == [where for where, _ in found]
    assert words in found[0][1]


@pytest.mark.parametrize(
    ("data", "place", "message"),
    [
        (b"x,y\n1,\xe92\n", "line 2", "byte 0xe9 is not UTF-8; the file must be saved as UTF-8"),
        (
            "x,y\n1,2\n".encode("utf-16"),
            "line 1",
            "byte 0xff is not UTF-8; the file must be saved as UTF-8",
        ),
    ],
    ids=["Latin-1", "UTF-16"],
)
def test_other_encodings_are_refused(tmp_path: Path, data: bytes, place: str, message: str) -> None:
    """Guessing an encoding would turn names into others."""
    path = tmp_path / "points.csv"
    path.write_bytes(data)
    assert faults(path) == [(place, message)]


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    """The commonest fault of all."""
    assert faults(tmp_path / "points.csv") == [("", "no such file")]


def test_all_faults_of_a_file_come_at_once(tmp_path: Path) -> None:
    """Sound rows between faulty ones do not end the search."""
    text = "x,y,speed\n1,a,b\n1,2\n3,4,5\n,,\n6,7,-8\n"
    assert [place for place, _ in faults(write(tmp_path, text))] == [
        "line 2, column y",
        "line 2, column speed",
        "line 3",
        "line 5",
        "line 6, column speed",
    ]


def test_a_long_list_of_faults_is_cut(tmp_path: Path) -> None:
    """A column of texts in 1000 rows is one slip; 20 lines of it are enough."""
    found = faults(write(tmp_path, "x\n" + "a\n" * 1000))
    assert [place for place, _ in found[:20]] == [f"line {n}, column x" for n in range(2, 22)]
    assert found[20:] == [("", "… and 980 more")]


CELLS = st.sampled_from(
    ["x", "y", "speed", "wait", "name", "1", "-2.5", "1,5", "nan", "", " ", "é"]
)
TABLES = st.lists(st.lists(CELLS | st.text('ab1;,"\n\r\0 ', max_size=4), max_size=4), max_size=6)


@given(rows=TABLES, delimiter=st.sampled_from(";,\t"), end=st.sampled_from(["\n", "\r\n", "\r"]))
def test_junk_tables_give_points_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, rows: list[list[str]], delimiter: str, end: str
) -> None:
    """Whatever stands in a file, there is no traceback, and no point without a position."""
    path = tmp_path_factory.getbasetemp() / "junk.csv"
    path.write_bytes(end.join(delimiter.join(row) for row in rows).encode())
    try:
        named = [len(point.to) for point in read_waypoints(path)]
    except InputError as error:
        named = [len(error.faults)]
    assert named
    assert min(named) > 0


@given(st.binary(max_size=60))
def test_any_bytes_give_points_or_input_error(
    tmp_path_factory: pytest.TempPathFactory, data: bytes
) -> None:
    """A wrong file given by mistake may hold anything."""
    path = tmp_path_factory.getbasetemp() / "bytes.csv"
    path.write_bytes(data)
    try:
        found = len(read_waypoints(path))
    except InputError as error:
        found = len(error.faults)
    assert found > 0


@given(
    st.lists(st.tuples(*[st.floats(-1e7, 1e7)] * 2), min_size=1, max_size=5),
    st.sampled_from([(",", "."), (";", "."), (";", ",")]),
)
def test_written_points_are_read_to_the_last_digit(
    tmp_path_factory: pytest.TempPathFactory,
    points: list[tuple[float, float]],
    style: tuple[str, str],
) -> None:
    """A table written with all digits gives the very same numbers."""
    delimiter, point = style
    rows = [delimiter.join(repr(n).replace(".", point) for n in row) for row in points]
    path = tmp_path_factory.getbasetemp() / "round-trip.csv"
    path.write_text("\n".join([f"x{delimiter}y", *rows]), encoding="utf-8")
    assert [(p.to["x"], p.to["y"]) for p in read_waypoints(path)] == points
