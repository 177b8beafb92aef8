"""Tables that are no texts of cells: JSON Lines, .npy, Parquet."""

from __future__ import annotations

import json
import re
import sys
import tempfile
import tracemalloc
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import profileplan as pp
from drives_and_turns import INCREMENTS, MACHINE, PLAN, broken, cells, found, planned
from profileplan import setpoints
from profileplan.checks import Manner, Row, judge_file
from profileplan.setpoints import Content, write_table

FORMS = [".jsonl", ".npy", ".parquet"]


def recorded(file: Path, content: Content | None = None, plan: pp.Plan = PLAN) -> Path:
    """Write a plan's table as records."""
    if file.suffix == ".parquet":
        pytest.importorskip("pyarrow")
    write = {
        ".jsonl": setpoints.write_json_lines,
        ".npy": setpoints.write_npy,
        ".parquet": setpoints.write_parquet,
    }[file.suffix]
    write(plan, file, content=content)
    return file


@pytest.mark.parametrize("content", [Content(("pos", "vel", "acc", "jerk")), INCREMENTS])
@pytest.mark.parametrize("form", FORMS)
def test_records_are_judged_as_texts_are(tmp_path: Path, form: str, content: Content) -> None:
    """The same findings, with rows counted from 1."""
    file = recorded(tmp_path / f"table{form}", content)
    text = tmp_path / "table.csv"
    write_table(PLAN, text, content=content)
    judged, expected = judge_file(file, MACHINE), judge_file(text, MACHINE)
    assert judged.unjudged == ()
    assert [(f.check, f.axis, f.ok) for f in judged.findings] == [
        (f.check, f.axis, f.ok) for f in expected.findings
    ]
    values = [f.value for f in judged.findings if f.check not in {"jerk", "even period"}]
    others = [f.value for f in expected.findings if f.check not in {"jerk", "even period"}]
    assert_allclose(values, others, rtol=1e-2, atol=0.01)
    assert judge_file(file, MACHINE, block=5000) == judged
    if form == ".jsonl":
        for one, other in zip(judged.findings, expected.findings, strict=True):
            assert one.value == other.value
            assert (one.line or 0) + 1 == other.line


@pytest.mark.parametrize("form", FORMS)
def test_a_spoiled_record_is_found_in_its_row(tmp_path: Path, form: str) -> None:
    """A leap, and numbers that no motion has: in row 300."""
    file = recorded(tmp_path / f"table{form}")
    for value, words in ((700.0, ""), (np.nan, "is not a finite number"), (1e9, "allowed: -1e+07")):
        spoil(file, 299, value)
        if words:
            with pytest.raises(pp.InputError, match=re.escape(words)) as refused:
                judge_file(file, MACHINE)
            assert "line 300" in str(refused.value)
        else:
            assert broken(file)["x step"].first == Row(300, 0.299)


def spoil(file: Path, row: int, value: float) -> None:
    """Change the position of x in a row."""
    if file.suffix == ".jsonl":
        lines = file.read_text("utf-8").splitlines()
        lines[row] = json.dumps({**json.loads(lines[row]), "x_pos_mm": value})
        file.write_text("\n".join(lines), "utf-8")
    elif file.suffix == ".npy":
        table = np.load(file)
        table["x_pos_mm"][row] = value
        np.save(file, table)
    else:
        arrow, parquet = pytest.importorskip("pyarrow"), pytest.importorskip("pyarrow.parquet")
        table = parquet.read_table(file)
        column = table["x_pos_mm"].to_numpy().copy()
        column[row] = value
        parquet.write_table(table.set_column(1, "x_pos_mm", arrow.array(column)), file)


def test_rows_of_an_array_without_names_are_a_table_without_a_header(tmp_path: Path) -> None:
    """In either order in memory, with signals last."""
    table = np.array(cells()[1:], dtype=np.float64)
    for order in "CF":
        np.save(tmp_path / "table.npy", np.asarray(table, order=order))  # type: ignore[call-overload]
        judged = judge_file(tmp_path / "table.npy", MACHINE)
        assert all(f.ok for f in judged.findings)
        assert found(judged, "rows not 0 or 1").what == "signal 1"
    manner = Manner(columns=["pos"])
    with pytest.raises(pp.InputError, match="8 columns without names; expected 3: t_s, x_pos_mm"):
        judge_file(tmp_path / "table.npy", MACHINE, manner=manner)
    np.save(tmp_path / "table.npy", table[:, [0, 1, 4]])
    assert broken(tmp_path / "table.npy", MACHINE, manner) == {}


