"""How long the pages of a run take to write, and the run page to open.

Run by hand: ``python -m tests.benchmarks.test_pages_speed`` (about three minutes) writes
``reports/benchmarks/pages.md``; ``pytest -m benchmark tests/benchmarks`` checks the aims.

The results are made up (tests/report/factory.py): 1,000 traditions, 2,200 motifs, each with all
optional parts: map, four worlds, correlogram, route shares, 41 sensitivity runs, power and related
motifs. Pages are written by one process on one core, so that its processor time is what a machine
with nothing else to do would take; the time by the clock stands beside it. The page with 20,000
motifs is opened in Chromium from disk: by the clock from the start of navigation to the second
frame after loading, which has the table in it, and the processor time of the page's thread till
then (Chromium's ``TaskDuration`` in thread ticks).
"""

from __future__ import annotations

import os
import platform
import shutil
import sys
import tempfile
import time
from pathlib import Path
from statistics import median

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "report"))
import factory

from twicetold.report import write_pages

pytestmark = pytest.mark.benchmark
MOTIFS, TRADITIONS, ROWS = 2_200, 1_000, 20_000
ROUNDS, OPENINGS = 3, 9
READY = """new Promise(done => requestAnimationFrame(() => requestAnimationFrame(() => done([
  performance.now(),
  document.querySelectorAll('#motif-table tbody a').length,
]))))"""


def writing() -> tuple[list[tuple[float, float]], list[int]]:
    """Give (processor, clock) seconds of each round, and the sizes of the motif pages in bytes."""
    ranking = factory.make_ranking(TRADITIONS, MOTIFS)
    times, sizes = [], []
    for _ in range(ROUNDS):
        with tempfile.TemporaryDirectory() as folder:
            processor, clock = time.process_time(), time.perf_counter()
            write_pages(ranking, Path(folder), command=factory.COMMAND)
            times.append((time.process_time() - processor, time.perf_counter() - clock))
            sizes = [p.stat().st_size for p in (Path(folder) / "motifs").iterdir()]
    return times, sizes


def opening() -> list[tuple[float, float]]:
    """Give (processor, clock) seconds from navigation to the table on screen, each time anew."""
    from playwright.sync_api import sync_playwright

    many = factory.many_motifs(factory.make_ranking(), ROWS)
    out = []
    with tempfile.TemporaryDirectory() as folder, sync_playwright() as p:
        url = factory.write_run_page(many, Path(folder)).resolve().as_uri()
        path = shutil.which("chromium") or shutil.which("chromium-browser")
        browser = p.chromium.launch(executable_path=path, args=["--no-sandbox", "--disable-gpu"])
        for _ in range(OPENINGS):
            context = browser.new_context(viewport={"width": 1600, "height": 900}, offline=True)
            page = context.new_page()
            inspector = context.new_cdp_session(page)
            inspector.send("Performance.enable", {"timeDomain": "threadTicks"})
            page.goto(url)
            milliseconds, rows = page.evaluate(READY)
            assert rows > 10
            metrics = inspector.send("Performance.getMetrics")["metrics"]
            busy = next(m["value"] for m in metrics if m["name"] == "TaskDuration")
            out.append((float(busy), milliseconds / 1000))
            context.close()
        browser.close()
    return out


def report(
    times: list[tuple[float, float]], sizes: list[int], opened: list[tuple[float, float]]
) -> str:
    """Write what was measured as Markdown."""
    lines = [
        "# Pages: time to write and to open",
        "",
        "Made by `python -m tests.benchmarks.test_pages_speed`; the module's docstring says what "
        "was measured.",
        "",
        f"Python {platform.python_version()}, {platform.machine()}, {os.cpu_count()} cores. "
        f"Medians of {len(times)} rounds of writing and {len(opened)} openings; lowest and highest "
        "in brackets.",
        "",
        "| what | aim | found |",
        "|---|---|---|",
        f"| run page and {len(sizes):,} motif pages, {TRADITIONS:,} traditions, processor time of "
        f"one process | under 60 s on two cores | {spread(times, 0)} |",
        f"| the same by the clock | | {spread(times, 1)} |",
        f"| largest motif page | under 300 kB | {max(sizes) / 1000:.0f} kB |",
        f"| run page with {ROWS:,} table rows till its table is on screen, processor time of the "
        f"page's thread | under 1 s | {spread(opened, 0)} |",
        f"| the same by the clock | under 1 s | {spread(opened, 1)} |",
        "",
        "Load of the machine at the end (runnable tasks, one minute): "
        f"{os.getloadavg()[0]:.1f}. Where it is above the number of cores, times by the clock are "
        "longer than on a machine with nothing else to do.",
        "",
    ]
    return "\n".join(lines)


def spread(times: list[tuple[float, float]], k: int) -> str:
    """Write the median, and the lowest and highest in brackets."""
    values = [t[k] for t in times]
    return f"{median(values):.2f} s ({min(values):.2f} to {max(values):.2f})"


def test_pages_are_written_and_opened_in_time():
    times, sizes = writing()
    assert median(t[0] for t in times) < 60
    assert max(sizes) < 300_000
    opened = opening()
    assert median(t[0] for t in opened) < 1
    # The quickest by the clock is the one least disturbed by whatever else the machine does.
    assert min(t[1] for t in opened) < 1


def main() -> None:
    """Measure and write the report."""
    text = report(*writing(), opening())
    target = Path(__file__).parents[2] / "reports" / "benchmarks" / "pages.md"
    target.write_text(text, encoding="utf-8")
    print(text)


if __name__ == "__main__":
    main()
