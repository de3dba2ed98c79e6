"""Mass balances of a depression: the level from rain, evapotranspiration, runoff, exchange and spill, and its slopes.

The level is in m above lowest ground (below 0: water under ground). Storage per metre is the flooded share, and the
drainable pore space elsewhere.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from inundate.series.maps import share_at

# The direct balance: rain on the bowl times a multiplier that grows with wetness.
DIRECT_NAMES = ("rain_multiplier", "pet_multiplier", "exchange", "base", "pore_space", "sill", "wet_inflow")
DIRECT_MEAN = (0.4, 0.0, -3.7, 0.2, -1.9, 0.0, 0.2)
DIRECT_SD = (0.7, 0.4, 1.0, 0.6, 0.4, 0.10, 0.3)
# The catchment balance: rain on connected ground, runoff of a soil store from around it, and a constant seepage.
CATCHMENT_NAMES = (
    "catchment_ratio", "pet_multiplier", "exchange", "base", "pore_space", "sill", "soil_depth", "connected", "seepage",
)  # fmt: skip
CATCHMENT_MEAN = (0.7, 0.0, -4.0, 0.2, -1.9, 0.0, 0.0, -1.6, -7.0)
CATCHMENT_SD = (0.8, 0.3, 1.0, 0.6, 0.4, 0.10, 1.0, 0.5, 0.8)
DIRECT, CATCHMENT = 0, 1
# Priors before pooling are wide and common practice, no source: logs of ratios, exchange times of one to two months,
# pore space 0.15, sill at the largest extent, seepage 1 mm a day.
_DEEPEST_M = -3.0
_EXTINCTION_M = 0.5


@njit(cache=True, nogil=True)
def bucket_path(
    form: int,
    theta: np.ndarray,
    rain: np.ndarray,
    pet: np.ndarray,
    runoff: np.ndarray,
    base: np.ndarray,
    wet: np.ndarray,
    table: np.ndarray,
    full: float,
    path: np.ndarray,
) -> None:
    """Level (m) a day into ``path`` (time,) for parameters ``theta`` (own ones, then one a column of ``base``)."""
    own = theta.size - base.shape[1]
    inflow, loss = np.exp(theta[0]), np.exp(theta[1])
    exchange, pore = min(np.exp(theta[2]), 1.0), min(np.exp(theta[4]), 1.0)
    sill = full * np.exp(theta[5])
    deep, connected, seepage = 0.0, 1.0, 0.0
    if form == 1:
        deep = 1.0 / (1.0 + np.exp(-theta[6]))
        connected, seepage = min(np.exp(theta[7]), 1.0), np.exp(theta[8])
    level = full * theta[3]
    for t in range(rain.size):
        target = theta[3]
        for j in range(base.shape[1]):
            target += theta[own + j] * base[t, j]
        share = share_at(level, table, full)
        store = pore + (1.0 - pore) * share
        leave = loss * pet[t] + seepage
        if level < 0.0:
            leave *= np.exp(level / _EXTINCTION_M)
        if form == 1:
            part = share + connected * (1.0 - share)
            gain = part * (rain[t] - leave) + inflow * (runoff[0, t] + deep * (runoff[1, t] - runoff[0, t]))
        else:
            gain = inflow * np.exp(theta[6] * wet[t]) * rain[t] - leave
        level += gain / store + exchange * (full * target - level)
        if level > sill:
            level = sill + min(0.5 * (level - sill), 0.05 * full)
        level = max(level, _DEEPEST_M)
        path[t] = level


@njit(cache=True, nogil=True)
def bucket_slopes(  # noqa: PLR0912, PLR0915 - the derivative beside each line of the balance
    form: int,
    theta: np.ndarray,
    rain: np.ndarray,
    pet: np.ndarray,
    runoff: np.ndarray,
    base: np.ndarray,
    wet: np.ndarray,
    table: np.ndarray,
    full: float,
    day: np.ndarray,
    jac: np.ndarray,
) -> None:
    """Fill ``jac`` (parameter, event) with the change of the level on each event's day by each parameter.

    The same balance as :func:`bucket_path`, carried along with its derivatives. ``day`` rises.
    """
    own = theta.size - base.shape[1]
    inflow, loss = np.exp(theta[0]), np.exp(theta[1])
    exchange, pore = min(np.exp(theta[2]), 1.0), min(np.exp(theta[4]), 1.0)
    sill = full * np.exp(theta[5])
    deep, connected, seepage = 0.0, 1.0, 0.0
    if form == 1:
        deep = 1.0 / (1.0 + np.exp(-theta[6]))
        connected, seepage = min(np.exp(theta[7]), 1.0), np.exp(theta[8])
    slope = np.zeros(theta.size)
    level = full * theta[3]
    slope[3] = full
    last, n = table.size - 1, 0
    for t in range(rain.size):
        target = theta[3]
        for j in range(base.shape[1]):
            target += theta[own + j] * base[t, j]
        share, rise = 0.0, 0.0
        if level > 0.0:
            share = share_at(level, table, full)
            if level < full:
                k = min(int(level / full * last), last - 1)
                rise = (table[k + 1] - table[k]) * last / full
        store = pore + (1.0 - pore) * share
        damp = np.exp(level / _EXTINCTION_M) if level < 0.0 else 1.0
        leave = (loss * pet[t] + seepage) * damp
        leave_rise = leave / _EXTINCTION_M if level < 0.0 else 0.0
        part, net, water = 1.0, 0.0, 0.0
        if form == 1:
            part = share + connected * (1.0 - share)
            net = rain[t] - leave
            water = inflow * (runoff[0, t] + deep * (runoff[1, t] - runoff[0, t]))
            gain = part * net + water
            gain_rise = (1.0 - connected) * rise * net - part * leave_rise
        else:
            water = inflow * np.exp(theta[6] * wet[t]) * rain[t]
            gain = water - leave
            gain_rise = -leave_rise
        gap = full * target - level
        keep = 1.0 + gain_rise / store - gain * (1.0 - pore) * rise / (store * store) - exchange
        level += gain / store + exchange * gap
        for j in range(theta.size):
            slope[j] *= keep
        slope[0] += water / store
        slope[1] -= part * loss * pet[t] * damp / store
        if theta[2] < 0.0:
            slope[2] += exchange * gap
        slope[3] += exchange * full
        if theta[4] < 0.0:
            slope[4] -= gain / (store * store) * pore * (1.0 - share)
        if form == 1:
            slope[6] += inflow * (runoff[1, t] - runoff[0, t]) * deep * (1.0 - deep) / store
            if theta[7] < 0.0:
                slope[7] += connected * (1.0 - share) * net / store
            slope[8] -= part * seepage * damp / store
        else:
            slope[6] += wet[t] * water / store
        for j in range(base.shape[1]):
            slope[own + j] += exchange * full * base[t, j]
        if level > sill:
            if 0.5 * (level - sill) < 0.05 * full:
                level = sill + 0.5 * (level - sill)
                slope *= 0.5
                slope[5] += 0.5 * sill
            else:
                level = sill + 0.05 * full
                slope[:] = 0.0
                slope[5] = sill
        if level < _DEEPEST_M:
            level = _DEEPEST_M
            slope[:] = 0.0
        while n < day.size and day[n] == t:
            jac[:, n] = slope
            n += 1
