"""Relations against a surveyed lake's open elevation-area-volume table.

Source: public repository WDNR-Water-Use/CSLSdata (MIT), see data/lake_table/SOURCE.txt. The daily area there is the table
interpolated at the gauged level. Expected, computed beforehand from that file: power law with offset fits the daily pairs to
127 m2 (0.05 % of the largest area) by least squares.
"""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from inundate.relation import RelationOptions, fit_relations

DATA = Path(__file__).parent / "data/lake_table"


@pytest.fixture(scope="module")
def lake():
    table = pd.read_csv(DATA / "elevation_area_volume.csv")
    daily = pd.read_csv(DATA / "level_daily.csv", parse_dates=["date"])
    low = table["elev_m"].iloc[0]
    return table.assign(stage_m=table["elev_m"] - low), daily.assign(stage_m=daily["level_m"] - low).dropna()


def pairs_of(stage, area, dates=None):
    when = pd.date_range("2031-01-01", periods=len(stage)) if dates is None else dates
    return pd.DataFrame(
        {
            "wetland_id": "lake",
            "date": when,
            "stage_m": np.asarray(stage),
            "stage_sd_m": 0.005,
            "area_m2": np.asarray(area),
            "area_sd_m2": 0.01 * np.max(area),
        }
    )


def test_whole_table_from_thirty_of_its_rows(lake):
    table, _ = lake
    size = float(table["area_m2"].max())
    some = table.iloc[np.linspace(2, len(table) - 1, 30).astype(int)].sample(frac=1, random_state=3)
    wetlands = pd.DataFrame({"wetland_id": ["lake"], "area_max_m2": [size]})
    got = fit_relations(pairs_of(some["stage_m"], some["area_m2"]), wetlands)
    error = (got.predict("lake", table["stage_m"])["area_m2"].to_numpy() - table["area_m2"].to_numpy()) / size
    tabled = got.table(0.01)
    volume = np.interp(table["stage_m"], tabled["stage_m"], tabled["volume_m3"])
    off = volume[-1] / table["vol_m3"].iloc[-1] - 1
    print(
        f"\nlake table: {got.relations['family'].iloc[0]}, area rmse {100 * np.sqrt(np.mean(error**2)):.2f} % of largest, worst "
        f"{100 * np.abs(error).max():.2f} %, volume at the top {100 * off:+.2f} %"
    )
    # a surveyed bed is no power law; five free knots follow it to about two percent
    assert np.sqrt(np.mean(error**2)) < 0.03
    assert abs(off) < 0.03


def test_two_years_of_levels(lake):
    table, daily = lake
    wetlands = pd.DataFrame({"wetland_id": ["lake"], "area_max_m2": [float(table["area_m2"].max())]})
    some = daily.iloc[::12]
    options = RelationOptions(families=("power_offset",))
    got = fit_relations(pairs_of(some["stage_m"], some["area_m2"], some["date"]), wetlands, options=options)
    left = got.predict("lake", daily["stage_m"])["area_m2"].to_numpy() - daily["area_m2"].to_numpy()
    rmse = float(np.sqrt(np.mean(left**2)))
    print(f"\nlake, two years of levels: rmse {rmse:.0f} m2 ({100 * rmse / daily['area_m2'].max():.2f} %)")
    # least squares without prior or errors in stage reaches 127 m2
    assert rmse < 700


def test_the_elevation_family_repeats_the_survey(lake):
    table, _ = lake
    size = float(table["area_m2"].max())
    wetlands = pd.DataFrame({"wetland_id": ["lake"], "area_max_m2": [size]})
    heights = pd.DataFrame({"wetland_id": "lake", "stage_m": table["stage_m"], "area_m2": table["area_m2"]})
    empty = pairs_of([0.1], [1.0]).iloc[:0]
    got = fit_relations(empty, wetlands, heights)
    assert got.relations["family"].iloc[0] == "elevation"
    above = table["area_m2"] > 0.05 * size
    error = (got.predict("lake", table["stage_m"])["area_m2"] - table["area_m2"].to_numpy())[above.to_numpy()] / size
    # 161 columns of a 4.6 m deep table
    assert np.abs(error).max() < 0.01
