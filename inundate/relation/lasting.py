"""Bands of relations that also hold errors which all views of a wetland share."""

from __future__ import annotations

import numpy as np
import pandas as pd

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
