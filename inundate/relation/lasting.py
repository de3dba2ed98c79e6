"""Bands of relations that also hold errors which all views of a wetland share."""

from __future__ import annotations

import numpy as np
import pandas as pd

from inundate.common.sizes import largest_extents
from inundate.relation.relations import RelationSet

Z_90 = 1.6448536269514722


def widen_bands(
    table: pd.DataFrame, wetlands: pd.DataFrame, lasting: tuple[float, float], parts: dict[str, float] | None = None
) -> pd.DataFrame:
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
    parts : dict, optional
        From :func:`inundate.relation.lasting_parts`.

    Returns
    -------
    DataFrame
        Bands within 0 and the largest extent, never falling with stage; 0 where the relation says dry for certain.
    """
    most = largest_extents(table["wetland_id"], wetlands).to_numpy()
    area, low, high = (table[c].to_numpy(float) for c in ("area_m2", "area_lo_m2", "area_hi_m2"))
    left = table["wetland_id"].map(parts or {}).astype(float).fillna(1.0).to_numpy()
    reach = Z_90 * left * np.hypot(area * lasting[0], (most - area) * lasting[1]) * (high > 0)
    out = table.assign(
        area_lo_m2=np.clip(area - np.hypot(area - low, reach), 0.0, area),
        area_hi_m2=np.clip(area + np.hypot(high - area, reach), area, np.maximum(most, area)),
    )
    keys = [k for k in ("wetland_id", "period") if k in out.columns]
    for name in ("area_lo_m2", "area_hi_m2"):
        out[name] = out.groupby(keys, sort=False)[name].cummax()
    out["area_lo_m2"] = np.minimum(out["area_lo_m2"], out["area_m2"])
    return out


def shared_sd(lasting: tuple[float, float]) -> float:
    """Return the sd (share of the largest extent) of what lasts in a half full wetland: half is missed in part, half added in part."""
    return 0.5 * float(np.hypot(*lasting))


def with_shared_errors(pairs: pd.DataFrame, wetlands: pd.DataFrame, lasting: tuple[float, float]) -> pd.DataFrame:
    """Widen pairs by the error that all views of a wetland share, where an elevation model hung on an outlet tells beside them.

    With ``n`` views that share an error of variance ``v`` (that of a half full wetland) each gets ``n v`` more: together they then say as
    much as one view without noise, and do not outvote the other witness by their number.

    Parameters
    ----------
    pairs : DataFrame
        wetland_id, stage_m, area_sd_m2, made; from :func:`inundate.relation.with_outlets`.
    wetlands : DataFrame
        wetland_id, area_max_m2.
    lasting : (float, float)
        Water missed and dry ground added that last in a wetland, sds as shares.

    Returns
    -------
    DataFrame
        Rows of ``pairs`` in their order; rows that are made, dry, or of wetlands with less than two made rows stay as they are.
    """
    made = pairs["made"].astype(bool)
    size = largest_extents(pairs["wetland_id"], wetlands)
    seen = (made.groupby(pairs["wetland_id"]).transform("sum") > 1) & ~made & (pairs["stage_m"] > 0)
    shared = seen.groupby(pairs["wetland_id"]).transform("sum") * (shared_sd(lasting) * size) ** 2
    wide = np.sqrt(pairs["area_sd_m2"].astype(float) ** 2 + shared)
    return pairs.assign(area_sd_m2=np.where(seen, wide, pairs["area_sd_m2"]))


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
    size = largest_extents(pairs["wetland_id"], wetlands)
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
