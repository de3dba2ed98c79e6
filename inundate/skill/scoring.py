"""All scores of a delivery in one plain dictionary, and its headline."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from inundate.extent import error_adjusted_area
from inundate.skill.measures import (
    Row,
    area_measures,
    interval_measures,
    probability_measures,
    rank_correlation,
    wet_dry_measures,
)
from inundate.skill.pairing import pair_with_stage, with_groups

GROUPS = ("leaf_state", "size", "cover", "view", "season", "year")


@dataclass(frozen=True, slots=True)
class SkillInputs:
    """Tables that a delivery is scored from.

    Attributes
    ----------
    wetlands : DataFrame
        wetland_id, area_max_m2, cover.
    observed : DataFrame
        extent_observed.
    daily : DataFrame
        extent_daily.
    stage : DataFrame or None
        Full daily stage.
    relations : DataFrame
        wetland_id, family, n_pairs, rmse_m2.
    choices : DataFrame
        Held-out score of every family of each wetland.
    heldout : DataFrame or None
        Views and loggers hidden from the fill and predicted: wetland_id, date, kind (``views`` / ``logger``), leaf_state,
        known_m2, known_sd_m2, area_m2, area_lo_m2, area_hi_m2.
    walked : DataFrame or None
        wetland_id, date, area_m2, sd_m2: measured on the ground.
    card : dict
        Card of the classifier: out-of-fold scores, reliability, counts.
    probability_sample : bool
        Whether the labels were drawn by a probability design; only then are design-based estimates given.
    mapped_water_share : float or None
        Mean share of water in the maps over pixels seen.
    """

    wetlands: pd.DataFrame
    observed: pd.DataFrame
    daily: pd.DataFrame
    stage: pd.DataFrame | None
    relations: pd.DataFrame
    choices: pd.DataFrame
    heldout: pd.DataFrame | None = None
    walked: pd.DataFrame | None = None
    card: dict[str, Any] = field(default_factory=dict)
    probability_sample: bool = False
    mapped_water_share: float | None = None


def _grouped(table: pd.DataFrame, by: str, measure: Callable[[pd.DataFrame], Row]) -> dict[str, Row]:
    """Return a measure of every group, by the group's name."""
    return {str(name): measure(rows) for name, rows in table.groupby(by, observed=True, sort=True)}


def _wet_dry(pairs: pd.DataFrame) -> dict[str, Any]:
    sure = pairs[pairs["known_wet"].notna()]

    def measure(rows: pd.DataFrame) -> Row:
        return wet_dry_measures(rows["known_wet"].to_numpy(bool), rows["seen_wet"].to_numpy(bool))

    return {
        "all": measure(sure),
        "unsure_days": int(len(pairs) - len(sure)),
        **{f"by_{g}": _grouped(sure, g, measure) for g in GROUPS},
    }


def _rank(pairs: pd.DataFrame) -> dict[str, Any]:
    certain = pairs[~pairs["censored"].astype(bool)]
    own = _grouped(certain, "wetland_id", lambda r: rank_correlation(r["area_m2"].to_numpy(), r["stage_m"].to_numpy()))
    values = [r["rho"] for r in own.values() if r["rho"] is not None]
    leaf: dict[str, Any] = {}
    for state, rows in certain.groupby("leaf_state"):
        each = [
            rank_correlation(g["area_m2"].to_numpy(), g["stage_m"].to_numpy())["rho"]
            for _, g in rows.groupby("wetland_id")
        ]
        told = [v for v in each if v is not None]
        leaf[str(state)] = {"wetlands": len(told), "median_rho": float(np.median(told)) if told else None}
    return {"median_rho": float(np.median(values)) if values else None, "by_wetland": own, "by_leaf_state": leaf}


def _relation(inputs: SkillInputs) -> dict[str, Any]:
    table = inputs.relations.merge(inputs.wetlands[["wetland_id", "area_max_m2"]], on="wetland_id", how="inner")
    paired = table[table["n_pairs"] > 0]
    share = (paired["rmse_m2"] / paired["area_max_m2"]).dropna()
    return {
        "with_pairs": len(paired),
        "median_rmse_share": float(share.median()) if len(share) else None,
        "worst_rmse_share": float(share.max()) if len(share) else None,
        "families": table["family"].value_counts().sort_index().to_dict(),
        "held_out": inputs.choices.to_dict("records"),
    }


