"""The page in a real browser: it shows the plan, acts as one, and keeps to itself.

Chromium is found as /usr/bin/chromium or through PROFILEPLAN_BROWSER. Where there is none these
tests are left out, unless that variable is set: then they fail.

Outside of the project: axe-core's rules for accessibility (it comes with axe-playwright-python),
and the contrast that WCAG 2.2 asks for (success criteria 1.4.3 and 1.4.11, from memory).
"""

from __future__ import annotations

import os
import re
import shutil
from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import pytest
import shapely
from axe_playwright_python.sync_playwright import Axe
from numpy.testing import assert_allclose
from playwright.sync_api import sync_playwright

import profileplan as pp
from profileplan import dynamics

if TYPE_CHECKING:
    from collections.abc import Iterator

    from playwright.sync_api import Browser, Page

SAMPLES = Path(__file__).parents[1] / "samples"

FLAGS = (
    *("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run"),
    *("--disable-background-networking", "--disable-component-update", "--disable-sync"),
)

ASKED = os.environ.get("PROFILEPLAN_BROWSER")

BROWSER = ASKED or shutil.which("chromium") or ""

HEAVIEST = 3e6
"""Bytes of a sample's page."""

PAPER = 703
"""Width of A4 less two margins of 12 mm, in pixels of 1/96 inch."""

TEXT_CONTRAST, GRAPHICS_CONTRAST = 4.5, 3.0

pytestmark = pytest.mark.skipif(not BROWSER, reason="no chromium; see PROFILEPLAN_BROWSER")


class Case(NamedTuple):
    """A plan and its page."""

    plan: pp.Plan
    file: Path


def over_a_kerb() -> pp.Plan:
    """Return a plan with keep-outs, a part at the tool, and a drawing-free transfer."""
    machine = pp.read_machine(SAMPLES / "kiln-loader" / "cell.toml")
    tile = ((-100.0, -120.0), (100.0, -120.0), (100.0, 120.0), (-100.0, 120.0))
    steps = (
        pp.Payload(mass=1.2, outline=tile, below=10, name="tile <hangs> & waits"),
        pp.Transfer({"x": 1300.0, "y": 320.0, "z": 40.0}),
        pp.Signal({"vacuum": True}),
        pp.Wait(0.2),
        pp.Payload(),
    )
    cycle = pp.Cycle(steps=steps, start={"x": 350.0, "y": 600.0, "z": 250.0}, target=2.5)
    return pp.plan(machine, cycle)


def inspection() -> pp.Plan:
    """Return the plan of a path with a tolerance."""
    machine = SAMPLES / "kiln-loader" / "machine.toml"
    file = SAMPLES / "glaze-inspection" / "pass.csv"
    return pp.plan(pp.load_job(file, machine=machine, tolerance=5.0))


PLANS = {
    "tile-turner": lambda: pp.plan(SAMPLES / "tile-turner" / "cycle.toml"),
    "kiln-loader": lambda: pp.plan(SAMPLES / "kiln-loader" / "cycle.toml"),
    "glaze-inspection": inspection,
    "gasket": lambda: pp.plan(SAMPLES / "sealant-portal" / "gasket.toml"),
    "kerb": over_a_kerb,
}


@pytest.fixture(scope="module")
def cases(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Case]:
    """Return all plans with their pages."""
    folder = tmp_path_factory.mktemp("pages")
    found = {}
    for name, make in PLANS.items():
        plan, file = make(), folder / f"{name}.html"
        plan.report(file)
        found[name] = Case(plan, file)
    return found


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    """Start the browser once."""
    with sync_playwright() as driver:
        started = driver.chromium.launch(executable_path=BROWSER, args=list(FLAGS), headless=True)
        yield started
        started.close()


class Opened(NamedTuple):
    """A page, and what it complained of or asked the network for."""

    page: Page
    trouble: list[str]


@pytest.fixture
def opened(browser: Browser) -> Iterator[Opened]:
    """Return an empty page that notes its trouble."""
    page = browser.new_page(viewport={"width": 1280, "height": 900})
    trouble: list[str] = []
    page.on(
        "console",
        lambda said: trouble.append(said.text) if said.type in {"error", "warning"} else None,
    )
    page.on("pageerror", lambda error: trouble.append(str(error)))
    page.on(
        "request",
        lambda asked: (
            None
            if asked.url.startswith(("file:", "data:"))
            else trouble.append(f"asked for {asked.url}")
        ),
    )
    yield Opened(page, trouble)
    page.close()


