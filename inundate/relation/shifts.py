"""Shifts: dates from which the same extent goes with another stage, and differences between rising and falling water."""

from __future__ import annotations

import numpy as np
import pandas as pd

SHIFT_COLUMNS = ("wetland_id","period","date","date_lo","date_hi","kind","size_m","share","confidence","n_before","n_after","words")
HYSTERESIS_COLUMNS = ("wetland_id", "period", "size_m", "confidence", "words")

def find_shifts(units, fits, priors, weights, options):
    return pd.DataFrame(columns=SHIFT_COLUMNS)

def find_hysteresis(units, fits, priors, weights, options):
    return pd.DataFrame(columns=HYSTERESIS_COLUMNS)
