"""Product files: exact columns, open standards, same bytes for the same rows."""

import numpy as np
import pandas as pd
import pytest
import rasterio
import xarray as xr
from rio_cogeo import cog_validate

from inundate.common.grid import Grid, Window
from inundate.products import COLUMNS, changes, write_daily_netcdf, write_draws_netcdf, write_map, write_product_table
from inundate.products.tables import shape_table

GRID = Grid("EPSG:32633", 500_000.0, 5_800_000.0, 10.0, 700, 600)


def daily_table(wetlands=("w-1", "wé2"), days=5):
    dates = pd.date_range("2033-01-01", periods=days)
    rows = [
        {
            "wetland_id": w,
            "date": d,
            "area_m2": 10.0 * i + j,
            "area_lo_m2": 1.0,
            "area_hi_m2": 100.0,
            "basis": "season" if j % 2 else "observed",
            "leaf_state": "leaf_on",
        }
        for i, w in enumerate(wetlands)
        for j, d in enumerate(dates)
    ]
    return pd.DataFrame(rows)


WETLANDS = pd.DataFrame(
    {
        "wetland_id": ["w-1", "wé2"],
        "x": [500_100.0, 503_000.0],
        "y": [5_799_000.0, 5_798_000.0],
        "area_max_m2": [900.0, 5e4],
    }
)


@pytest.mark.parametrize("small", [True, False])
def test_map_is_a_valid_cog_with_its_values(tmp_path, monkeypatch, small):
    """Both ways of writing pass the COG validator and hold the blocks where they belong, 255 elsewhere."""
    if not small:
        monkeypatch.setattr("inundate.products.maps._SMALL", 10)
    values = np.arange(12, dtype=np.uint8).reshape(3, 4)
    path = tmp_path / "m.tif"
    write_map(path, GRID, [(Window(5, 8, 20, 24), values)], {"SCENE_ID": "s1"})
    valid, errors, warnings = cog_validate(path, quiet=True)
    assert valid
    assert not errors
    assert not warnings
    with rasterio.open(path) as source:
        full = source.read(1)
        assert source.nodata == 255
        assert source.crs.to_epsg() == 32633
        assert source.tags()["SCENE_ID"] == "s1"
        assert source.overviews(1)
    assert (full[5:8, 20:24] == values).all()
    full[5:8, 20:24] = 255
    assert (full == 255).all()
    assert list(tmp_path.iterdir()) == [path]


def test_map_bytes_repeat(tmp_path):
    """The same blocks give the same bytes."""
    for name in ("a.tif", "b.tif"):
        write_map(tmp_path / name, GRID, [(Window(0, 2, 0, 2), np.ones((2, 2), np.uint8))], {})
    assert (tmp_path / "a.tif").read_bytes() == (tmp_path / "b.tif").read_bytes()


def test_netcdf_opens_with_decoded_times_and_flags(tmp_path):
    """xarray decodes times and flags; values equal the table; the station names survive accents."""
    daily = daily_table()
    path = tmp_path / "d.nc"
    write_daily_netcdf(path, daily.sample(frac=1, random_state=1), WETLANDS, crs="EPSG:32633", area="Sallow Reserve")
    with xr.open_dataset(path) as data:
        assert data.attrs["featureType"] == "timeSeries"
        assert data["time"].dtype.kind == "M"
        assert str(data["time"].values[0])[:10] == "2033-01-01"
        assert [w.decode() if isinstance(w, bytes) else w for w in data["wetland_id"].values] == ["w-1", "wé2"]
        np.testing.assert_allclose(data["area"].values, daily["area_m2"].to_numpy().reshape(2, 5))
        meanings = data["basis"].attrs["flag_meanings"].split()
        assert [meanings[k] for k in data["basis"].values[0].astype(int)] == list(daily["basis"][:5])
        assert 14 < float(data["lon"][0]) < 16
        assert 52 < float(data["lat"][0]) < 53


def test_netcdf_passes_the_cf_checker(tmp_path):
    """The IOOS compliance checker's CF suite reports no error of high priority."""
    from compliance_checker.runner import CheckSuite, ComplianceChecker

    path = tmp_path / "d.nc"
    write_daily_netcdf(path, daily_table(), WETLANDS, crs="EPSG:32633", area="Sallow Reserve")
    draws = tmp_path / "draws.nc"
    days = pd.date_range("2033-01-01", periods=5).to_numpy()
    write_draws_netcdf(draws, np.ones((3, 2, 5), np.float32), days, WETLANDS, crs="EPSG:32633", area="Sallow Reserve")
    CheckSuite.load_all_available_checkers()
    for file in (path, draws):
        report = tmp_path / f"{file.stem}.json"
        ComplianceChecker.run_checker(
            str(file), ["cf:1.11"], 0, "strict", output_filename=str(report), output_format="json"
        )
        import json

        found = json.loads(report.read_text())["cf:1.11"]
        messages = [
            m for part in ("high_priorities", "medium_priorities") for item in found[part] for m in item["msgs"]
        ]
        assert not messages, messages


def test_netcdf_bytes_repeat(tmp_path):
    """The same table gives the same bytes."""
    for name in ("a.nc", "b.nc"):
        write_daily_netcdf(tmp_path / name, daily_table(), WETLANDS, crs="EPSG:32633", area="S")
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()


def test_netcdf_refuses_a_missing_day(tmp_path):
    """Every wetland must have every day; nothing is written otherwise."""
    with pytest.raises(ValueError, match="9 rows, not 2 wetlands x 5 days"):
        write_daily_netcdf(tmp_path / "d.nc", daily_table().iloc[:-1], WETLANDS, crs="EPSG:32633", area="S")
    assert not list(tmp_path.iterdir())


def test_tables_have_exactly_their_columns(tmp_path):
    """Extra columns go, order and types are fixed, rows are sorted by their keys."""
    shuffled = daily_table().assign(extra=1).sample(frac=1, random_state=2)
    out = write_product_table(tmp_path, "extent_daily", shuffled)
    back = pd.read_parquet(tmp_path / "extent_daily.parquet")
    assert tuple(back.columns) == COLUMNS["extent_daily"]
    assert back["date"].dtype == "datetime64[ms]"
    pd.testing.assert_frame_equal(back, out)
    assert back["date"][:5].is_monotonic_increasing
    with pytest.raises(ValueError, match="column 'basis' is missing"):
        shape_table("extent_daily", shuffled.drop(columns="basis"))


def test_changes_say_why():
    """Moves under the floor are left out; a move on a day with a new view says so."""
    before, now = daily_table(), daily_table()
    now.loc[1, "area_m2"] += 50.0
    now.loc[7, "area_m2"] -= 5.0
    now.loc[8, "area_m2"] += 0.5
    out = changes(before, now, {("w-1", pd.Timestamp("2033-01-02"))}, set())
    assert list(out["area_m2"] - out["area_before_m2"]) == [50.0, -5.0]
    assert out["why"].tolist() == [
        "a view of this day was added or read anew",
        "new data elsewhere moved the region's estimate",
    ]
    assert changes(None, now, set(), set()).empty