def ready(page: Page, case: Case) -> None:
    """Open a plan's page and wait until all of it is drawn."""
    page.goto(case.file.as_uri())
    page.wait_for_function("document.documentElement.dataset.ready === 'all'")


def shown_position(page: Page, plan: pp.Plan) -> list[float]:
    """Return the positions that the page tells, axis by axis."""
    return [
        float(page.locator(f"#value-{axis}-0").inner_text())
        for axis in range(len(plan.trajectory.axes))
    ]


@pytest.mark.parametrize("name", PLANS)
def test_a_page_opens_without_trouble_and_is_all_there(
    name: str, cases: dict[str, Case], opened: Opened
) -> None:
    """It must open from a disk, anywhere, and show a curve for each quantity of each axis."""
    case = cases[name]
    assert case.file.stat().st_size < HEAVIEST
    ready(opened.page, case)
    curves = opened.page.evaluate(
        "planPage.figures().map((own) => [own.axis, own.row.name, own.source.data.t.length])"
    )
    for axis in range(len(case.plan.trajectory.axes)):
        names = [row for index, row, _ in curves if index == axis]
        assert names[:4] == ["position", "velocity", "acceleration", "jerk"], names
    assert all(count > 1 for _, _, count in curves), curves
    drawn = opened.page.evaluate(
        "document.querySelectorAll('.drawing .bk-Figure, .drawing > div').length"
    )
    assert drawn >= len(curves)
    assert not opened.trouble


def drawn_peaks(page: Page, name: str) -> list[float]:
    """Return the greatest magnitude of a quantity that is drawn, axis by axis."""
    found: list[float] = page.evaluate(
        "(name) => planPage.figures().filter((own) => own.row.name === name)"
        ".map((own) => Math.max(...own.source.data.y.map(Math.abs)))",
        name,
    )
    return found


def test_peaks_are_drawn(cases: dict[str, Case], opened: Opened) -> None:
    """Few points enter a figure; exact extremes of velocity and torque must be among them."""
    case = cases["kiln-loader"]
    ready(opened.page, case)
    velocities = drawn_peaks(opened.page, "velocity")
    assert_allclose(velocities, case.plan.trajectory.peaks.velocity.value, rtol=1e-3)
    peaks = [load.peak_torque for load in dynamics.loads(case.plan)]
    exact = [abs(peak.value) for peak in peaks if peak is not None]
    assert len(exact) == 3
    assert_allclose(drawn_peaks(opened.page, "torque"), exact, rtol=1e-6)


@pytest.mark.parametrize("name", ["tile-turner", "glaze-inspection", "kerb"])
def test_the_page_tells_the_planned_position_at_any_time(
    name: str, cases: dict[str, Case], opened: Opened
) -> None:
    """Values and marker come from the browser's own arithmetic: the plan is the other route."""
    case = cases[name]
    plan = case.plan
    ready(opened.page, case)
    columns = opened.page.evaluate("planPage.plan.columns")
    for time in np.linspace(0, plan.duration, 7)[:-1] + 0.01:
        opened.page.evaluate("(time) => planPage.setNow(time)", float(time))
        exact = plan.trajectory.at([time])[0]
        assert_allclose(shown_position(opened.page, plan), exact, rtol=1e-5, atol=1e-6)
        markers = opened.page.evaluate(
            "planPage.spaces().map((own) => [own.sources.now.data.x[0], own.sources.now.data.y[0],"
            " own.right, own.up])"
        )
        for x, y, right, up in markers:
            expected = [0.0 if columns[k] is None else exact[columns[k]] for k in (right, up)]
            assert_allclose([x, y], expected, atol=1e-9, err_msg=f"marker at {time} s")


def uneven(folder: Path) -> Case:
    """Return a move of an axis that slows down harder than it speeds up, without a jerk limit."""
    axis = pp.Axis("x", travel=(0, 900), velocity=500, acceleration=1000, deceleration=2000)
    cycle = pp.Cycle(steps=(pp.Move({"x": 600.0}), pp.Move({"x": 0.0})), start={"x": 0.0})
    plan = pp.plan(pp.Machine("uneven", (axis,)), cycle)
    plan.report(folder / "uneven.html")
    return Case(plan, folder / "uneven.html")


