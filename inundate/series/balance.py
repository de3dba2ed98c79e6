"""Mass balance of a depression: the level from rain, evapotranspiration, inflow, groundwater and spill, and its slopes.

The level is in m above lowest ground (below 0: water under ground). Water collects and evaporates over the flooded share or over the
basin floor (``reach``), whichever is larger; a dry part of the floor stores in its pore space only.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from inundate.series.maps import share_at

NAMES = (
    "inflow_ratio", "pet_multiplier", "exchange", "offset", "pore_space", "sill", "reach", "seepage", "amplitude", "deep_soil",
    "late",
)  # fmt: skip
"""Logs but for ``offset`` (of the mean groundwater over lowest ground, as a share of the full level), ``deep_soil`` and ``late`` (logits:
of the deep soil's part in inflow and groundwater, of the slow response of groundwater)."""
MEAN = (0.7, 0.0, -4.6, 0.3, -1.6, 0.0, -1.1, -7.0, 0.0, 0.0, 0.0)
SD = (0.8, 0.2, 1.1, 0.5, 0.4, 0.07, 0.5, 0.9, 0.7, 1.2, 1.2)
# Before pooling, wide and common practice, no source: a catchment of twice the largest extent, exchange with groundwater over
# months, pore space 0.2, spill at the largest extent, a floor of a third of it, seepage of 1 mm a day.
NAMED, SIGNALS = len(NAMES), 6
"""Parameters before those of the loggers' signals, and rows of ``region`` before these."""
_FASTEST = 0.15
_DEEPEST_M = -3.0
_EXTINCTION_M = 0.5
_FIRST = 0.6


@njit(cache=True, nogil=True)
def balance_path(
    theta: np.ndarray,
    rain: np.ndarray,
    pet: np.ndarray,
    region: np.ndarray,
    table: np.ndarray,
    full: float,
    path: np.ndarray,
) -> None:
    """Level (m) a day into ``path`` (time,) for parameters ``theta``: those of ``NAMES``, then one a signal of the loggers.

    ``region`` (6 + signal, time) is :attr:`inundate.series.drivers.Drivers.region` over the loggers' signals, which shift groundwater by
    their part of the full level; ``table`` the share of the largest extent at equal steps of
    level up to ``full``.
    """
    ratio, loss, seepage = np.exp(theta[0]), np.exp(theta[1]), np.exp(theta[7])
    exchange, pore, reach = min(np.exp(theta[2]), _FASTEST), min(np.exp(theta[4]), 1.0), min(np.exp(theta[6]), 1.0)
    sill, amplitude = full * np.exp(theta[5]), np.exp(theta[8])
    deep, late = 1.0 / (1.0 + np.exp(-theta[9])), 1.0 / (1.0 + np.exp(-theta[10]))
    level = _FIRST * full
    for t in range(rain.size):
        wet = share_at(level, table, full)
        store, catch = wet, wet
        if reach > wet:
            store, catch = wet + pore * (reach - wet), reach
        soon = region[2, t] + late * (region[3, t] - region[2, t])
        slow = region[4, t] + late * (region[5, t] - region[4, t])
        head = full * theta[3] + amplitude * (soon + deep * (slow - soon))
        for j in range(SIGNALS, region.shape[0]):
            head += full * theta[NAMED + j - SIGNALS] * region[j, t]
        leave = loss * pet[t] + seepage
        if level < 0.0:
            leave *= np.exp(level / _EXTINCTION_M)
        water = ratio * (region[0, t] + deep * (region[1, t] - region[0, t]))
        level += (catch * (rain[t] - leave + exchange * (head - level)) + water) / store
        if level > sill:
            level = sill + min(0.5 * (level - sill), 0.05 * full)
        level = max(level, _DEEPEST_M)
        path[t] = level


@njit(cache=True, nogil=True)
def balance_slopes(  # noqa: PLR0912, PLR0915 - the derivative beside each line of the balance
    theta: np.ndarray,
    rain: np.ndarray,
    pet: np.ndarray,
    region: np.ndarray,
    table: np.ndarray,
    full: float,
    day: np.ndarray,
    jac: np.ndarray,
) -> None:
    """Fill ``jac`` (parameter, event) with the change of the level on each event's day by each parameter.

    The same balance as :func:`balance_path`, carried along with its derivatives. ``day`` rises.
    """
    ratio, loss, seepage = np.exp(theta[0]), np.exp(theta[1]), np.exp(theta[7])
    exchange, pore, reach = min(np.exp(theta[2]), _FASTEST), min(np.exp(theta[4]), 1.0), min(np.exp(theta[6]), 1.0)
    sill, amplitude = full * np.exp(theta[5]), np.exp(theta[8])
    deep, late = 1.0 / (1.0 + np.exp(-theta[9])), 1.0 / (1.0 + np.exp(-theta[10]))
    slope = np.zeros(theta.size)
    level = _FIRST * full
    last, n = table.size - 1, 0
    for t in range(rain.size):
        wet, rise = 0.0, 0.0
        if level > 0.0:
            wet = share_at(level, table, full)
            if level < full:
                k = min(int(level / full * last), last - 1)
                rise = (table[k + 1] - table[k]) * last / full
        store, catch, store_rise, catch_rise, dry = wet, wet, rise, rise, 0.0
        if reach > wet:
            dry = reach - wet
            store, catch, store_rise, catch_rise = wet + pore * dry, reach, (1.0 - pore) * rise, 0.0
        soon = region[2, t] + late * (region[3, t] - region[2, t])
        slow = region[4, t] + late * (region[5, t] - region[4, t])
        mixed = soon + deep * (slow - soon)
        head = full * theta[3] + amplitude * mixed
        for j in range(SIGNALS, region.shape[0]):
            head += full * theta[NAMED + j - SIGNALS] * region[j, t]
        damp, damp_rise = 1.0, 0.0
        if level < 0.0:
            damp = np.exp(level / _EXTINCTION_M)
            damp_rise = damp / _EXTINCTION_M
        quick = region[0, t] + deep * (region[1, t] - region[0, t])
        net = rain[t] - (loss * pet[t] + seepage) * damp + exchange * (head - level)
        gain = catch * net + ratio * quick
        net_rise = -(loss * pet[t] + seepage) * damp_rise - exchange
        slope *= 1.0 + (catch * net_rise + catch_rise * net) / store - gain * store_rise / (store * store)
        pull = catch * exchange / store
        slope[0] += ratio * quick / store
        slope[1] -= catch * loss * pet[t] * damp / store
        if exchange < _FASTEST:
            slope[2] += pull * (head - level)
        slope[3] += pull * full
        if pore < 1.0:
            slope[4] -= gain * pore * dry / (store * store)
        if dry > 0.0 and reach < 1.0:
            slope[6] += reach * (net - gain * pore / store) / store
        slope[7] -= catch * seepage * damp / store
        slope[8] += pull * amplitude * mixed
        swing = ratio * (region[1, t] - region[0, t]) / store + pull * amplitude * (slow - soon)
        slope[9] += deep * (1.0 - deep) * swing
        swing = (1.0 - deep) * (region[3, t] - region[2, t]) + deep * (region[5, t] - region[4, t])
        slope[10] += pull * amplitude * late * (1.0 - late) * swing
        for j in range(SIGNALS, region.shape[0]):
            slope[NAMED + j - SIGNALS] += pull * full * region[j, t]
        level += gain / store
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
