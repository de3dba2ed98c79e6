"""Bands of relations that also hold errors which all views of a wetland share."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.relation.relations import RelationSet

Z_90 = 1.6448536269514722


def widen_bands(table: pd.DataFrame, wetlands: pd.DataFrame, lasting: tuple[float, float]) -> pd.DataFrame:
    """Return a relation table with 90 % bands widened by errors that no number of pairs averages out.

    Parameters
    ----------
    table : DataFrame
        wetland_id, stage_m, area_m2, area_lo_m2, area_hi_m2 and any others, stages rising within wetland (and period).
    wetlands : DataFrame
        wetland_id, area_max_m2.
    lasting : (float, float)
        Standard deviations, from wetland to wetland, of the share of water that views keep missing and of the share of
        dry ground that they keep calling water.

    Returns
    -------
    DataFrame
        Bands within 0 and the largest extent, never falling with stage; 0 where the relation says dry for certain.
    """
    largest = table["wetland_id"].map(dict(zip(wetlands["wetland_id"], wetlands["area_max_m2"], strict=True)))
    area, low, high = (table[c].to_numpy(float) for c in ("area_m2", "area_lo_m2", "area_hi_m2"))
    most = largest.to_numpy(float)
    reach = Z_90 * np.hypot(area * lasting[0], (most - area) * lasting[1]) * (high > 0)
    out = table.assign(
        area_lo_m2=np.clip(area - np.hypot(area - low, reach), 0.0, area),
        area_hi_m2=np.clip(area + np.hypot(high - area, reach), area, np.maximum(most, area)),
    )
    keys = [k for k in ("wetland_id", "period") if k in out.columns]
    for name in ("area_lo_m2", "area_hi_m2"):
        out[name] = out.groupby(keys, sort=False)[name].cummax()
    out["area_lo_m2"] = np.minimum(out["area_lo_m2"], out["area_m2"])
    return out


def leaf_factors(
    pairs: pd.DataFrame,
    relations: RelationSet,
    wetlands: pd.DataFrame,
    lasting: tuple[float, float],
    *,
    least: int = 20,
) -> dict[str, float]:
    """Return how many times larger than stated the sd of views under leaves is, by leaf state, as loggers show.

    The least factor, 1 to 8, under which nine in ten views of wetlands with enough leaf-off pairs of their own lie within
    1.645 sd of what stage gives through the relation; errors that last are added to both.

    Parameters
    ----------
    pairs : DataFrame
        From :func:`make_pairs`.
    relations : RelationSet
        Fitted to :func:`best_pairs` of them.
    wetlands : DataFrame
        wetland_id, area_max_m2.
    lasting : (float, float)
        Water missed and dry ground added that last in a wetland, sds as shares.
    least : int
        Fewer views than this of a leaf state tell nothing: it takes the largest factor found, 2 if none (common practice).
    """
    size = (
        pairs["wetland_id"].map(dict(zip(wetlands["wetland_id"], wetlands["area_max_m2"], strict=True))).astype(float)
    )
    bare = (pairs["leaf_state"].astype(str) == "leaf_off").groupby(pairs["wetland_id"]).transform("sum") >= 8
    known = bare & (pairs["stage_m"] > 0) & ~pairs["censored"].astype(bool)
    table = pairs[known].assign(size=size[known], told=np.nan)
    for name, rows in table.groupby("wetland_id"):
        table.loc[rows.index, "told"] = relations.predict(str(name), rows["stage_m"].to_numpy())["area_m2"].to_numpy()
    gap = ((table["area_m2"] - table["told"]) / table["size"]).abs().to_numpy()
    sd = (table["area_sd_m2"] / table["size"]).to_numpy()
    share = (table["told"] / table["size"]).to_numpy()
    rest = (lasting[0] * share) ** 2 + (lasting[1] * (1 - share)) ** 2
    out: dict[str, float] = {}
    trials = np.exp(np.linspace(0.0, np.log(8.0), 60))
    for state in ("green_up", "leaf_on", "leaf_fall"):
        mine = (table["leaf_state"].astype(str) == state).to_numpy() & np.isfinite(gap) & np.isfinite(sd)
        if mine.sum() >= least:
            held = [float(np.mean(gap[mine] <= 1.645 * np.sqrt((f * sd[mine]) ** 2 + rest[mine]))) for f in trials]
            out[state] = float(trials[min(int(np.searchsorted(np.maximum.accumulate(held), 0.9)), trials.size - 1)])
    usual = max(out.values(), default=2.0)
    return {state: out.get(state, usual) for state in ("green_up", "leaf_on", "leaf_fall")}