def _filled(inputs: SkillInputs) -> dict[str, Any]:
    """Score what was hidden and predicted; a hidden view is itself uncertain, so its own sd widens the interval."""
    if inputs.heldout is None or inputs.heldout.empty:
        return {"views": {"all": {"n": 0}}, "logger": {"all": {"n": 0}}}
    table = with_groups(inputs.heldout, inputs.wetlands)
    half = 1.6448536269514722 * table["known_sd_m2"].fillna(0.0)
    for side, sign in (("area_lo_m2", -1.0), ("area_hi_m2", 1.0)):
        reach = table[side] - table["area_m2"]
        table[f"{side}_seen"] = table["area_m2"] + sign * np.sqrt(reach**2 + half**2)

    def measure(rows: pd.DataFrame) -> Row:
        largest, known, mean = rows["area_max_m2"].to_numpy(), rows["known_m2"].to_numpy(), rows["area_m2"].to_numpy()
        low, high = rows["area_lo_m2_seen"].to_numpy(), rows["area_hi_m2_seen"].to_numpy()
        sd = (high - low) / (2 * 1.6448536269514722)
        return {
            **area_measures(mean, known, largest),
            **interval_measures(low, high, known, largest),
            **probability_measures(mean, sd, known, largest),
        }

    out: dict[str, Any] = {}
    for kind in ("views", "logger"):
        rows = table[table["kind"] == kind]
        out[kind] = {
            "all": measure(rows),
            **{f"by_{g}": _grouped(rows, g, measure) for g in ("leaf_state", "size", "cover")},
        }
        out[kind]["by_wetland"] = _grouped(rows, "wetland_id", measure)
    return out


def _walked(inputs: SkillInputs) -> dict[str, Any] | None:
    if inputs.walked is None:
        return None
    daily = inputs.daily.assign(date=pd.to_datetime(inputs.daily["date"]).astype("datetime64[ns]"))
    walked = inputs.walked.rename(columns={"area_m2": "known_m2"})
    walked = walked.assign(date=pd.to_datetime(walked["date"]).astype("datetime64[ns]"))
    both = with_groups(walked.merge(daily, on=["wetland_id", "date"], how="inner"), inputs.wetlands)
    if both.empty:
        return {"all": {"n": 0}}
    largest, known = both["area_max_m2"].to_numpy(), both["known_m2"].to_numpy()
    rows = both[["wetland_id", "date", "known_m2", "area_m2", "area_lo_m2", "area_hi_m2", "leaf_state"]]
    return {
        "all": {
            **area_measures(both["area_m2"].to_numpy(), known, largest),
            **interval_measures(both["area_lo_m2"].to_numpy(), both["area_hi_m2"].to_numpy(), known, largest),
        },
        "rows": rows.assign(date=rows["date"].dt.strftime("%Y-%m-%d")).to_dict("records"),
    }


def _by_wetland(inputs: SkillInputs, filled: dict[str, Any], rank: dict[str, Any]) -> dict[str, Any]:
    """Collect each wetland's own scores."""
    last = inputs.relations.drop_duplicates("wetland_id", keep="last")
    family = dict(zip(last["wetland_id"], last["family"].astype(str), strict=True))
    rmse = dict(zip(last["wetland_id"], last["rmse_m2"].astype(float), strict=True))
    used = inputs.observed[inputs.observed["used"].astype(bool)].groupby("wetland_id").size()
    out = {}
    for row in inputs.wetlands.itertuples():
        key = str(row.wetland_id)
        out[key] = {
            "views_used": int(used.get(key, 0)),
            "rank_correlation": rank["by_wetland"].get(key, {}).get("rho") if rank else None,
            "relation_family": family.get(key),
            "relation_rmse_share": rmse.get(key, np.nan) / float(str(row.area_max_m2)),
            "filled_rmse_share": filled["views"].get("by_wetland", {}).get(key, {}).get("rmse"),
            "filled_coverage": filled["views"].get("by_wetland", {}).get(key, {}).get("coverage"),
        }
    return out


def design_based(inputs: SkillInputs) -> dict[str, Any] | None:
    """Return design-based accuracy with 95 % confidence intervals, from labels that are a probability sample.

    Stratified estimators of Olofsson et al. 2014 (doi:10.1016/j.rse.2014.02.015) with the map's classes as strata; the map's
    class of a label is the one it was given out of fold. Some intervals are wide where a class has few labels.

    Returns
    -------
    dict or None
        overall, and for water and dry: user and producer accuracy and share of the area, each as [estimate, half-width];
        None where the labels are no probability sample, or a class of the map has fewer than two labels.
    """
    rows = [r for r in inputs.card.get("error_rates", []) if r.get("stratum") == "all" and r.get("leaf_state") == "all"]
    if not inputs.probability_sample or not rows or inputs.mapped_water_share is None:
        return None
    counts = _counts(rows[0])
    if (counts.sum(axis=1) < 2).any():
        return None
    water = float(inputs.mapped_water_share)
    found = error_adjusted_area(counts, np.array([water, 1.0 - water]))
    half = 1.96
    return {
        "overall": [found.overall, half * found.overall_se],
        **{
            name: {
                "user": [float(found.user[i]), half * float(found.user_se[i])],
                "producer": [float(found.producer[i]), half * float(found.producer_se[i])],
                "area_share": [float(found.area[i]), half * float(found.area_se[i])],
            }
            for i, name in enumerate(("water", "dry"))
        },
    }


