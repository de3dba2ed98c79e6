"""Small invented deliveries for tests of the report: every table as the products have it, from a seed."""

from __future__ import annotations

from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
from shapely.geometry import Point

from inundate.common.codes import LEAF_STATES
from inundate.products.report import ReportTables, paint_view
from inundate.skill import SkillInputs, headline, score_all

MONTH_ENDS = "2031-12-31"


def leaf_states(dates: pd.DatetimeIndex) -> np.ndarray:
    """Leaf state by month, the same everywhere."""
    by_month = np.array([0, 0, 0, 1, 1, 2, 2, 2, 2, 3, 3, 0])
    return np.asarray(LEAF_STATES, object)[by_month[dates.month.to_numpy() - 1]]


def make_shapes(names: list[str], rng: np.random.Generator) -> gpd.GeoDataFrame:
    """Round wetlands of 20 to 90 m radius on a square lattice."""
    side = int(np.ceil(np.sqrt(len(names))))
    where = [Point(500_000 + 400 * (i % side), 5_400_000 + 400 * (i // side)) for i in range(len(names))]
    shapes = [p.buffer(r, quad_segs=8) for p, r in zip(where, rng.uniform(20, 90, len(names)), strict=True)]
    out = gpd.GeoDataFrame({"wetland_id": names}, geometry=shapes, crs="EPSG:32633")
    out["area_max_m2"] = out.geometry.area
    out["cover"] = np.resize(["open", "deciduous", "evergreen"], len(names))
    return out


def make_daily(shapes: gpd.GeoDataFrame, dates: pd.DatetimeIndex, rng: np.random.Generator) -> pd.DataFrame:
    """A season of filling and drying with an interval around it."""
    n, days = len(shapes), len(dates)
    largest = shapes["area_max_m2"].to_numpy()[:, None]
    wave = 0.5 + 0.4 * np.cos(2 * np.pi * (dates.dayofyear.to_numpy() - 60) / 365.25)
    share = np.clip(wave + rng.normal(0, 0.05, (n, 1)) + rng.normal(0, 0.02, (n, days)), 0, 1)
    half = rng.uniform(0.05, 0.2, (n, 1))
    basis = np.where(np.arange(days) % 10 == 0, "observed", "neighbours")
    return pd.DataFrame(
        {
            "wetland_id": np.repeat(shapes["wetland_id"].to_numpy(), days),
            "date": np.tile(dates, n).astype("datetime64[ms]"),
            "area_m2": (share * largest).ravel(),
            "area_lo_m2": (np.clip(share - half, 0, 1) * largest).ravel(),
            "area_hi_m2": (np.clip(share + half, 0, 1) * largest).ravel(),
            "basis": np.tile(basis, n),
            "leaf_state": np.tile(leaf_states(dates), n),
        }
    )


def make_observed(daily: pd.DataFrame, rng: np.random.Generator) -> pd.DataFrame:
    """A view every ten days; every seventh is set aside."""
    seen = daily[daily["basis"] == "observed"].reset_index(drop=True)
    used = np.arange(len(seen)) % 7 != 3
    sd = 0.05 * (seen["area_hi_m2"] + 50.0)
    return pd.DataFrame(
        {
            "wetland_id": seen["wetland_id"],
            "scene_id": "S" + seen["date"].dt.strftime("%Y%m%d"),
            "datetime": pd.to_datetime(seen["date"], utc=True) + pd.Timedelta(hours=10),
            "area_m2": np.maximum(seen["area_m2"] + rng.normal(0, 1, len(seen)) * sd, 0),
            "area_sd_m2": sd,
            "clear_fraction": rng.uniform(0.5, 1.0, len(seen)),
            "view_fraction": rng.uniform(0.2, 1.0, len(seen)),
            "leaf_state": seen["leaf_state"],
            "used": used,
            "reason": np.where(used, "", "too few pixels seen"),
        }
    )


def make_stage(daily: pd.DataFrame, shapes: gpd.GeoDataFrame, logged: list[str]) -> pd.DataFrame:
    """Full daily stage of the logged wetlands: stage from the share of the largest extent, dry below a tenth."""
    rows = daily[daily["wetland_id"].isin(logged)]
    largest = rows["wetland_id"].map(shapes.set_index("wetland_id")["area_max_m2"]).astype(float)
    stage = (rows["area_m2"] / largest - 0.1).to_numpy()
    return pd.DataFrame(
        {
            "wetland_id": rows["wetland_id"].to_numpy(),
            "logger_id": "L-" + rows["wetland_id"].to_numpy(),
            "date": rows["date"].to_numpy(),
            "stage_m": stage,
            "stage_sd_m": 0.01,
            "quality": "good",
            "censored": stage < -0.05,
            "period": 1,
        }
    )


def make_relations(shapes: gpd.GeoDataFrame, logged: list[str]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Power-law relations of logged wetlands, pooled ones of the others, and their tables."""
    names = shapes["wetland_id"].to_numpy()
    has = np.isin(names, logged)
    relations = pd.DataFrame(
        {
            "wetland_id": names,
            "family": np.where(has, "power_offset", "power"),
            "parameters": "{}",
            "n_pairs": np.where(has, 12, 0),
            "stage_min_m": np.where(has, 0.05, np.nan),
            "stage_max_m": np.where(has, 0.7, np.nan),
            "rmse_m2": np.where(has, 0.1 * shapes["area_max_m2"], np.nan),
            "pooled": ~has,
            "valid_from": pd.NaT,
            "valid_to": pd.NaT,
        }
    )
    stage = np.round(np.arange(0, 1.001, 0.02), 2)
    area = shapes["area_max_m2"].to_numpy()[:, None] * np.sqrt(stage)
    table = pd.DataFrame(
        {
            "wetland_id": np.repeat(names, stage.size),
            "stage_m": np.tile(stage, len(names)),
            "area_m2": area.ravel(),
            "area_lo_m2": 0.8 * area.ravel(),
            "area_hi_m2": np.minimum(1.2 * area, area[:, -1:]).ravel(),
            "volume_m3": 0.0,
        }
    )
    return relations, table


def make_size_classes(daily: pd.DataFrame, shapes: gpd.GeoDataFrame) -> pd.DataFrame:
    """Totals of two classes and of all."""
    largest = shapes.set_index("wetland_id")["area_max_m2"]
    of = daily["wetland_id"].map(pd.Series(np.where(largest < 3000, "<0.3 ha", ">=0.3 ha"), index=largest.index))
    both = pd.concat([daily.assign(size_class=of), daily.assign(size_class="all")])
    both["area_max_m2"] = both["wetland_id"].map(largest)
    out = both.groupby(["date", "size_class"], as_index=False).agg(
        area_m2=("area_m2", "sum"), area_max_m2=("area_max_m2", "sum"), n_wetlands=("wetland_id", "nunique")
    )
    return out.sort_values(["date", "size_class"]).reset_index(drop=True)


def make_heldout(observed: pd.DataFrame, daily: pd.DataFrame) -> pd.DataFrame:
    """Every used view as if it had been hidden."""
    used = observed[observed["used"]].copy()
    used["date"] = used["datetime"].dt.tz_localize(None).dt.normalize().astype("datetime64[ms]")
    used = used.rename(columns={"area_m2": "known_m2", "area_sd_m2": "known_sd_m2"})
    both = used[["wetland_id", "date", "known_m2", "known_sd_m2"]].merge(daily, on=["wetland_id", "date"])
    return both.drop(columns="basis").assign(kind=np.where(np.arange(len(both)) % 3, "views", "logger"))


def make_card() -> dict[str, Any]:
    """A classifier's card with reliability of all and of one leaf state."""
    bins = [
        {
            "low": k / 10,
            "high": (k + 1) / 10,
            "mean_probability": k / 10 + 0.05,
            "share_water": k / 10 + 0.03,
            "n": 20,
            "gap": 0.02,
            "gap_sd": 0.03,
        }
        for k in range(10)
    ]
    rates = [
        {"leaf_state": s, "stratum": "all", "value": "all", "n": 100, "omission": 0.1 + 0.01 * i, "commission": 0.05}
        for i, s in enumerate((*LEAF_STATES, "all"))
    ]
    return {
        "error_rates": rates,
        "reliability": {"all": bins, "leaf_on": bins[::2]},
        "n_trees": 40,
        "n_doubtful": 3,
        "counts": [{"n": 100}],
        "features": ["ndvi"],
        "folds": {"rule": "wetlands and dates are apart"},
    }


def make_pictures(
    observed: pd.DataFrame, shapes: gpd.GeoDataFrame, rng: np.random.Generator, most: int
) -> dict[str, Any]:
    """Noise pictures of the first used views of every wetland."""
    out = {}
    used = observed[observed["used"]]
    shape_of = dict(zip(shapes["wetland_id"], shapes.geometry, strict=True))
    for name, rows in used.groupby("wetland_id"):
        west, south, _, north = shape_of[name].bounds
        side = int(np.ceil((north - south) / 10.0)) + 4
        bounds = (west - 20.0, north + 20.0 - 10.0 * side, west - 20.0 + 10.0 * side, north + 20.0)
        out[name] = []
        for scene in rows["scene_id"].head(most):
            bands = {b: rng.uniform(0.0, 0.2, (side, side)).astype(np.float32) for b in ("blue", "green", "red", "nir")}
            percent = rng.integers(0, 101, (side, side)).astype(np.uint8)
            out[name].append(paint_view(scene, bands, percent, bounds))
    return out


def make_loggers(stage: pd.DataFrame) -> tuple[pd.DataFrame | None, pd.DataFrame | None]:
    """Logger record of daily readings with one spike, and two checks a logger."""
    if stage.empty:
        return None, None
    record = pd.DataFrame(
        {
            "wetland_id": stage["wetland_id"],
            "logger_id": stage["logger_id"],
            "time": stage["date"],
            "level_m": stage["stage_m"] + 0.02,
            "stage_m": stage["stage_m"],
            "flag": "good",
        }
    )
    record.loc[5, "flag"] = "spike"
    checks = stage.iloc[[10, 30]].rename(columns={"date": "time", "stage_sd_m": "sd_m"})
    return record, checks[["wetland_id", "logger_id", "time", "stage_m", "sd_m"]]


def make_tables(
    names: list[str], days: int = 400, *, n_logged: int = 2, pictures: int = 2, seed: int = 5, changed: int = 0
) -> ReportTables:
    """Return a whole invented delivery that ends on 2031-12-31."""
    rng = np.random.default_rng(seed)
    names = sorted(names)
    dates = pd.date_range(end=MONTH_ENDS, periods=days)
    shapes = make_shapes(names, rng)
    daily = make_daily(shapes, dates, rng)
    observed = make_observed(daily, rng)
    full = make_stage(daily, shapes, names[:n_logged])
    relations, table = make_relations(shapes, names[:n_logged])
    heldout = make_heldout(observed, daily)
    choices = pd.DataFrame({"wetland_id": names[:1], "family": "power", "heldout_rmse_m2": 10.0})
    skill = score_all(
        SkillInputs(
            shapes, observed, daily, full if len(full) else None, relations, choices, heldout, None, make_card()
        )
    )
    pairs = observed[observed["used"]].assign(date=lambda t: t["datetime"].dt.tz_localize(None).dt.normalize())
    pairs = pairs.merge(
        full[["wetland_id", "date", "stage_m", "stage_sd_m", "censored"]].astype({"date": "datetime64[ns]"}),
        on=["wetland_id", "date"],
    )
    years = pd.DataFrame({"wetland_id": names, "water_year": 2031, "n_days": 273})
    for column in ("mean_area_m2", "max_area_m2", "days_inundated", "longest_dry_days"):
        for i, end in enumerate(("", "_lo", "_hi")):
            years[column + end] = 100.0 + i
    moved = daily.sample(changed, random_state=seed) if changed else daily.iloc[:0]
    changes = moved[["wetland_id", "date", "area_m2"]].assign(
        area_before_m2=moved["area_m2"] + 25.0, why="new views of this wetland on other days"
    )
    loggers, checks = make_loggers(full)
    run = {
        "area": "Sallow Reserve",
        "month": MONTH_ENDS[:7],
        "last_day": f"{MONTH_ENDS}T00:00:00",
        "notes": ["one note"],
        "refused": [
            {"kind": "label", "name": "7", "reason": "labels: row 7 is not clear in its scene; label another date"}
        ],
        "settings": {
            "area": {"name": "Sallow Reserve"},
            "scenes": {"sensor": "sentinel-2-l2a"},
            "extent": {"co_registration": True, "normalisation": False, "shift_limit_px": 2.0},
        },
        "versions": {"inundate": "0.1.0"},
        "inputs": {"area.wetlands": "mark"},
    }
    trend = [(f"2031-{m:02d}", k, v) for m in (10, 11, 12) for k, v in headline(skill).items()]
    return ReportTables(
        run=run,
        shapes=shapes,
        daily=daily,
        observed=observed,
        stage=full[["wetland_id", "date", "stage_m", "stage_sd_m", "quality"]],
        relations=relations,
        relation_table=table,
        hydroperiod=years,
        size_classes=make_size_classes(daily, shapes),
        changes=changes,
        skill=skill,
        trend=trend,
        heldout=heldout,
        pairs=pairs if len(pairs) else None,
        loggers=loggers,
        checks=checks,
        reasons=pd.DataFrame({"wetland_id": names, "predictor": "blend", "why": "blend of two predictors"}),
        thumbnails=make_pictures(observed, shapes, rng, pictures) if pictures else {},
    )