def test_what_lasts_at_a_limit_is_marked_as_long(opened: Opened, tmp_path: Path) -> None:
    """A straight piece has points at its ends alone; all of it is at the limit."""
    case = uneven(tmp_path)
    ready(opened.page, case)
    for name, order, limits in (("velocity", 1, (500, 500)), ("acceleration", 2, (1000, 2000))):
        t = opened.page.evaluate(
            "(name) => [...planPage.figures().find((own) => own.row.name === name).limit.data.t]",
            name,
        )
        ends = np.split(np.array(t, dtype=float), np.flatnonzero(np.isnan(np.array(t, float))))
        lasting = sum(np.ptp(part[~np.isnan(part)]) for part in ends if np.any(~np.isnan(part)))
        times = np.linspace(0, case.plan.duration, 10_001)
        values = np.abs(case.plan.trajectory.at(times, order)[:, 0])
        held = np.isclose(values, limits[0]) | np.isclose(values, limits[1])
        assert lasting == pytest.approx(held.mean() * case.plan.duration, rel=0.03), name


def test_marks_do_not_join_one_limit_to_the_other(cases: dict[str, Case], opened: Opened) -> None:
    """Where a curve is crowded, lines across it would hide the whole of it."""
    ready(opened.page, cases["gasket"])
    marks = opened.page.evaluate("planPage.figures().map((own) => [...own.limit.data.y])")
    assert any(marks)
    for values in (np.array(own, dtype=float) for own in marks):
        assert not np.any(values[1:] * values[:-1] < 0)


def test_bounds_of_an_acceleration_change_where_the_motion_turns(
    opened: Opened, tmp_path: Path
) -> None:
    """Slowing down has another limit than speeding up; there is nothing between the two."""
    case = uneven(tmp_path)
    ready(opened.page, case)
    data = opened.page.evaluate(
        "((data) => ({t: [...data.t], low: [...data.low], high: [...data.high]}))"
        "(planPage.figures().find((own) => own.row.name === 'acceleration').moving.data)"
    )
    velocity = case.plan.trajectory.at(0.5 * (np.array(data["t"])[::2] + data["t"][1::2]), 1)[:, 0]
    onward, back = velocity > 1e-3, velocity < -1e-3
    assert onward.any()
    assert back.any()
    low, high = np.array(data["low"])[::2], np.array(data["high"])[::2]
    assert_allclose(low[onward], -2000)
    assert_allclose(high[onward], 1000)
    assert_allclose(low[back], -1000)
    assert_allclose(high[back], 2000)


def test_a_row_of_the_timeline_is_one_stop_of_the_tab_key(
    cases: dict[str, Case], opened: Opened
) -> None:
    """With hundreds of blocks nobody could go on by keyboard; arrows go from block to block."""
    page = opened.page
    ready(page, cases["kiln-loader"])
    stops = page.evaluate(
        "[...document.querySelectorAll('.lane:has(button)')].map((lane) =>"
        " [...lane.children].filter((own) => own.tabIndex === 0).length)"
    )
    assert set(stops) == {1}
    page.locator(".lane button").first.focus()
    page.keyboard.press("ArrowRight")
    second = page.locator(".lane button").nth(1).get_attribute("data-mark")
    assert page.evaluate("document.activeElement.dataset.mark") == second
    assert page.evaluate("planPage.state.mark.name") == second
    page.keyboard.press("End")
    last = page.locator(".lane").first.locator("button").last.get_attribute("data-mark")
    assert page.evaluate("document.activeElement.dataset.mark") == last


def test_the_tool_stays_within_the_frame(cases: dict[str, Case], opened: Opened) -> None:
    """What moves is on a layer of its own; above the frame of the view nothing of it is painted."""
    page = opened.page
    ready(page, cases["kerb"])
    page.evaluate("planPage.setNow(1)")
    page.wait_for_timeout(200)
    painted = page.evaluate(
        "(() => { const walk = (view) => view.model === planPage.spaces()[1].figure ? view"
        " : [...(view.children?.() ?? [])].map(walk).find(Boolean);"
        " const view = [...Bokeh.index].map(walk).find(Boolean), layer = view.canvas_view.overlays;"
        " const above = layer.canvas.getContext('2d').getImageData(0, 0, layer.canvas.width,"
        " Math.floor((view.frame.bbox.top - 1) * devicePixelRatio)).data;"
        " return [view.frame.bbox.top, above.filter((value) => value > 0).length]; })()"
    )
    assert painted[0] > 1
    assert painted[1] == 0


