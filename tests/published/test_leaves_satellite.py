"""Leaf dates of four real 500 m pixels, 16-day composites, 18 years (MOD13A1 at flux towers; MODIS data are public domain).

Read from a folder beside the repository; skipped where it is absent. Plain fits of the double logistic to the deciduous
site's enhanced vegetation index spread by 12.6 days (green-up) and 9.7 days (leaf fall) between years, one fit a year.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import curve_fit

from inundate.leaves import LeafCalendar, beck

TABLE = Path(__file__).parents[3] / "shared" / "realdata" / "modis_flux_sites" / "mod13a1_4sites.csv"
pytestmark = pytest.mark.skipif(not TABLE.exists(), reason="the table of real pixels is not beside the repository")
BEECH, SPRUCE = "IT-Col", "DE-Obe"


@pytest.fixture(scope="module")
def views() -> pd.DataFrame:
    """Good and marginal views at the day they were taken (which may fall into the year after the composite's start)."""
    table = pd.read_csv(TABLE)
    start = pd.to_datetime(table["date"])
    year = start.dt.year + (table["DayOfYear"] < start.dt.day_of_year - 20)
    table["day"] = pd.to_datetime(year.astype(str), format="%Y") + pd.to_timedelta(table["DayOfYear"] - 1, unit="D")
    return table[(table["SummaryQA"] <= 1) & (table["NDVI"].abs() <= 10000)]


def frame(views: pd.DataFrame, sites: list[str], index: str) -> pd.DataFrame:
    mine = views[views["site"].isin(sites)]
    return pd.DataFrame({"wetland_id": mine["site"], "date": mine["day"], "ndvi": mine[index] / 1e4})


def plain_fits(table: pd.DataFrame) -> np.ndarray:
    """Middles of green-up and leaf fall, one unguided least-squares fit a year."""

    def curve(day: np.ndarray, *p: float) -> np.ndarray:
        return beck(day, p[0], p[1], (p[2], np.exp(p[3])), (p[4], np.exp(p[5])))

    out = []
    for _, year in table.groupby(table["date"].dt.year):
        if len(year) >= 12:
            day = year["date"].dt.day_of_year.to_numpy(float)
            start = (0.2, 0.7, 130, np.log(0.1), 280, np.log(0.1))
            limits = ([-0.2, 0.2, 60, -4, 200, -4], [0.6, 1.0, 200, 1, 360, 1])
            out.append(curve_fit(curve, day, year["ndvi"], start, bounds=limits, max_nfev=20000)[0][[2, 4]])
    return np.array(out)


def spread(days: np.ndarray) -> float:
    """Robust standard deviation: one year whose leaves were lost in spring and grew again in July is no measure."""
    return float(1.4826 * np.median(np.abs(days - np.median(days))))


def test_deciduous_dates_spread_no_more_than_plain_fits(views: pd.DataFrame) -> None:
    table = frame(views, [BEECH], "EVI")
    plain = plain_fits(table)
    calendar = LeafCalendar(dense_greenness=0.6, bare_greenness=0.12, saturation=False).fit(table)
    assert calendar.cover_ == {BEECH: "deciduous"}
    rows = calendar.seasons_[calendar.seasons_["n_views"] >= 12]
    assert len(rows) == len(plain) >= 17
    up, fall = (rows[c].dt.day_of_year.to_numpy(float) for c in ("green_up_mid", "leaf_fall_mid"))
    assert spread(up) <= spread(plain[:, 0])
    assert spread(fall) <= spread(plain[:, 1])
    assert spread(up) <= 12.6
    assert fall.std(ddof=1) <= 9.7
    assert abs(np.median(up) - 130.7) <= 12.6  # agrees with the plain fits' mean within their spread


def test_evergreen_is_never_taken_for_deciduous(views: pd.DataFrame) -> None:
    """Spruce under winter snow: its dips are not leaf fall, alone or in company."""
    assert LeafCalendar().fit(frame(views, [SPRUCE], "NDVI")).cover_[SPRUCE] == "evergreen"
    together = LeafCalendar().fit(frame(views, list(views["site"].unique()), "NDVI"))
    assert together.cover_[SPRUCE] == "evergreen"
    assert together.cover_[BEECH] == "deciduous"
    by_evi = LeafCalendar(dense_greenness=0.6, bare_greenness=0.12).fit(frame(views, [SPRUCE], "EVI"))
    assert by_evi.cover_[SPRUCE] != "deciduous"
