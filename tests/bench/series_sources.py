"""Where the skill bench takes its inputs from: simulated from a reserve's truth, or the products of the real steps."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import rasterio

from inundate.common.grid import Grid
from inundate.series import SeriesInputs
from tests.bench.series_skill import Case
from tests.series_world import TableRelations

STATES = np.array(["leaf_off", "green_up", "leaf_on", "leaf_fall"])


def truth_share(folder: Path) -> tuple[pd.DataFrame, pd.DatetimeIndex, np.ndarray, np.ndarray]:
    wetlands = pd.read_parquet(folder / "truth/wetlands.parquet").sort_values("wetland_id", ignore_index=True)
    area = (
        pd.read_parquet(folder / "truth/extent_daily.parquet")
        .pivot(index="wetland_id", columns="date", values="area_m2")
        .sort_index()
    )
    stage = (
        pd.read_parquet(folder / "truth/stage_daily.parquet")
        .pivot(index="wetland_id", columns="date", values="stage_m")
        .sort_index()
    )
    return (
        wetlands,
        pd.DatetimeIndex(area.columns),
        area.to_numpy() / wetlands["area_max_m2"].to_numpy()[:, None],
        stage.to_numpy(),
    )


def true_leaf(folder: Path, wetlands: pd.DataFrame, dates: pd.DatetimeIndex) -> np.ndarray:
    leaves = pd.read_parquet(folder / "truth/leaves.parquet")
    out = np.zeros((len(wetlands), len(dates)), int)
    place = {w: i for i, w in enumerate(wetlands["wetland_id"])}
    for row in leaves.itertuples():
        edges = [pd.Timestamp(d) for d in (row.green_up_10, row.green_up_90, row.leaf_fall_10, row.leaf_fall_90)]
        if any(pd.isna(e) for e in edges):
            continue
        for k in range(3):
            out[place[row.wetland_id], (dates >= edges[k]) & (dates < edges[k + 1])] = k + 1
    return out


def hypsometry_of(folder: Path) -> pd.DataFrame:
    from inundate.extent import elevation_cells, hypsometry

    shapes = gpd.read_file(folder / "inputs/wetlands.gpkg")
    with rasterio.open(folder / "inputs/elevation.tif") as source:
        elevation = source.read(1, masked=True).filled(np.nan).astype(np.float32)
        step = 10.0
        grid = Grid(str(source.crs), source.bounds.left, source.bounds.top, step, int(np.ceil((source.bounds.top - source.bounds.bottom) / step)), int(np.ceil((source.bounds.right - source.bounds.left) / step)))  # fmt: skip
        cells = elevation_cells(elevation, source.transform, shapes, grid)
    return hypsometry(cells, shapes)


def truth_case(folder: Path, seed: int = 11) -> Case:
    """Simulate views (sd 5 or 9 % of the largest extent, half clouded, nearly blind under leaves), stage and relations."""
    rng = np.random.default_rng(seed)
    wetlands, dates, share, stage = truth_share(folder)
    leaf = true_leaf(folder, wetlands, dates)
    scenes = pd.read_parquet(folder / "truth/scenes.parquet")
    rows = []
    for scene in scenes.itertuples():
        t = dates.get_loc(pd.Timestamp(scene.date))
        common = 0.02 * rng.standard_normal()
        for i, w in enumerate(wetlands.itertuples()):
            if rng.random() < max(scene.cloud_share, 0.2) or scene.ice:
                continue
            sd, state = 0.09 if w.area_max_m2 < 3000 else 0.05, leaf[i, t]
            hidden = (state > 0 and w.cover != "open") or w.cover == "evergreen"
            claimed = (0.15 if state in (1, 3) else 0.3) if hidden else sd
            value = (
                (0.3 if hidden and state == 2 else 1.0) * share[i, t]
                + common
                + claimed * (0.5 if hidden else 1) * rng.standard_normal()
            )
            rows.append(
                (
                    w.wetland_id,
                    scene.scene_id,
                    pd.Timestamp(scene.date),
                    np.clip(value, 0, 1) * w.area_max_m2,
                    claimed * w.area_max_m2,
                    1.0,
                    1.0,
                    STATES[state],
                    True,
                    "",
                )
            )
    observed = pd.DataFrame(
        rows,
        columns=[
            "wetland_id",
            "scene_id",
            "datetime",
            "area_m2",
            "area_sd_m2",
            "clear_fraction",
            "view_fraction",
            "leaf_state",
            "used",
            "reason",
        ],
    )
    registry = pd.read_csv(folder / "inputs/loggers.csv")
    curves, stages, true = {}, [], pd.read_parquet(folder / "truth/relations.parquet")
    for row in registry.drop_duplicates("wetland_id").itertuples():
        i = int(np.flatnonzero(wetlands["wetland_id"] == row.wetland_id)[0])
        own = true[true["wetland_id"] == row.wetland_id]
        largest = wetlands["area_max_m2"][i]
        bend = (
            np.interp(
                own["stage_m"],
                np.linspace(0, own["stage_m"].max(), 5),
                np.r_[0, 0.04 * rng.standard_normal(4)],
            )
            * largest
        )
        curve = np.maximum.accumulate(np.clip(own["area_m2"].to_numpy() + bend, 0, largest))
        curves[row.wetland_id] = (own["stage_m"].to_numpy(), curve, 0.04 * largest)
        seen = stage[i] + 0.015 * rng.standard_normal(len(dates))
        frame = pd.DataFrame(
            {
                "wetland_id": row.wetland_id,
                "logger_id": row.logger_id,
                "date": dates,
                "stage_m": np.maximum(seen, row.height_m),
                "stage_sd_m": 0.015,
                "censored": seen < row.height_m,
            }
        )
        stages.append(frame)
    return _case(
        folder,
        observed,
        pd.concat(stages, ignore_index=True),
        TableRelations(curves),
        hypsometry_of(folder),
        leaf,
    )


def _case(
    folder: Path,
    observed: pd.DataFrame,
    stage: pd.DataFrame | None,
    relations: object,
    hyps: pd.DataFrame | None,
    leaf: np.ndarray,
) -> Case:
    wetlands, dates, share, _ = truth_share(folder)
    frame = pd.DataFrame(
        {
            "wetland_id": np.repeat(wetlands["wetland_id"].to_numpy(), len(dates)),
            "date": np.tile(dates, len(wetlands)),
            "leaf_state": STATES[leaf.ravel()],
        }
    )
    weather = pd.read_csv(folder / "inputs/weather.csv", parse_dates=["date"])
    logged = wetlands["wetland_id"].isin(stage["wetland_id"].unique() if stage is not None else []).to_numpy()
    table = wetlands[["wetland_id", "area_max_m2", "cover"]]
    inputs = SeriesInputs(table, observed, stage, relations, hyps, weather, frame, dates[0], dates[-1])  # type: ignore[arg-type]
    return Case(folder.name, inputs, share, logged)