def test_zoom_is_linked_and_shows_more(cases: dict[str, Case], opened: Opened) -> None:
    """Whoever looks closer at one curve wants to see the others at the same time."""
    case = cases["gasket"]
    ready(opened.page, case)
    opened.page.evaluate("planPage.setNow(11)")
    for _ in range(6):
        opened.page.get_by_role("button", name="Show a shorter time").click()
    opened.page.wait_for_timeout(600)
    ranges = opened.page.evaluate(
        "planPage.figures().map((own) => [own.figure.x_range.start, own.figure.x_range.end])"
    )
    assert_allclose(ranges, np.tile(ranges[0], (len(ranges), 1)))
    start, end = ranges[0]
    assert end - start == pytest.approx(case.plan.duration / 64)
    assert start < 11 < end
    times, values = opened.page.evaluate(
        "((own) => [own.source.data.t, own.source.data.y])(planPage.figures()[1])"
    )
    assert start - 1e-9 <= min(times) <= max(times) <= end + 1e-9
    assert len(times) > 100
    exact = case.plan.trajectory.at(times, 1)[:, 0]
    assert_allclose(values, exact, atol=1e-6 * np.abs(exact).max())


def test_dragging_a_curve_shifts_all(cases: dict[str, Case], opened: Opened) -> None:
    """A figure that is shifted by hand takes the others along."""
    ready(opened.page, cases["kiln-loader"])
    opened.page.evaluate("planPage.setRange(3, 5)")
    box = opened.page.locator("#curves-1 > div").nth(1).bounding_box()
    assert box is not None
    middle = (box["x"] + 0.6 * box["width"], box["y"] + 0.5 * box["height"])
    opened.page.evaluate("(y) => window.scrollTo(0, y - 300)", middle[1])
    box = opened.page.locator("#curves-1 > div").nth(1).bounding_box()
    assert box is not None
    opened.page.mouse.move(box["x"] + 0.6 * box["width"], box["y"] + 60)
    opened.page.mouse.down()
    opened.page.mouse.move(box["x"] + 0.6 * box["width"] - 60, box["y"] + 60, steps=4)
    opened.page.mouse.up()
    opened.page.wait_for_timeout(600)
    starts = opened.page.evaluate("planPage.figures().map((own) => own.figure.x_range.start)")
    assert starts[0] > 3.05, "the time shown did not shift"
    assert_allclose(starts, starts[0])


def test_playback_moves_the_marker_along_the_plan(cases: dict[str, Case], opened: Opened) -> None:
    """What plays is the plan at its own pace, and it ends where the cycle ends."""
    case = cases["tile-turner"]
    ready(opened.page, case)
    opened.page.get_by_role("button", name="Play").click()
    opened.page.wait_for_function("planPage.state.now > 0.5")
    time, x = opened.page.evaluate(
        "[planPage.state.now, planPage.spaces()[0].sources.now.data.x[0]]"
    )
    assert x == pytest.approx(case.plan.trajectory.at([time])[0, 0], abs=1e-6)
    opened.page.get_by_role("button", name="Pause").click()
    stopped = opened.page.evaluate("planPage.state.now")
    opened.page.wait_for_timeout(150)
    assert opened.page.evaluate("planPage.state.now") == stopped
    opened.page.evaluate("(time) => planPage.setNow(time)", case.plan.duration - 0.05)
    opened.page.get_by_role("button", name="Play").click()
    opened.page.wait_for_function("!planPage.state.playing")
    assert opened.page.evaluate("planPage.state.now") == pytest.approx(case.plan.duration)