@pytest.mark.parametrize("form", [".npy", ".parquet"])
def test_numbers_of_single_precision_are_told(tmp_path: Path, form: str) -> None:
    """Seven digits make noise that a drive would derive as well: whoever reads must know why."""
    file = recorded(tmp_path / f"table{form}", Content(("pos",)))
    assert not any("precision" in note for note in judge_file(file, MACHINE).notes)
    if form == ".npy":
        records = np.load(file)
        kinds = [(name, "<f4") for name in records.dtype.names or ()]
        np.save(file, records.astype(kinds))
    else:
        parquet = pytest.importorskip("pyarrow.parquet")
        arrow = pytest.importorskip("pyarrow")
        table = parquet.read_table(file)
        single = arrow.schema([(name, arrow.float32()) for name in table.column_names])
        parquet.write_table(table.cast(single, safe=False), file)
    names = "t_s, x_pos_mm, c_pos_deg"
    told = f"numbers of less than double precision are judged as they stand: {names}"
    assert told in judge_file(file, MACHINE).notes


def test_json_lines_may_be_written_by_others(tmp_path: Path) -> None:
    """Names in any order, other values beside, true and false, blank lines, another line end."""
    rows = [
        {"note": None, "c_pos_deg": float(c), "lamp": lamp == "1", "x_pos_mm": float(x), "t_s": t}
        for t, x, c, lamp in ((float(r[0]), r[1], r[4], r[7]) for r in cells()[1:])
    ]
    file = tmp_path / "table.jsonl"
    text = "\ufeff\r\n" + "\r\n\r\n".join(json.dumps(row) for row in rows)
    file.write_bytes(text.encode())
    judged = judge_file(file, MACHINE)
    assert [f for f in judged.findings if not f.ok] == []
    assert judged.unjudged == ("note",)
    assert found(judged, "rows not 0 or 1").what == "lamp"


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ('{"t_s": 1, "x_pos_mm": 0}', 'lacks column "c_pos_deg"'),
        ('{"t_s": 1, "x_pos_mm": "0", "c_pos_deg": 0}', '"0" is not a number in column "x_pos_mm"'),
        ('{"t_s": 1, "x_pos_mm": true, "c_pos_deg": 0}', 'is not a number in column "x_pos_mm"'),
        ('{"t_s": 1, "x_pos_mm": null, "c_pos_deg": 0}', 'is not a number in column "x_pos_mm"'),
        ('{"t_s": 1, "x_pos_mm": 1e999, "c_pos_deg": 0}', '"x_pos_mm" is not a finite number'),
        ('{"t_s": 1, "x_pos_mm": 1' + "0" * 400 + ', "c_pos_deg": 0}', "not a finite number"),
        ('{"t_s": 1, "x_pos_mm": 1' + "0" * 5000 + ', "c_pos_deg": 0}', "is no object of JSON"),
        ('{"t_s": 1, "x_pos_mm": 0}, {"t_s": 2, "c_pos_deg": 0}', "is no object of JSON"),
        ("[" * 60_000, "is no object of JSON"),
        ("[1, 2]", "is no object of JSON"),
        ('{"t_s": 1, "x_pos_mm": 0, "c_pos_deg": 0', "is no object of JSON"),
        ("{" + "1" * 70_000, "is longer than"),
    ],
)
def test_a_faulty_line_of_json_is_told(tmp_path: Path, line: str, words: str) -> None:
    """With its number, as one fault."""
    good = '{"t_s": 0, "x_pos_mm": 0, "c_pos_deg": 0}\n'
    file = tmp_path / "table.jsonl"
    file.write_text(good + line + "\n" + good, "utf-8")
    with pytest.raises(pp.InputError) as refused:
        judge_file(file, MACHINE)
    assert "line 2: " in str(refused.value)
    assert words in str(refused.value)


@pytest.mark.parametrize(
    ("name", "data", "words"),
    [
        ("a.jsonl", b"", "has no rows"),
        ("a.jsonl", b"\n \n", "has no rows"),
        ("a.jsonl", b"\x93NUMPY", "line 1: is no object of JSON"),
        ("a.jsonl", b'{"t_s": 0}', 'column "x_pos_mm" is missing'),
        ("a.jsonl", b'{"t_s": 0, "t_s": 1}', 'column "t_s" stands twice'),
        ("a.npy", b"", "is damaged, or not an .npy table"),
        ("a.npy", b"t_s,x_pos_mm,c_pos_deg\n0,0,0\n", "is damaged, or not an .npy table"),
        ("a.parquet", b"PAR1", "Parquet"),
        ("gone.npy", None, "no such file"),
        ("gone.jsonl", None, "no such file"),
        ("gone.parquet", None, "no such file"),
    ],
)
def test_a_file_that_holds_no_records_is_refused(
    tmp_path: Path, name: str, data: bytes | None, words: str
) -> None:
    """Whatever its ending says."""
    if data is not None:
        (tmp_path / name).write_bytes(data)
    with pytest.raises(pp.InputError) as refused:
        judge_file(tmp_path / name, MACHINE)
    assert words in str(refused.value)


