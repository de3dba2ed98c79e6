"""The daily series as CF-1.11 NetCDF, discrete sampling geometry, one station a wetland."""

from __future__ import annotations

from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd

from inundate.common.codes import BASES, LEAF_STATES
from inundate.common.writing import replacing

_FILL = np.float32(9.96921e36)


def _stations(out: netCDF4.Dataset, wetlands: pd.DataFrame, crs: str) -> None:
    from pyproj import CRS, Transformer

    encoded = [str(w).encode("utf-8") for w in wetlands["wetland_id"]]
    width = max(map(len, encoded), default=1)
    out.createDimension("wetland", len(wetlands))
    out.createDimension("name_length", width)
    name = out.createVariable("wetland_id", "S1", ("wetland", "name_length"))
    name.setncatts({"long_name": "wetland identifier", "cf_role": "timeseries_id"})
    name[:] = np.array(encoded, dtype=f"S{width}").view("S1").reshape(len(encoded), width)
    name._Encoding = "utf-8"
    lon, lat = Transformer.from_crs(crs, "EPSG:4326", always_xy=True).transform(wetlands["x"], wetlands["y"])
    for key, unit, values in (("longitude", "degrees_east", lon), ("latitude", "degrees_north", lat)):
        variable = out.createVariable(key[:3], "f8", ("wetland",))
        variable.setncatts({"standard_name": key, "long_name": f"{key} of the wetland's centroid", "units": unit})
        variable[:] = np.asarray(values)
    largest = out.createVariable("area_max", "f8", ("wetland",))
    largest.setncatts(
        {"long_name": "largest extent of the wetland", "units": "m2", "coordinates": "lat lon wetland_id"}
    )
    largest[:] = wetlands["area_max_m2"].to_numpy()
    grid = out.createVariable("crs", "i4")
    grid.setncatts({"grid_mapping_name": "latitude_longitude", "crs_wkt": CRS.from_epsg(4326).to_wkt()})
    grid.setncatts(
        {"semi_major_axis": 6378137.0, "inverse_flattening": 298.257223563, "longitude_of_prime_meridian": 0.0}
    )


def _time(out: netCDF4.Dataset, days: np.ndarray) -> None:
    out.createDimension("time", days.size)
    time = out.createVariable("time", "i4", ("time",))
    time.setncatts(
        {
            "standard_name": "time",
            "long_name": "day (UTC)",
            "units": "days since 1970-01-01 00:00:00",
            "calendar": "standard",
            "units_metadata": "leap_seconds: none",
            "axis": "T",
        }
    )
    time[:] = days.astype("datetime64[D]").astype(np.int64)


def _globals(out: netCDF4.Dataset, title: str, area: str) -> None:
    out.setncatts(
        {
            "Conventions": "CF-1.11",
            "featureType": "timeSeries",
            "title": f"{title}, {area}",
            "institution": area,
            "source": "multispectral scenes and water-level loggers, processed with inundate",
            "history": "written by inundate; settings, versions and times are in run.json beside this file",
            "references": "methods and sources: report.html beside this file",
            "comment": "Not for flood safety, legal wetland boundaries or decisions about work on water or ice.",
        }
    )


def write_daily_netcdf(path: Path, daily: pd.DataFrame, wetlands: pd.DataFrame, *, crs: str, area: str) -> None:
    """Write extent_daily as NetCDF.

    Parameters
    ----------
    path : Path
    daily : DataFrame
        extent_daily; every wetland has every day.
    wetlands : DataFrame
        wetland_id, x, y (centroid in ``crs``, m), area_max_m2; sorted by wetland_id.
    crs : str
        Projection of x and y.
    area : str
        Name of the landscape.

    Raises
    ------
    ValueError
        When a wetland lacks a day.
    """
    days = np.unique(pd.to_datetime(daily["date"]).to_numpy().astype("datetime64[D]"))
    if len(daily) != days.size * len(wetlands):
        message = f"extent_daily has {len(daily)} rows, not {len(wetlands)} wetlands x {days.size} days"
        raise ValueError(message)
    ordered = daily.sort_values(["wetland_id", "date"])
    shape = (len(wetlands), days.size)
    with replacing(path) as scratch, netCDF4.Dataset(scratch, "w", format="NETCDF4") as out:
        _globals(out, "Daily inundated area of wetlands", area)
        _time(out, days)
        _stations(out, wetlands, crs)
        common = {"coordinates": "lat lon wetland_id", "grid_mapping": "crs"}
        chunks = (min(shape[0], 64), min(shape[1], 1024))
        words = {
            "area": ("inundated area", "area_m2"),
            "area_lo": ("lower end of the 90 percent interval of inundated area", "area_lo_m2"),
            "area_hi": ("upper end of the 90 percent interval of inundated area", "area_hi_m2"),
        }
        for key, (words_, column) in words.items():
            variable = out.createVariable(
                key, "f4", ("wetland", "time"), zlib=True, fill_value=_FILL, chunksizes=chunks
            )
            extra = {"ancillary_variables": "area_lo area_hi basis leaf_state"} if key == "area" else {}
            variable.setncatts({"long_name": words_, "units": "m2", **common, **extra})
            variable[:] = ordered[column].to_numpy(np.float32).reshape(shape)
        for key, names, words_ in (
            ("basis", BASES, "where the value of the day rests"),
            ("leaf_state", LEAF_STATES, "leaf state of the canopy"),
        ):
            variable = out.createVariable(key, "i1", ("wetland", "time"), zlib=True, chunksizes=chunks)
            flags = {"flag_values": np.arange(len(names), dtype=np.int8), "flag_meanings": " ".join(names)}
            variable.setncatts({"long_name": words_, **flags, **common})
            code = pd.Categorical(ordered[key], categories=list(names)).codes
            variable[:] = np.asarray(code, np.int8).reshape(shape)


def write_draws_netcdf(
    path: Path, draws: np.ndarray, days: np.ndarray, wetlands: pd.DataFrame, *, crs: str, area: str
) -> None:
    """Write joint draws of the daily extent.

    Parameters
    ----------
    path : Path
    draws : ndarray of float32, shape (draw, wetland, day)
        Inundated area, m2; each draw is one plausible landscape through time.
    days : ndarray of datetime64, shape (day,)
    wetlands, crs, area
        As in :func:`write_daily_netcdf`.
    """
    with replacing(path) as scratch, netCDF4.Dataset(scratch, "w", format="NETCDF4") as out:
        _globals(out, "Joint draws of the daily inundated area of wetlands", area)
        _time(out, days)
        _stations(out, wetlands, crs)
        out.createDimension("draw", draws.shape[0])
        number = out.createVariable("draw", "i4", ("draw",))
        number.setncatts({"long_name": "number of the draw", "units": "1"})
        number[:] = np.arange(draws.shape[0])
        chunks = (1, min(draws.shape[1], 64), min(draws.shape[2], 1024))
        area_ = out.createVariable(
            "area", "f4", ("draw", "wetland", "time"), zlib=True, fill_value=_FILL, chunksizes=chunks
        )
        area_.setncatts(
            {"long_name": "inundated area", "units": "m2", "coordinates": "lat lon wetland_id", "grid_mapping": "crs"}
        )
        area_[:] = draws.astype(np.float32)
