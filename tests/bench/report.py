"""What does the page cost, over planning and export of the same cycle, and how soon is it ready?

Run by hand: ``python tests/bench/report.py``. Each job is planned, exported and put on a page in a
fresh interpreter, so that what must be imported counts; the middle of five runs. Aims: the page
takes at most as long as the rest, and is drawn within 2 s of opening in Chromium.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

from playwright.sync_api import sync_playwright

SAMPLES = Path(__file__).parents[2] / "samples"

JOBS = {
    "tile-turner": "tile-turner/cycle.toml",
    "kiln-loader": "kiln-loader/cycle.toml",
    "gasket": "sealant-portal/gasket.toml",
    "pallet": "kiln-loader/pallet.toml",
}

RUNS = {"pallet": 1, "gasket": 3}
"""Jobs that are planned for long are run less often than five times."""

BROWSER = "/usr/bin/chromium"

FLAGS = (
    *("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run"),
    *("--disable-background-networking", "--disable-component-update", "--disable-sync"),
)

MEASURED = """
import sys, time
started = time.perf_counter()
import profileplan as pp
from profileplan import setpoints
plan = pp.plan(sys.argv[1])
plan.check()
setpoints.write_table(plan, __import__("pathlib").Path(sys.argv[2]) / "setpoints.csv")
exported = time.perf_counter()
plan.report(sys.argv[2] + "/report.html")
print(exported - started, time.perf_counter() - exported)
"""


def built(source: Path, folder: Path, runs: int) -> tuple[float, float]:
    """Return how long planning with export takes, and how long the page does [s]."""
    found = []
    for _ in range(runs):
        result = subprocess.run(
            [sys.executable, "-c", MEASURED, str(source), str(folder)],
            capture_output=True,
            text=True,
            check=True,
        )
        found.append([float(word) for word in result.stdout.split()])
    rest, page = zip(*found, strict=True)
    return statistics.median(rest), statistics.median(page)


def drawn(file: Path, runs: int = 5) -> tuple[float, float]:
    """Return when the first curves are there after opening a page, and when all are [s]."""
    first: list[float] = []
    whole: list[float] = []
    with sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=BROWSER, args=list(FLAGS))
        for _ in range(runs):
            page = browser.new_page(viewport={"width": 1280, "height": 900})
            page.goto(file.as_uri())
            page.wait_for_function("document.documentElement.dataset.ready === 'all'")
            for name, times in (("first", first), ("all", whole)):
                mark = f"performance.getEntriesByName('ready {name}')[0].startTime"
                times.append(page.evaluate(mark) / 1000)
            page.close()
        browser.close()
    return statistics.median(first), statistics.median(whole)


def main() -> None:
    """Print a row for each job."""
    print("job            page / (plan + export)   page s   MB     first curves s   all s")
    for name, source in JOBS.items():
        with tempfile.TemporaryDirectory() as folder:
            rest, page = built(SAMPLES / source, Path(folder), RUNS.get(name, 5))
            file = Path(folder) / "report.html"
            first, whole = drawn(file)
            size = file.stat().st_size / 1e6
        print(
            f"{name:13}  {page / rest:22.2f}   {page:6.3f}   {size:.2f}   "
            f"{first:14.2f}   {whole:.2f}"
        )


if __name__ == "__main__":
    main()
