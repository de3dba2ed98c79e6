"""Time and memory of the leaf calendar against one plain fit a wetland and year, in one run.

python -m tests.bench.leaves_speed [--wetlands 2000] [--years 10]
"""

from __future__ import annotations

import argparse
import resource
import time

import numpy as np
from scipy.optimize import curve_fit

from inundate.leaves import LeafCalendar, beck
from tests.leaves_world import world

PLAIN = 200
"""Wetland-years fitted the plain way; their time is scaled up."""


def curve(day: np.ndarray, *p: float) -> np.ndarray:
    return beck(day, p[0], p[1], (p[2], np.exp(p[3])), (p[4], np.exp(p[5])))


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--wetlands", type=int, default=2000)
    parser.add_argument("--years", type=int, default=10)
    given = parser.parse_args()
    LeafCalendar().fit(world(wetlands=8)[0])
    greenness, truth = world(wetlands=given.wetlands, years=range(2031, 2031 + given.years))
    start = time.process_time()
    calendar = LeafCalendar().fit(greenness)
    ours = time.process_time() - start
    start = time.process_time()
    calendar.daily(np.arange("2031-01-01", "2032-01-01", dtype="datetime64[D]"))
    daily = time.process_time() - start
    groups = list(greenness.groupby(["wetland_id", greenness["date"].dt.year]))[:PLAIN]
    start = time.process_time()
    for _, one in groups:
        try:
            day = one["date"].dt.day_of_year.to_numpy(float)
            guess = (0.2, 0.8, 120, -2, 290, -2)
            limits = ([-0.5, 0.2, 60, -4, 200, -4], [0.6, 1.2, 200, 1, 360, 1])
            curve_fit(curve, day, one["ndvi"], guess, bounds=limits, max_nfev=5000)
        except RuntimeError:
            continue
    plain = (time.process_time() - start) / len(groups) * given.wetlands * given.years
    both = calendar.seasons_.merge(truth[truth["kind"] == "deciduous"], on=["wetland_id", "year"])
    off = [
        (both[a].dt.day_of_year - both[b]).abs().median()
        for a, b in (("green_up_mid", "up"), ("leaf_fall_mid", "down"))
    ]
    print(
        f"{len(greenness)} views, {given.wetlands} wetlands, {given.years} years: fit {ours:.1f} s, plain fits {plain:.1f} s "
        f"(from {len(groups)}), ratio {plain / ours:.1f}; one year of days {daily:.2f} s; "
        f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB; "
        f"median error {off[0]:.1f} and {off[1]:.1f} days"
    )


if __name__ == "__main__":
    main()
