"""Reading and checking the tables and layers that a pipeline names (scenes and loggers have readers of their own)."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal

if TYPE_CHECKING:
    import geopandas as gpd

LABELS = ("water", "dry")


def _columns(file: str, table: pd.DataFrame, wanted: tuple[str, ...]) -> None:
    missing = [c for c in wanted if c not in table.columns]
    if missing:
        have = ", ".join(map(str, table.columns))
        message = f"{file}: column '{missing[0]}' is missing (has: {have}); add it or rename the one meant"
        raise InputError(message)


def _read_layer(file: str) -> gpd.GeoDataFrame:
    import geopandas as gpd

    try:
        layer = gpd.read_file(file)
    except Exception as err:
        message = f"{file}: cannot be read as a vector layer ({err}); save it as GeoPackage"
        raise InputError(message) from err
    if not isinstance(layer, gpd.GeoDataFrame):
        message = f"{file}: holds no geometry; save the layer with its geometry as GeoPackage"
        raise InputError(message)
    if layer.crs is None:
        message = f"{file}: has no coordinate reference system; save it with one"
        raise InputError(message)
    return layer


def _read_csv(file: str, wanted: tuple[str, ...], dtype: dict[str, Any] | None = None) -> pd.DataFrame:
    try:
        table = pd.read_csv(file, dtype=dtype, encoding="utf-8-sig")
    except (ValueError, UnicodeDecodeError, pd.errors.ParserError) as err:
        message = f"{file}: cannot be read as a CSV table ({err}); save it as UTF-8 CSV with a header line"
        raise InputError(message) from err
    table.columns = [str(c).strip() for c in table.columns]
    _columns(file, table, wanted)
    return table


def read_wetlands(file: str, crs: str) -> gpd.GeoDataFrame:
    """Read the wetland polygons, in the area's projection, sorted by ``wetland_id``.

    Parameters
    ----------
    file : str
        Vector layer with column ``wetland_id`` (text); polygons of the largest extent.
    crs : str
        Projection of the area.

    Returns
    -------
    GeoDataFrame
        ``wetland_id`` (text), the layer's other columns, ``area_max_m2`` and ``geometry``.

    Raises
    ------
    InputError
        Without ``wetland_id``, with empty, repeated ids, with a missing, non-polygon or self-crossing geometry.
    """
    layer = _read_layer(file)
    _columns(file, layer, ("wetland_id",))
    if layer.empty:
        message = f"{file}: holds no wetlands; add at least one polygon"
        raise InputError(message)
    blank = layer["wetland_id"].isna() | (layer["wetland_id"].astype(str).str.strip() == "")
    if blank.any():
        message = f"{file}: row {int(np.flatnonzero(blank)[0])} has no wetland_id; give every polygon an id of its own"
        raise InputError(message)
    layer["wetland_id"] = layer["wetland_id"].map(lambda v: str(int(v)) if isinstance(v, float) else str(v))
    twice = layer["wetland_id"][layer["wetland_id"].duplicated()]
    if len(twice):
        message = f"{file}: wetland_id '{twice.iloc[0]}' stands more than once; give every polygon an id of its own, or join parts to one multipolygon"
        raise InputError(message)
    _check_shapes(file, layer)
    layer = layer.to_crs(crs)
    layer["area_max_m2"] = layer.geometry.area
    return layer.sort_values("wetland_id").reset_index(drop=True)


def _check_shapes(file: str, layer: gpd.GeoDataFrame) -> None:
    from shapely.validation import explain_validity

    for wetland_id, shape in zip(layer["wetland_id"], layer.geometry, strict=True):
        if shape is None or shape.is_empty or shape.geom_type not in ("Polygon", "MultiPolygon"):
            kind = "nothing" if shape is None or shape.is_empty else shape.geom_type
            message = f"{file}: wetland '{wetland_id}' has {kind} for a geometry; draw it as a polygon"
            raise InputError(message)
        if not shape.is_valid:
            message = f"{file}: wetland '{wetland_id}' has an invalid polygon ({explain_validity(shape)}); mend it so that its outline does not cross itself"
            raise InputError(message)


def read_labels(file: str, crs: str) -> tuple[gpd.GeoDataFrame, list[Refusal]]:
    """Read label points or polygons.

    Returns
    -------
    labels : GeoDataFrame
        row (int, position in the file), date (datetime64, NaT where only a scene is given), scene_id (text or ""),
        label (``water`` / ``dry``), wetland_id (text or ""), source, geometry in ``crs``.
    refused : list of Refusal
        Rows without geometry or with an unreadable date.

    Raises
    ------
    InputError
        When a column is missing, a label is neither ``water`` nor ``dry``, or there is one class only.
    """
    layer = _read_layer(file)
    _columns(file, layer, ("label",))
    if "date" not in layer.columns and "scene_id" not in layer.columns:
        message = f"{file}: has neither column 'date' nor 'scene_id'; say when each label was seen"
        raise InputError(message)
    layer = layer.to_crs(crs)
    layer["row"] = np.arange(len(layer))
    layer["label"] = layer["label"].astype(str).str.strip()
    wrong = layer[~layer["label"].isin(LABELS)]
    if len(wrong):
        message = f"{file}: row {int(wrong['row'].iloc[0])} has label '{wrong['label'].iloc[0]}'; a label is 'water' or 'dry' ({len(wrong)} rows differ)"
        raise InputError(message)
    for name in ("scene_id", "wetland_id", "source"):
        layer[name] = layer[name].fillna("").astype(str) if name in layer.columns else ""
    dates = layer["date"] if "date" in layer.columns else pd.Series(pd.NaT, index=layer.index)
    layer["date"] = pd.to_datetime(dates, errors="coerce", utc=True).dt.tz_localize(None).dt.normalize()
    lost = layer.geometry.isna() | layer.geometry.is_empty | (layer["date"].isna() & (layer["scene_id"] == ""))
    refused = [
        Refusal("label", str(r), f"{file}: row {r} has no geometry or no readable date or scene_id; it is left out")
        for r in layer.loc[lost, "row"]
    ]
    layer = layer[~lost].reset_index(drop=True)
    present = set(layer["label"])
    if len(present) < 2:
        only = next(iter(present), "none")
        message = f"{file}: has labels of one class only ('{only}'); add examples of both water and dry, or remove the key 'labels.examples' to use the starter examples"
        raise InputError(message)
    keep = ["row", "date", "scene_id", "label", "wetland_id", "source", "geometry"]
    return layer[keep], refused


def read_weather(file: str) -> pd.DataFrame:
    """Read daily weather: date, precipitation_mm, pet_mm and optional air_temperature_c; one row a day, sorted.

    Raises
    ------
    InputError
        When a column is missing, a date cannot be read or stands twice, or precipitation or PET is negative.
    """
    table = _read_csv(file, ("date", "precipitation_mm", "pet_mm"))
    dates = pd.to_datetime(table["date"], errors="coerce")
    if dates.isna().any():
        row = int(np.flatnonzero(dates.isna())[0])
        message = f"{file}: line {row + 2} has date '{table['date'].iloc[row]}'; write dates as YYYY-MM-DD"
        raise InputError(message)
    table["date"] = dates.dt.normalize().astype("datetime64[ns]")
    if table["date"].duplicated().any():
        twice = table.loc[table["date"].duplicated(), "date"].iloc[0]
        message = f"{file}: date {twice:%Y-%m-%d} stands more than once; keep one row a day"
        raise InputError(message)
    names = [c for c in ("precipitation_mm", "pet_mm", "air_temperature_c") if c in table.columns]
    for name in names:
        table[name] = pd.to_numeric(table[name], errors="coerce")
    for name in ("precipitation_mm", "pet_mm"):
        if (table[name] < 0).any():
            row = int(np.flatnonzero(table[name] < 0)[0])
            message = f"{file}: line {row + 2} has {name} {table[name].iloc[row]:g}; it cannot be negative, leave unknown days empty"
            raise InputError(message)
    return table[["date", *names]].sort_values("date").reset_index(drop=True)


def read_decisions(file: str) -> pd.DataFrame:
    """Read an analyst's decisions: scene_id, wetland_id ("" = all), use (bool), reason."""
    table = _read_csv(
        file,
        ("scene_id", "wetland_id", "use", "reason"),
        dtype=dict.fromkeys(("scene_id", "wetland_id", "use", "reason"), "str"),
    )
    table = table.fillna("")
    use = table["use"].str.strip().str.lower()
    wrong = ~use.isin(["true", "false"])
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        message = f"{file}: line {row + 2} has use '{table['use'].iloc[row]}'; write true or false"
        raise InputError(message)
    table["use"] = use == "true"
    return table[["scene_id", "wetland_id", "use", "reason"]]


def read_walked(file: str) -> pd.DataFrame:
    """Read extents measured on the ground: wetland_id, date, area_m2, area sd (NaN where not given)."""
    table = _read_csv(file, ("wetland_id", "date", "area_m2"), dtype={"wetland_id": "str"})
    table["date"] = pd.to_datetime(table["date"], errors="coerce").dt.normalize()
    if table["date"].isna().any() or not (pd.to_numeric(table["area_m2"], errors="coerce") >= 0).all():
        message = f"{file}: every row needs a date as YYYY-MM-DD and area_m2 of 0 or more; mend or remove the rows that do not"
        raise InputError(message)
    if "sd_m2" not in table.columns:
        table["sd_m2"] = np.nan
    return table[["wetland_id", "date", "area_m2", "sd_m2"]].sort_values(["wetland_id", "date"]).reset_index(drop=True)


def stat_mark(path: str) -> str:
    """Return size and modification time of a local file as text; the address itself where it is remote."""
    if "://" in path:
        return path
    info = Path(path).stat()
    return f"{info.st_size}:{info.st_mtime_ns}"