def test_less_motion_is_given_where_it_is_asked_for(
    cases: dict[str, Case], browser: Browser
) -> None:
    """With ``prefers-reduced-motion`` playing shows four pictures a second, and no transitions."""
    page = browser.new_page(reduced_motion="reduce")
    ready(page, cases["tile-turner"])
    seen = page.evaluate(
        "new Promise((done) => { const seen = new Set(); document.getElementById('play').click();"
        " const look = () => { seen.add(planPage.state.now); if (performance.now() < end)"
        " requestAnimationFrame(look); else done(seen.size); };"
        " const end = performance.now() + 1000; look(); })"
    )
    assert 2 <= seen <= 6
    transition = page.evaluate(
        "getComputedStyle(document.querySelector('.block')).transitionDuration"
    )
    assert transition == "0s"
    page.close()


def test_the_keyboard_does_all(cases: dict[str, Case], opened: Opened) -> None:
    """Who cannot use a pointer plays, scrubs, zooms and marks steps by keys."""
    page = opened.page
    ready(page, cases["kiln-loader"])
    page.keyboard.press("Space")
    page.wait_for_function("planPage.state.now > 0.1")
    page.keyboard.press("Escape")
    assert not page.evaluate("planPage.state.playing")
    page.keyboard.press("+")
    assert page.evaluate("planPage.state.to - planPage.state.from") == pytest.approx(
        9.517 / 2, 1e-3
    )
    page.keyboard.press(".")
    shifted = page.evaluate("planPage.state.from")
    assert shifted > 0
    page.keyboard.press(",")
    assert page.evaluate("planPage.state.from") < shifted
    page.keyboard.press("0")
    assert page.evaluate("planPage.state.from") == 0
    page.locator("#scrub").focus()
    before = page.evaluate("planPage.state.now")
    page.keyboard.press("ArrowRight")
    assert page.evaluate("planPage.state.now") > before
    reached: set[str] = set()
    page.evaluate("document.activeElement.blur()")
    for _ in range(80):
        page.keyboard.press("Tab")
        reached.add(page.evaluate("document.activeElement.id || document.activeElement.className"))
    for needed in ("theme", "play", "pace", "scrub", "closer", "whole", "block step", "scroll"):
        assert any(name.startswith(needed) for name in reached), f"{needed} not reached: {reached}"


def test_a_focused_step_is_marked_everywhere(cases: dict[str, Case], opened: Opened) -> None:
    """Timeline, table, curves and views are about the same steps."""
    page, plan = opened.page, cases["kiln-loader"].plan
    ready(page, cases["kiln-loader"])
    index = next(k for k, step in enumerate(plan.steps) if step.name == "back to the stack")
    page.locator(f"button[data-mark='step-{index}']").focus()
    assert page.locator(f"tr[data-mark='step-{index}'].marked").count() == 1
    bands = page.evaluate(
        "planPage.figures().map((own) => [own.mark.visible, own.mark.left, own.mark.right])"
    )
    step = plan.steps[index]
    assert all(visible for visible, _, _ in bands)
    assert_allclose([band[1:] for band in bands], np.tile([step.start, step.end], (len(bands), 1)))
    path = page.evaluate("planPage.spaces()[0].sources.step.data.x")
    low, high = sorted((plan.positions[index][0], plan.positions[index + 1][0]))
    assert min(path) == pytest.approx(low, abs=1)
    assert max(path) == pytest.approx(high, abs=1)
    page.locator("#play").focus()
    assert page.locator(".marked").count() == 0


def test_signals_and_payload_are_marked_too(cases: dict[str, Case], opened: Opened) -> None:
    """What is on for a time is shown in the curves for that time."""
    page, plan = opened.page, cases["kiln-loader"].plan
    ready(page, cases["kiln-loader"])
    on, off = (event.time for event in plan.events[:2])
    page.get_by_role("button", name=re.compile("^vacuum, ")).first.hover()
    left, right = page.evaluate("((own) => [own.mark.left, own.mark.right])(planPage.figures()[0])")
    assert plan.events[0].signal == "vacuum"
    assert (left, right) == pytest.approx((on, off))
    assert page.get_by_role("button", name=re.compile("^4.1 kg")).count() == 2