def _counts(row: dict[str, Any]) -> np.ndarray:
    """Return the error matrix (map, label; water first) behind a row of omission and commission."""
    water, dry = float(row["n_water"]), float(row["n_dry"])
    missed = round(float(row["omission"] or 0.0) * water)
    right = water - missed
    commission = float(row["commission"] or 0.0)
    false = min(round(commission * right / max(1.0 - commission, 1e-9)), dry)
    return np.array([[right, false], [missed, dry - false]])


def score_all(inputs: SkillInputs) -> dict[str, Any]:
    """Return every score of a delivery.

    Parameters
    ----------
    inputs : SkillInputs

    Returns
    -------
    dict
        ``classifier`` (out-of-fold, from the card), ``wet_dry``, ``rank``, ``relation``, ``filled`` (views and loggers
        hidden), ``walked`` (None without), ``by_wetland``. Shares are of each wetland's largest extent; groups with no
        rows have ``n`` 0; a measure that is not defined is None.
    """
    wet_dry: dict[str, Any] | None = None
    rank: dict[str, Any] = {}
    if inputs.stage is not None and len(inputs.stage):
        pairs = pair_with_stage(inputs.observed, inputs.stage, inputs.wetlands)
        wet_dry, rank = _wet_dry(pairs), _rank(pairs)
    filled = _filled(inputs)
    kept = ("error_rates", "reliability", "counts", "n_trees", "n_doubtful", "folds", "features")
    return {
        "classifier": {k: inputs.card[k] for k in kept if k in inputs.card} | {"design_based": design_based(inputs)},
        "wet_dry": wet_dry,
        "rank": rank or None,
        "relation": _relation(inputs),
        "filled": filled,
        "walked": _walked(inputs),
        "by_wetland": _by_wetland(inputs, filled, rank),
    }


def headline(skill: dict[str, Any]) -> dict[str, float]:
    """Return the few numbers that are followed from month to month; only those that are defined."""
    leaf_off: dict[str, Any] = next(
        (
            r
            for r in skill["classifier"].get("error_rates", [])
            if r.get("leaf_state") == "leaf_off" and r.get("stratum") == "all"
        ),
        {},
    )
    wet = (skill["wet_dry"] or {}).get("all", {})
    views, logger = skill["filled"]["views"]["all"], skill["filled"]["logger"]["all"]
    found = {
        "classifier omission, leaf-off": leaf_off.get("omission"),
        "classifier commission, leaf-off": leaf_off.get("commission"),
        "wet/dry agreement with stage": wet.get("accuracy"),
        "rank correlation of extent with stage": (skill["rank"] or {}).get("median_rho"),
        "relation RMSE, median share of largest extent": skill["relation"]["median_rmse_share"],
        "hidden views, RMSE share of largest extent": views.get("rmse"),
        "hidden views, coverage of the 90 % interval": views.get("coverage"),
        "hidden loggers, RMSE share of largest extent": logger.get("rmse"),
        "hidden loggers, coverage of the 90 % interval": logger.get("coverage"),
    }
    return {k: float(v) for k, v in found.items() if v is not None and np.isfinite(v)}


def unusual(now: dict[str, float], trend: list[tuple[str, str, float]], month: str, least: int = 4) -> list[str]:
    """Tell in words which headline scores fall outside their usual range.

    Parameters
    ----------
    now : dict
        Headline of this month.
    trend : list of (month, measure, value)
        Earlier months; this month's own rows are left out.
    month : str
    least : int
        Months needed before a range is called usual.

    Returns
    -------
    list of str
        One sentence a score outside median +- 4 times the median absolute deviation (scaled to a standard deviation; at
        least one hundredth). The factor is common practice, no source.
    """
    out = []
    for name, value in sorted(now.items()):
        past = np.array([v for m, k, v in trend if k == name and m < month], float)
        if past.size < least:
            continue
        middle = float(np.median(past))
        spread = max(1.4826 * float(np.median(np.abs(past - middle))), 0.01)
        if abs(value - middle) > 4 * spread:
            out.append(
                f"{name} is {value:.3f} this month; it was {middle:.3f} in the middle of {past.size} earlier months"
            )
    return out
