"""Size of the page and time to write it: 40 wetlands x 3 years, 2,000 wetlands x 10 years.

Run as ``python -m tests.bench.report_size [small|large]``. Opening times are taken in headless chromium from the start of
navigation until the table, the map and the first charts stand.
"""

from __future__ import annotations

import resource
import shutil
import sys
import tempfile
import time
from pathlib import Path

from inundate.products.report import write_report
from tests.report_world import make_tables

CASES = {"small": (40, 3 * 365 + 1, 6, 10), "large": (2000, 3652, 4, 40)}


def open_seconds(file: Path) -> list[float]:
    """Seconds to open the page, three times; empty without chromium."""
    found = shutil.which("chromium")
    if found is None:
        return []
    from playwright.sync_api import sync_playwright

    out = []
    with sync_playwright() as play:
        engine = play.chromium.launch(executable_path=found, args=["--no-sandbox"])
        for _ in range(3):
            page = engine.new_page(viewport={"width": 1400, "height": 900})
            start = time.perf_counter()
            page.goto(file.as_uri())
            page.evaluate("() => Charts.busy")
            out.append(time.perf_counter() - start)
            page.close()
        engine.close()
    return out


def main(names: list[str]) -> None:
    """Print size and times of the cases."""
    for case in names or list(CASES):
        wetlands, days, pictures, logged = CASES[case]
        tables = make_tables([f"W{i:04d}" for i in range(wetlands)], days, n_logged=logged, pictures=pictures)
        with tempfile.TemporaryDirectory() as scratch:
            folder = Path(scratch)
            start = time.perf_counter()
            write_report(folder, tables)
            seconds = time.perf_counter() - start
            index = (folder / "report.html").stat().st_size
            pages = sum(f.stat().st_size for f in (folder / "report_wetlands").rglob("*")) if wetlands > 200 else 0
            opened = ", ".join(f"{s:.2f}" for s in open_seconds(folder / "report.html"))
            print(
                f"{wetlands} wetlands x {days} days, {pictures} views pictured, {logged} logged: written in {seconds:.1f} s;"
                f" report.html {index / 1e6:.2f} MB, wetland pages {pages / 1e6:.1f} MB; opens in {opened} s;"
                f" peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB (tables included)"
            )


if __name__ == "__main__":
    main(sys.argv[1:])