def test_arrays_that_are_no_tables_are_refused(tmp_path: Path) -> None:
    """Objects would run code when they are loaded; others have no rows, or no numbers."""
    kind = [("t_s", float), ("x_pos_mm", float), ("c_pos_deg", float)]
    file = tmp_path / "table.npy"
    for array, words in (
        (np.array([{"t_s": 0}], dtype=object), "is damaged, or not an .npy table: "),
        (np.zeros((2, 2, 2)), "holds an array of shape (2, 2, 2)"),
        (np.float64(1), "holds an array of shape ()"),
        (np.zeros(0, dtype=kind), "has no rows"),
        (np.zeros(3, dtype=[*kind[:2], ("c_pos_deg", "U3")]), '"c_pos_deg" holds no numbers'),
        (np.zeros(3, dtype=[*kind[:2], ("c_pos_deg", float, 2)]), '"c_pos_deg" holds no numbers'),
        (np.zeros((3, 7), dtype=complex), "holds no numbers"),
    ):
        np.save(file, array, allow_pickle=True)
        with pytest.raises(pp.InputError) as refused:
            judge_file(file, MACHINE)
        assert words in str(refused.value)


def test_parquet_without_its_library_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is an extra."""
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    file = tmp_path / "table.parquet"
    file.write_bytes(b"PAR1")
    with pytest.raises(pp.InputError, match="Parquet needs pyarrow"):
        judge_file(file, MACHINE)


@cache
def short(form: str) -> bytes:
    """Return the bytes of a short table of records."""
    plan = planned((3.0, 2.0))
    with tempfile.TemporaryDirectory() as folder:
        content = Content(("pos", "vel"), period=0.01)
        return recorded(Path(folder) / f"table{form}", content, plan).read_bytes()


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(data=st.data(), form=st.sampled_from(FORMS[:2]))
def test_no_damage_of_records_brings_a_traceback(
    tmp_path: Path, data: st.DataObject, form: str
) -> None:
    """Cut anywhere, bytes flipped, the description above all: findings or faults."""
    spoiled(tmp_path, data, form)


@settings(max_examples=150, deadline=None, suppress_health_check=list(HealthCheck))
@given(data=st.data())
def test_no_damage_of_parquet_brings_a_traceback(tmp_path: Path, data: st.DataObject) -> None:
    """The same."""
    pytest.importorskip("pyarrow")
    spoiled(tmp_path, data, ".parquet")


def spoiled(folder: Path, data: st.DataObject, form: str) -> None:
    """Damage a table of records and judge it."""
    raw = bytearray(short(form))
    places = st.integers(0, len(raw) - 1) | st.integers(0, min(400, len(raw) - 1))
    for place, byte in data.draw(st.lists(st.tuples(places, st.integers(0, 255)), max_size=4)):
        raw[place] = byte
    cut = data.draw(st.just(len(raw)) | st.integers(0, len(raw)))
    file = folder / f"table{form}"
    file.write_bytes(bytes(raw[:cut]))
    try:
        findings = judge_file(file, MACHINE).findings
    except pp.InputError:
        return
    assert all(np.isfinite([f.value, f.margin, f.rounding]).all() for f in findings)


@settings(max_examples=100, deadline=None, suppress_health_check=list(HealthCheck))
@given(text=st.text("{}()[]'\":, \\<>|fiuVOSdescrortanhpTFL0123456789", max_size=80))
@example("{'descr': '<f8', 'fortran_order': False, 'shape': (1000000000000000000, 3), }")
@example("{'descr': '<f8', 'fortran_order': False, 'shape': (-1, 3), }")
@example("{'descr': '<f8', 'fortran_order': False, 'shape': (9L, 0L), }")
@example("{'descr': '|V0', 'fortran_order': False, 'shape': (3, 3), }")
@example("{'descr': [], 'fortran_order': False, 'shape': (3,), }")
def test_no_description_of_an_array_brings_a_traceback(tmp_path: Path, text: str) -> None:
    """What stands there is read as a value of Python."""
    file = tmp_path / "table.npy"
    head = text.encode() + b"\n"
    file.write_bytes(b"\x93NUMPY\x01\x00" + len(head).to_bytes(2, "little") + head + bytes(99))
    with pytest.raises(pp.InputError):
        judge_file(file, MACHINE)


@pytest.mark.parametrize("form", FORMS)
def test_records_need_no_more_memory_for_longer_tables(tmp_path: Path, form: str) -> None:
    """The second half of 40,000 rows takes nothing beyond the first."""
    peaks = []
    for period in (0.0005, 0.00025):
        file = recorded(tmp_path / f"table{form}", Content(("pos", "vel"), period=period))
        tracemalloc.start()
        judge_file(file, MACHINE, block=1 << 17)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[1] < 1.2 * peaks[0]
