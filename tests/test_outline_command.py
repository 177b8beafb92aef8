"""``profileplan outline``: what is found in a drawing, in tables, as JSON and as a picture."""

from __future__ import annotations

import json
import math
import subprocess
import sys
from pathlib import Path
from typing import TYPE_CHECKING
from xml.etree import ElementTree as ET

import ezdxf
import numpy as np
import pytest
from click.testing import CliRunner, Result
from ezdxf.entities.spline import Spline
from fontTools.pens.areaPen import AreaPen  # type: ignore[import-untyped]
from fontTools.pens.perimeterPen import PerimeterPen  # type: ignore[import-untyped]
from fontTools.svgLib.path import parse_path  # type: ignore[import-untyped]
from numpy.testing import assert_allclose

from profileplan.cli import cli
from profileplan.errors import InputError
from profileplan.geometry import picture as picture_module
from profileplan.geometry.drawing import Drawing, Entity, read_drawing
from profileplan.geometry.listing import listing
from profileplan.geometry.picture import picture
from profileplan.geometry.shapes import Pieces

if TYPE_CHECKING:
    from collections.abc import Callable

    from ezdxf.layouts.layout import Modelspace

    from profileplan.geometry.corridor import Array

PORTAL = Path(__file__).parents[1] / "samples" / "sealant-portal"
GASKET = str(PORTAL / "gasket.dxf")
SVG = "{http://www.w3.org/2000/svg}"

EDGE = 2 * (300 + 180) + 2 * math.pi * 30
SLOT = 2 * 100 + 2 * math.pi * 6
HOLE = 2 * math.pi * 4.5
"""Lengths of the gasket's shapes by the formulas of their circles [mm]."""


def run(*words: str, **environment: str) -> Result:
    """Run the command line in this process."""
    return CliRunner(env={"COLUMNS": "100", **environment}).invoke(cli, ["outline", *words])


def found(*words: str) -> dict[str, object]:
    """Return what the command says as JSON."""
    values: dict[str, object] = json.loads(run(*words, "--json").stdout)
    return values


def rows(key: str, *words: str) -> list[dict[str, object]]:
    """Return a list of what the command says as JSON."""
    values: list[dict[str, object]] = json.loads(run(*words, "--json").stdout)[key]
    return values


def numbers(found_rows: list[dict[str, object]], *keys: str) -> Array:
    """Return columns of rows: (rows, keys)."""
    return np.array([[float(str(row[key])) for key in keys] for row in found_rows])


def drawn(folder: Path, draw: Callable[[Modelspace], object]) -> str:
    """Return the name of a file with a drawing in mm."""
    document = ezdxf.filemanagement.new("R2010", units=4)
    draw(document.modelspace())
    document.saveas(folder / "drawing.dxf")
    return str(folder / "drawing.dxf")


def test_the_sample_is_what_its_script_writes(tmp_path: Path) -> None:
    """Every run writes the same bytes, and the committed drawing has the same content."""
    files = [tmp_path / "one.dxf", tmp_path / "other.dxf"]
    for seed, file in enumerate(files):
        command = [sys.executable, str(PORTAL / "gasket.py"), str(file)]
        subprocess.run(command, check=True, env={"PYTHONHASHSEED": str(seed)})
    one, other = (file.read_bytes() for file in files)
    assert one == other
    # Other versions of the library may write other headers.
    begin, end = b"SECTION\n  2\nBLOCKS", b"SECTION\n  2\nOBJECTS"
    committed = Path(GASKET).read_bytes()
    assert begin in committed
    assert (
        committed.partition(begin)[2].partition(end)[0] == one.partition(begin)[2].partition(end)[0]
    )


def test_all_of_the_sample_is_found() -> None:
    """Outlines with their lengths, the gap, and what is left out, as the script draws them."""
    values = found(GASKET)
    assert values["unit"] == "mm"
    assert values["unit_mm"] == 1
    assert values["unit_source"] == "drawing"
    outlines = rows("outlines", GASKET)
    assert [row["number"] for row in outlines] == list(range(1, 13))
    assert all(row["closed"] for row in outlines)
    beads = [row for row in outlines if row["layer"] == "BEAD"]
    # What is missing of the slot's line is bridged.
    assert_allclose(numbers(beads[:3], "length_mm")[:, 0], [EDGE, SLOT, SLOT], rtol=1e-12)
    holes = [row for row in outlines if row["layer"] == "HOLES"]
    assert_allclose(numbers(holes, "length_mm"), HOLE)
    gaps = rows("gaps", GASKET)
    assert [gap["joined"] for gap in gaps] == [True]
    place = numbers(gaps, "x_mm", "y_mm", "width_mm")
    assert_allclose(place, [[229.997, 36, 0.006]], rtol=1e-9)
    assert values["skipped"] == [
        {"kind": "TEXT", "layer": "TEXT", "reason": "a text", "count": 1},
        {"kind": "TEXT", "layer": "HIDDEN", "reason": "on a frozen layer", "count": 2},
        {"kind": "LINE", "layer": "HIDDEN", "reason": "on a frozen layer", "count": 3},
    ]
    layers = {row["name"]: row for row in rows("layers", GASKET)}
    assert layers["BEAD"]["entities"] == 1 + 4 + 4 + 4
    assert (layers["HOLES"]["entities"], layers["HOLES"]["outlines"]) == (8, 8)
    assert (layers["HIDDEN"]["entities"], layers["HIDDEN"]["skipped"]) == (0, 5)