def test_views_are_zoomed_by_buttons(cases: dict[str, Case], opened: Opened) -> None:
    """Without a wheel one looks closer at the tool point, with equal scales, and back."""
    page = opened.page
    ready(page, cases["kiln-loader"])
    page.evaluate("planPage.setNow(1.5)")
    ranges = (
        "((own) => [own.figure.x_range.start, own.figure.x_range.end, own.figure.y_range.start,"
        " own.figure.y_range.end, own.sources.now.data.x[0]])(planPage.spaces()[0])"
    )
    before = page.evaluate(ranges)
    page.get_by_role("button", name="plan view, closer").click()
    left, right, low, high, x = page.evaluate(ranges)
    assert (left + right) / 2 == pytest.approx(x)
    assert right - left == pytest.approx((before[1] - before[0]) / 2)
    assert high - low == pytest.approx((before[3] - before[2]) / 2)
    page.get_by_role("button", name="plan view, whole").click()
    assert page.evaluate(ranges) == before


def test_deviations_are_magnified_from_what_is_drawn(
    cases: dict[str, Case], opened: Opened
) -> None:
    """Five times as far from the line as it is, on the same side, by shapely's distances."""
    case = cases["glaze-inspection"]
    ready(opened.page, case)
    step = case.plan.job.cycle.steps[0]
    assert isinstance(step, pp.PathStep)
    start = case.plan.positions[0]
    line = shapely.LineString(np.array([start, *case.plan.job.points(0, start)])[:, :2])
    choices = opened.page.locator("#magnify option").all()
    factor = int(choices[-1].get_attribute("value") or "0")
    assert factor > 1
    opened.page.select_option("#magnify", str(factor))
    points = opened.page.evaluate(
        "((data) => [data.x0, data.y0])(planPage.spaces()[0].sources.path.data)"
    )
    away = shapely.distance(line, shapely.points(np.array(points).T))
    times = np.linspace(0, case.plan.duration, 20_001)
    true = shapely.distance(line, shapely.points(case.plan.trajectory.at(times)[:, :2]))
    assert away.max() <= factor * true.max() * 1.01
    assert away.max() > 0.6 * factor * true.max()


def test_the_smallest_clearance_is_shown_where_it_is(
    cases: dict[str, Case], opened: Opened
) -> None:
    """The line between tool and keep-out is as long in plan as shapely says, or over it."""
    ready(opened.page, cases["kerb"])
    meeting = opened.page.evaluate("planPage.plan.meeting")
    finding = next(own for own in cases["kerb"].plan.check() if own.check == "clearance")
    assert meeting["time"] == finding.time
    assert meeting["label"] == f"{finding.value:.4g} mm"
    gap = float(np.hypot(*np.subtract(*meeting["gap"])))
    heights = meeting["heights"] or (0.0, 0.0)
    drop = abs(heights[0] - heights[1])
    assert np.hypot(gap, drop) == pytest.approx(finding.value, abs=0.05)


@pytest.mark.parametrize("name", ["tile-turner", "kerb"])
def test_the_first_screen_has_the_verdict(
    name: str, cases: dict[str, Case], opened: Opened
) -> None:
    """No reading is needed to see trouble; a sign beside the colour tells it too."""
    case = cases[name]
    ready(opened.page, case)
    tiles = opened.page.locator(".tile")
    assert tiles.count() == 5
    box = opened.page.locator("#verdict").bounding_box()
    assert box is not None
    assert box["y"] + box["height"] < 900
    met = all(finding.ok for finding in case.plan.check())
    first = tiles.nth(0).inner_text()
    assert ("✓" in first) == met
    assert ("✕" in first) == (not met)
    assert f"{case.plan.duration:.3f} s" in tiles.nth(1).inner_text()
    assert opened.page.locator(".caution").first.is_visible()


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_axe_finds_nothing_against_the_page(
    scheme: str, cases: dict[str, Case], browser: Browser
) -> None:
    """axe-core's rules, among them contrast of texts and names of all controls."""
    page = browser.new_page(viewport={"width": 1280, "height": 900}, color_scheme=scheme)  # type: ignore[arg-type]  # one of its words
    ready(page, cases["kerb"])
    assert page.evaluate("document.documentElement.dataset.theme") == scheme
    results = Axe().run(page)
    assert results.violations_count == 0, results.generate_report()
    page.close()