def test_the_window_is_as_long_as_ezdxf_measures_it() -> None:
    """Three lines, and the spline as ezdxf flattens it within 1e-4 mm."""
    (spline,) = ezdxf.filemanagement.readfile(GASKET).modelspace().query("SPLINE")
    assert isinstance(spline, Spline)
    points = np.array([point.xyz for point in spline.flattening(1e-4)])
    arch = np.hypot(*np.diff(points[:, :2], axis=0).T).sum()
    window = numbers(rows("outlines", GASKET)[3:4], "length_mm")
    assert_allclose(window, arch + 160 + 62 + 62, rtol=1e-5)


def test_the_mirrored_bolt_holes_lie_opposite() -> None:
    """A block that is mirrored has its holes at 360 - x, and their circles start on that side."""
    holes = [row for row in rows("outlines", GASKET) if row["layer"] == "HOLES"]
    starts = numbers(holes, "start_x_mm", "start_y_mm")
    assert_allclose(starts[4:], [360, 0] + starts[:4] * [-1, 1])


def test_the_sample_keeps_its_requirements() -> None:
    """The portal can lay the bead."""
    result = CliRunner().invoke(cli, ["check", str(PORTAL / "gasket.toml"), "-q"])
    assert result.exit_code == 0, result.output


def test_quiet_is_one_line() -> None:
    """What a script prints into its log."""
    result = run(GASKET, "-q")
    assert result.exit_code == 0
    assert result.stdout == "12 outlines, 12 closed, 2356.9 mm; 1 gap joined\n"


def test_ends_that_may_not_be_joined_are_told_as_a_gap_left_open() -> None:
    """The slot is open then, by the 0.006 mm."""
    result = run(GASKET, "--joining", "0.005")
    assert "LEFT OPEN" in result.stdout
    assert "12 outlines, 11 closed, 2356.9 mm; 1 gap left open" in result.stdout
    assert rows("gaps", GASKET, "--joining", "5 um")[0]["joined"] is False


def test_layers_are_chosen_and_the_rest_is_told() -> None:
    """In any case of letters, several at a time."""
    assert [row["layer"] for row in rows("outlines", GASKET, "--layer", "bead")] == ["BEAD"] * 4
    reasons = [row["reason"] for row in rows("skipped", GASKET, "--layer", "bead")]
    assert "on a layer that was not asked for" in reasons
    assert len(rows("outlines", GASKET, "--layer", "BEAD", "--layer", "HOLES")) == 12


def test_a_given_unit_scales_the_drawing() -> None:
    """Someone has drawn inches and the file says mm."""
    outlines = rows("outlines", GASKET, "--unit", "inch")
    assert_allclose(numbers(outlines[:1], "length_mm"), 25.4 * EDGE)


def test_hidden_layers_are_read_on_request() -> None:
    """The measure below the gasket: three lines that cross in T."""
    outlines = rows("outlines", GASKET, "--hidden")
    assert [row["layer"] for row in outlines if not row["closed"]] == ["HIDDEN"] * 3


def test_the_shortest_order_is_shorter_and_inside_first_is_kept() -> None:
    """The edge has all else inside, so it comes last."""
    ways = numbers([found(GASKET), found(GASKET, "--order", "shortest")], "travel_mm")
    assert ways[1] < 0.9 * ways[0]
    last = rows("outlines", GASKET, "--order", "shortest", "--inside-first")[-1]
    assert last["kind"] == "LWPOLYLINE"


def test_overlaps_and_branches_are_told(tmp_path: Path) -> None:
    """By the handles of the entities, and by place."""

    def draw(model: Modelspace) -> None:
        model.add_line((0, 0), (100, 0))
        model.add_line((20, 0), (60, 0))
        for end in ((230, 40), (260, 20), (230, 0)):
            model.add_line((230, 20), end)

    file = drawn(tmp_path, draw)
    (overlap,) = rows("overlaps", file)
    assert_allclose(numbers([overlap], "length_mm"), 40)
    assert overlap["covered_by"] == rows("outlines", file)[0]["handle"]
    (branch,) = rows("branches", file)
    assert (branch["x_mm"], branch["y_mm"], branch["ends"]) == (230, 20, 3)
    assert "1 overlap left out, 1 branch point" in run(file, "-q").stdout