def contrast(one: str, other: str) -> float:
    """Return the contrast of two colours, #rrggbb, as WCAG 2.2 defines it."""
    lights = []
    for color in (one, other):
        shares = np.array([int(color[k : k + 2], 16) for k in (1, 3, 5)]) / 255
        linear = np.where(shares <= 0.04045, shares / 12.92, ((shares + 0.055) / 1.055) ** 2.4)
        lights.append(float(linear @ [0.2126, 0.7152, 0.0722]))
    return (max(lights) + 0.05) / (min(lights) + 0.05)


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_drawings_have_contrast(theme: str, cases: dict[str, Case], browser: Browser) -> None:
    """What is drawn in a canvas no rule checker sees: lines 3 to 1, texts 4.5 to 1."""
    page = browser.new_page(color_scheme=theme)  # type: ignore[arg-type]  # one of its words
    ready(page, cases["tile-turner"])

    def color(name: str) -> str:
        found: str = page.evaluate(
            "(name) => getComputedStyle(document.documentElement).getPropertyValue(name).trim()",
            f"--{name}",
        )
        return found

    paper = color("paper")
    assert contrast("#ffffff", "#767676") == pytest.approx(4.54, abs=0.01), "a known pair"
    for name in ("ink", "quiet", "warn", "good"):
        assert contrast(color(name), paper) >= TEXT_CONTRAST, name
    lines = ("accent", "limit", "beyond", "drawn", "band-edge", "part", "warn")
    for name in (*lines, *(f"speed-{k}" for k in range(5))):
        assert contrast(color(name), paper) >= GRAPHICS_CONTRAST, name
    steps = [contrast(color(f"speed-{k}"), paper) for k in range(5)]
    assert steps == sorted(steps), "faster is stronger, without colour vision too"
    page.close()


@pytest.mark.parametrize("name", ["tile-turner", "gasket"])
def test_a_narrow_screen_needs_no_sideways_scrolling(
    name: str, cases: dict[str, Case], browser: Browser
) -> None:
    """On a telephone beside the machine the page is as wide as the screen."""
    page = browser.new_page(viewport={"width": 400, "height": 800})
    ready(page, cases[name])
    assert page.evaluate("document.scrollingElement.scrollWidth") <= 400
    page.close()


@pytest.mark.parametrize("name", ["kiln-loader", "gasket", "kerb"])
def test_nothing_is_cut_on_paper(
    name: str, cases: dict[str, Case], browser: Browser, tmp_path: Path
) -> None:
    """On A4 every table and drawing is as wide as the paper at most, and no row is split."""
    page = browser.new_page(viewport={"width": PAPER, "height": 1000})
    ready(page, cases[name])
    page.emulate_media(media="print")
    page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    wide = page.evaluate(
        "[...document.querySelectorAll('table, .drawing, .tile, .lanes')].filter((own) =>"
        " own.getBoundingClientRect().right > innerWidth + 1)"
        ".map((own) => own.id || own.className || own.innerText.slice(0, 40))"
    )
    assert not wide
    breaks = page.evaluate(
        "[...document.querySelectorAll('tr, figure')].every((own) =>"
        " getComputedStyle(own).breakInside === 'avoid')"
    )
    assert breaks
    assert page.locator(".controls").is_hidden()
    page.emulate_media(media=None)
    printed = page.pdf(path=tmp_path / "page.pdf", prefer_css_page_size=True)
    sizes = re.findall(rb"/MediaBox\s*\[\s*0 0 ([\d.]+) ([\d.]+)\s*\]", printed)
    assert sizes
    assert all(abs(float(w) - 595) < 2 and abs(float(h) - 842) < 2 for w, h in sizes), "A4"
    page.close()


def test_the_theme_can_be_switched(cases: dict[str, Case], opened: Opened) -> None:
    """All is drawn anew in the other colours, at the same time and zoom."""
    page = opened.page
    ready(page, cases["kiln-loader"])
    page.evaluate("planPage.setNow(2); planPage.setRange(1, 3)")
    before = page.locator("#curves-0 > div").count()
    page.locator("#theme").click()
    page.wait_for_function("document.documentElement.dataset.ready === 'all'")
    assert page.evaluate("document.documentElement.dataset.theme") == "dark"
    state = page.evaluate(
        "[planPage.state.now, planPage.figures()[0].figure.x_range.start,"
        " planPage.figures()[0].figure.x_range.end, planPage.figures().length]"
    )
    assert state[:3] == [2, 1, 3]
    assert page.locator("#curves-0 > div").count() == before
    assert state[3] == 18
    assert not opened.trouble