def test_a_drawing_with_nothing_to_follow_ends_with_1(tmp_path: Path) -> None:
    """What is there is told, and no empty picture is written."""
    file = drawn(tmp_path, lambda model: model.add_text("no lines"))
    result = run(file, "-o", str(tmp_path / "picture.svg"))
    assert result.exit_code == 1
    assert "NOTHING TO FOLLOW" in result.stdout
    assert "a text" in result.stdout
    assert not (tmp_path / "picture.svg").exists()
    assert run(file, "-q").stdout == "no outline, 0 closed, 0.0 mm\n"


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["none.dxf"], "no such file"),
        ([GASKET, "--layer", "BEED", "--unit", "furlong"], 'did you mean "BEAD"'),
        ([GASKET, "--layer", "BEED", "--unit", "furlong"], '"furlong" is no unit'),
        ([GASKET, "--space", "sheet"], '"sheet"'),
        ([GASKET, "--joining", "-1"], "joining"),
        ([GASKET, "--joining", "nan"], "nan"),
        ([GASKET, "--order", "best"], "shortest"),
        ([GASKET, "-o", "no/such/folder/p.svg"], "cannot be written"),
        ([GASKET, "-o", GASKET], "choose another to write to"),
        ([str(PORTAL / "bead.csv")], "not a DXF file"),
    ],
)
def test_bad_input_ends_with_2_and_a_message(
    words: list[str], message: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """No result, no file, no traceback."""
    monkeypatch.chdir(tmp_path)
    before = Path(GASKET).read_bytes()
    result = run(*words)
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert result.stdout == ""
    assert not list(tmp_path.iterdir())
    assert Path(GASKET).read_bytes() == before


@pytest.mark.parametrize("width", ["60", "80", "100", "140"])
def test_tables_fit_the_terminal(width: str) -> None:
    """Text is wrapped, numbers are whole; below 80 columns they set the width."""
    lines = [line for line in run(GASKET, COLUMNS=width).stdout.splitlines() if GASKET not in line]
    assert max(map(len, lines)) <= max(int(width), 80)


def test_long_tables_tell_how_many_more_there_are(tmp_path: Path) -> None:
    """JSON has all of them."""

    def draw(model: Modelspace) -> None:
        for row in range(100):
            model.add_circle((0, 10 * row), 1)

    file = drawn(tmp_path, draw)
    assert "… and 60 more; --json lists all" in run(file).stdout
    assert len(run(file).stdout.splitlines()) < 60
    assert len(rows("outlines", file)) == 100


def test_no_color_is_respected(monkeypatch: pytest.MonkeyPatch) -> None:
    """The words say all that colour would (no-color.org)."""
    monkeypatch.setattr("click._compat.isatty", lambda _stream: True)
    words = ["outline", GASKET, "--joining", "0"]
    assert "\x1b" in CliRunner().invoke(cli, words, color=True).output
    plain = CliRunner(env={"NO_COLOR": "1"}).invoke(cli, words, color=True)
    assert "\x1b" not in plain.output
    assert "LEFT OPEN" in plain.output


def test_help_teaches_by_example() -> None:
    """A user copies the first line."""
    result = run("--help")
    assert "    profileplan outline samples/sealant-portal/gasket.dxf" in result.stdout.splitlines()


def shapes_of(svg: str) -> list[str]:
    """Return the path of each outline on a picture."""
    paths = ET.fromstring(svg).findall(f"{SVG}path")  # noqa: S314 - our own
    (path,) = [path for path in paths if path.get("class") == "line"]
    return ["M" + part for part in (path.get("d") or "").split("M")[1:]]


def test_the_picture_shows_the_outlines() -> None:
    """Read by the SVG paths of fontTools, length and enclosed area are those of the outlines.

    It draws a quarter of a circle by a cubic, within 3e-4 of the radius (common practice, no
    source).
    """
    told = listing(read_drawing(GASKET))
    zoom = 1000 / 360
    for path, outline in zip(shapes_of(picture(told)), told.followed, strict=True):
        around, within = PerimeterPen(), AreaPen()
        parse_path(path, around)
        parse_path(path, within)
        assert_allclose(around.value, outline.length * zoom, rtol=3e-4)
        # y points downward, so what runs anticlockwise on the screen has an area below 0.
        assert_allclose(within.value, -outline.area * zoom**2, rtol=6e-4)


def test_arcs_of_any_turn_keep_their_shape_on_the_picture() -> None:
    """Also half circles, whose radius in few digits would not tell on which side they lie."""
    bulges = [1e-7, 1e-3, 0.2, 0.41, 0.42, 0.99, 0.999999, 1.0, -0.7, -1.0]
    told = listing(apart(np.array(bulges)))
    for path, outline in zip(shapes_of(picture(told)), told.followed, strict=True):
        around, within = PerimeterPen(), AreaPen()
        parse_path(path + "Z", around)
        parse_path(path + "Z", within)
        zoom = 1000 / told.followed[-1].bounds()[1, 0]
        chord = 10.0
        assert_allclose(around.value, (outline.length + chord) * zoom, rtol=3e-4)
        assert_allclose(within.value, -outline.area * zoom**2, rtol=2e-3, atol=5e-3)


def made(pieces: Pieces) -> Drawing:
    """Return a drawing of pieces, each an entity of its own."""
    return Drawing(
        file=Path("made.dxf"),
        unit="mm",
        scale=1.0,
        unit_source="drawing",
        pieces=pieces,
        entities=tuple(Entity(f"{number:X}", "0", "ARC") for number in range(len(pieces))),
        skipped=(),
        layers=("0",),
        notes=(),
        error=0.0,
    )


def apart(bulge: Array) -> Drawing:
    """Return a drawing of pieces with chords of 10 mm, 20 mm apart in rows of 500."""
    number = np.arange(bulge.size)
    start = np.stack([20.0 * (number % 500), 20.0 * (number // 500), 0 * number], axis=1)
    return made(Pieces(start, start + np.array([10.0, 0.0, 0.0]), bulge, number))


def test_the_picture_has_marks_numbers_and_a_legend(tmp_path: Path) -> None:
    """What each means is written beside it; nothing is loaded and nothing runs."""
    file = tmp_path / "gasket.svg"
    assert run(GASKET, "--joining", "0", "-o", str(file)).exit_code == 0
    root = ET.parse(file).getroot()  # noqa: S314 - our own
    words = [text.text for text in root.iter(f"{SVG}text")]
    assert [word for word in words if word and word.isdigit()] == [str(n) for n in range(1, 13)]
    assert {"gap left open", "50 mm", "way from an outline to the next"} <= set(words)
    assert "gap that was joined" not in words
    text = file.read_text(encoding="utf-8")
    assert not any(word in text for word in ("<script", "href", "url(", "@import"))
    assert "prefers-color-scheme:dark" in text


def test_the_same_drawing_has_the_same_picture(tmp_path: Path) -> None:
    """So that pictures can be compared."""
    files = [tmp_path / "one.svg", tmp_path / "other.svg"]
    for file in files:
        run(GASKET, "--order", "shortest", "-o", str(file), "-q")
    one, other = (file.read_bytes() for file in files)
    assert one == other


def test_names_are_safe_in_a_picture(tmp_path: Path) -> None:
    """Whatever the file is called, the picture is XML."""
    file = tmp_path / 'a<b>&"\x07.dxf'
    file.write_bytes(Path(GASKET).read_bytes())
    assert run(str(file), "-o", str(tmp_path / "p.svg")).exit_code == 0
    (title,) = ET.parse(tmp_path / "p.svg").getroot().iter(f"{SVG}title")  # noqa: S314 - our own
    assert title.text == 'a<b>&"\N{REPLACEMENT CHARACTER}.dxf'


def test_pictures_of_large_drawings_stay_small() -> None:
    """100,000 arcs, each an outline of its own: a browser still opens it."""
    told = listing(apart(np.full(100_000, 0.3)))
    text = picture(told)
    assert len(told.outlines) == 100_000
    assert len(text) < 10e6
    assert len(shapes_of(text)) == 100_000


def test_what_is_too_large_for_a_picture_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """With what would help."""
    monkeypatch.setattr(picture_module, "MOST_PIECES", 9)
    with pytest.raises(InputError, match=r"10 lines and arcs are too many .* at most 9 .* layers"):
        picture(listing(apart(np.full(10, 0.3))))


@pytest.mark.parametrize("end", [(5, 1, 10), (5.000001, 1, 0), (1e6, 1, 0)])
def test_pictures_of_any_size_are_made(end: tuple[float, float, float], tmp_path: Path) -> None:
    """A line that stands upright has no size in plan; no number may become infinite."""
    file = drawn(tmp_path, lambda model: model.add_line((5, 1, 0), end))
    text = picture(listing(read_drawing(file)))
    ET.fromstring(text)  # noqa: S314 - our own
    assert "nan" not in text
    assert "inf" not in text
