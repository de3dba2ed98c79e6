"""The families of stage-area curves, compiled: every fit, band and table of the part evaluates these.

All curves give the share of the largest extent, 0..1, from stage in metres: 0 at and below stage 0, never falling, never
above 1. Parameters are unbounded reals in a vector of length ``N_PARAM`` of which a family uses the first
``FAMILY_SIZE[family]``:

- ``power`` (Hayashi & van der Kamp 2000): log h_full, log b. Share = (h / h_full)^b with b = 2/p; h_full is the stage at
  which the law reaches the largest extent.
- ``power_offset``: log h_full, log b, offset. Share = ((h - offset) / h_full)^b.
- ``spline``: the same three and four log increments: a monotone cubic (Fritsch & Carlson 1980, SIAM J. Numer. Anal. 17,
  238) through knots at u = 0, 1/4, 1/2, 3/4, 1 of u = ((h - offset) / h_full)^b, each rise exp(increment) / 4.
- ``elevation``: vertical offset (m), roughness (m) and log b_low of the elevation model's hypsometry. Share =
  H_roughness(h + offset): positive roughness blurs the hypsometry (ground rougher than the model shows), negative sharpens
  it (model noisier than the ground: Richardson-Lucy deconvolution; Richardson 1972, J. Opt. Soc. Am. 62, 55; Lucy 1974,
  Astron. J. 79, 745).
  Below the floor of what the model shows (its lowest 3 %, or the water surface that stood there at the survey) the curve
  runs to 0 at stage 0 as a power b_low of stage.
"""

from __future__ import annotations

import numba as nb
import numpy as np

FAMILIES = ("power", "power_offset", "spline", "elevation")
POWER, POWER_OFFSET, SPLINE, ELEVATION = range(4)
FAMILY_SIZE = np.array([2, 3, 7, 3])
N_PARAM = 7
N_KNOT = 4
N_WORK = 3 + 2 * (N_KNOT + 1)
ROUGHNESS_M = np.array([-0.15, -0.10, -0.06, -0.03, 0.0, 0.03, 0.06, 0.10, 0.15])
_SHARPEN_STEPS = 30
N_TABLE = 161
_DRY_RAMP_M = 0.03
_FLOOR_SHARE = 0.03
_WATER_FLAT_M, _FLAT_STEPS = 0.05, 5
_HIGHEST_FLAT = 0.97


@nb.njit(cache=True, nogil=True)
def prepare(family: int, theta: np.ndarray, work: np.ndarray) -> None:
    """Turn a parameter vector into the numbers that :func:`share_at` needs (written into ``work``, ``(N_WORK,)``)."""
    if family == 3:
        work[0] = theta[0]
        work[1] = min(max(theta[1], ROUGHNESS_M[0]), ROUGHNESS_M[-1])
        work[2] = np.exp(min(max(theta[2], -1.5), 2.0))
        return
    work[0] = np.exp(min(max(theta[0], -6.0), 6.0))
    work[1] = np.exp(min(max(theta[1], -3.0), 3.0))
    work[2] = theta[2] if family > 0 else 0.0
    if family != 2:
        return
    work[3] = 0.0
    for k in range(N_KNOT):
        work[4 + k] = work[3 + k] + np.exp(min(max(theta[3 + k], -4.0), 4.0)) / N_KNOT
    slope = 4 + N_KNOT
    work[slope] = (work[4] - work[3]) * N_KNOT
    work[slope + N_KNOT] = (work[3 + N_KNOT] - work[2 + N_KNOT]) * N_KNOT
    for k in range(1, N_KNOT):
        below = (work[3 + k] - work[2 + k]) * N_KNOT
        above = (work[4 + k] - work[3 + k]) * N_KNOT
        work[slope + k] = 2.0 * below * above / (below + above)


@nb.njit(cache=True, nogil=True)
def _warp(u: float, work: np.ndarray) -> float:
    slope = 4 + N_KNOT
    if u >= 1.0:
        return work[3 + N_KNOT] + work[slope + N_KNOT] * (u - 1.0)
    k = min(int(u * N_KNOT), N_KNOT - 1)
    t = u * N_KNOT - k
    step = 1.0 / N_KNOT
    t2 = t * t
    t3 = t2 * t
    return (
        (2 * t3 - 3 * t2 + 1) * work[3 + k]
        + (t3 - 2 * t2 + t) * step * work[slope + k]
        + (3 * t2 - 2 * t3) * work[4 + k]
        + (t3 - t2) * step * work[slope + k + 1]
    )


@nb.njit(cache=True, nogil=True)
def _table_at(table: np.ndarray, span: np.ndarray, rough: float, z: float) -> float:
    place = min(max((z - span[0]) / span[1], 0.0), table.shape[1] - 1.0)
    i = min(int(place), table.shape[1] - 2)
    part = place - i
    k = 0
    while k < ROUGHNESS_M.size - 2 and rough > ROUGHNESS_M[k + 1]:
        k += 1
    mix = (rough - ROUGHNESS_M[k]) / (ROUGHNESS_M[k + 1] - ROUGHNESS_M[k])
    low = table[k, i] + part * (table[k, i + 1] - table[k, i])
    high = table[k + 1, i] + part * (table[k + 1, i + 1] - table[k + 1, i])
    return min(max(low + mix * (high - low), 0.0), 1.0)


@nb.njit(cache=True, nogil=True)
def share_at(family: int, work: np.ndarray, table: np.ndarray, span: np.ndarray, h: float) -> float:
    """Return the share of the largest extent at stage ``h``.

    ``table`` (roughness level, ``N_TABLE``) and ``span`` (first stage, step, stage of the floor) describe the hypsometry;
    only the elevation family reads them.
    """
    if h <= 0.0:
        return 0.0
    if family == 3:
        floor = span[2] - work[0]
        if floor > _DRY_RAMP_M:
            if h >= floor:
                return _table_at(table, span, work[1], h + work[0])
            return _table_at(table, span, work[1], span[2]) * (h / floor) ** work[2]
        return _table_at(table, span, work[1], h + work[0]) * min(1.0, h / _DRY_RAMP_M)
    x = (h - work[2]) / work[0]
    if x <= 0.0:
        return 0.0
    u = x ** work[1]
    if family == 2:
        u = _warp(u, work)
    if work[2] < 0.0 and h < -work[2]:
        u *= h / -work[2]
    return min(u, 1.0)


@nb.njit(cache=True, nogil=True)
def curve_of(family: int, theta: np.ndarray, table: np.ndarray, span: np.ndarray, stage: np.ndarray) -> np.ndarray:
    """Return shares (float64, shape of ``stage``) of one curve; NaN stage gives NaN."""
    work = np.zeros(N_WORK)
    prepare(family, theta, work)
    out = np.empty(stage.size)
    for i in range(stage.size):
        out[i] = np.nan if np.isnan(stage[i]) else share_at(family, work, table, span, stage[i])
    return out


@nb.njit(cache=True, nogil=True)
def full_stage(family: int, theta: np.ndarray, table: np.ndarray, span: np.ndarray) -> float:
    """Return the lowest stage (m) at which a curve reaches its cap, by bisection; the search ends at 400 m."""
    work = np.zeros(N_WORK)
    prepare(family, theta, work)
    low, high = 0.0, 0.25
    while high < 400.0 and share_at(family, work, table, span, high) < 0.999999:
        low = high
        high *= 1.6
    for _ in range(40):
        middle = 0.5 * (low + high)
        if share_at(family, work, table, span, middle) < 0.999999:
            low = middle
        else:
            high = middle
    return high


def empty_table() -> tuple[np.ndarray, np.ndarray]:
    """Return a hypsometry table and span of the right shape for curves that do not read them."""
    return np.zeros((ROUGHNESS_M.size, N_TABLE)), np.array([0.0, 1.0, 0.0, 0.0, 0.0])


def water_at_survey(stage_m: np.ndarray, share: np.ndarray) -> tuple[float, float, float]:
    """Find the water that stood in a bowl when its elevation was measured.

    A water surface shows as a step: the ``_WATER_FLAT_M`` that hold most area hold 6 % of it or more, at a slope over
    twice that of the 15 cm above, and no more area lies below them (cells at the shore that noise made too low). The depth under the
    surface is where a power law through the ground above runs to zero, with log b held near log 1.3 (sd 0.4; common practice, no
    source).

    Parameters
    ----------
    stage_m, share : ndarray, shape (step,)
        Stage above the lowest cell, rising, and share of the largest extent below it.

    Returns
    -------
    floor_m, hidden_m, depth_m : float
        Stage of the top of the step (above the lowest cell), depth of the lowest ground below the lowest cell (below 0 where noise
        made cells lower than the ground), and depth of water; without water the stage at which 3 % of the area is reached, 0 and 0.
    """
    dry = float(np.interp(_FLOOR_SHARE, share + 1e-12 * np.arange(share.size), stage_m)), 0.0, 0.0
    step = _WATER_FLAT_M / _FLAT_STEPS
    grid = np.arange(0.0, float(stage_m[-1]) + step, step)
    reached = np.interp(grid, stage_m, share)
    reached[0] = 0.0
    if grid.size <= _FLAT_STEPS:
        return dry
    held = np.where(reached[_FLAT_STEPS:] <= _HIGHEST_FLAT, reached[_FLAT_STEPS:] - reached[:-_FLAT_STEPS], 0.0)
    at = int(np.argmax(held))
    top, low = float(grid[at + _FLAT_STEPS]), float(reached[at + _FLAT_STEPS])
    next_up = float(np.interp(top + 0.15, grid, reached)) - low
    if held[at] < 0.06 or held[at] / _WATER_FLAT_M < 2.0 * next_up / 0.15 or reached[at] > held[at]:
        return dry
    above = (stage_m > top) & (share > low + 1e-9) & (share < 0.95)
    surface = top - 0.5 * _WATER_FLAT_M
    if above.sum() < 4:
        return top, 0.0, 0.0
    pick = np.linspace(0, above.sum() - 1, min(int(above.sum()), 25)).astype(int)
    z, y = stage_m[above][pick] - surface, np.log(share[above][pick])
    best, depth = np.inf, 0.0
    for trial in np.concatenate([[0.01], np.arange(0.03, 3.0, 0.03)]):
        x = np.log(z + trial)
        b = float(np.sum((x - x.mean()) * (y - y.mean())) / max(float(np.sum((x - x.mean()) ** 2)), 1e-12))
        left = y - y.mean() - b * (x - x.mean())
        cost = 5.0 * float(np.mean(left**2)) / 0.05**2 + ((np.log(max(b, 0.05)) - np.log(1.3)) / 0.4) ** 2
        if cost < best:
            best, depth = cost, float(trial)
    return top, depth - surface, depth


def _sharpen(mass: np.ndarray, kernel: np.ndarray) -> np.ndarray:
    """Return the area by elevation whose blur under ``kernel`` is ``mass`` (Richardson-Lucy from the blurred one)."""
    found = kernel @ mass
    for _ in range(_SHARPEN_STEPS):
        found = found * (kernel.T @ (mass / np.maximum(kernel @ found, 1e-12)))
    return found


def hypsometry_table(stage_m: np.ndarray, area_m2: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lay a hypsometry out for the elevation family.

    Parameters
    ----------
    stage_m, area_m2 : ndarray, shape (step,)
        Cumulative area below each stage above the lowest cell; the last area counts as the largest extent.

    Returns
    -------
    table : ndarray, shape (roughness level, ``N_TABLE``)
        Share of the largest extent, rising along the second axis, at the levels ``ROUGHNESS_M``.
    span : ndarray, shape (5,)
        Stage of the first column, step, stage of the floor, depth of the lowest ground below the lowest cell, and depth of water at
        the survey, m; stages count from the lowest ground as far as it is known.
    """
    order = np.argsort(stage_m, kind="stable")
    stage = np.asarray(stage_m, float)[order]
    share = np.maximum.accumulate(np.asarray(area_m2, float)[order])
    share = share / max(share[-1], 1e-9)
    floor, hidden, depth = water_at_survey(stage, share)
    stage = stage + hidden
    pad = 2.0 * float(ROUGHNESS_M[-1])
    grid = np.linspace(-pad, float(stage[-1]) + pad, N_TABLE)
    step = grid[1] - grid[0]
    mass = np.diff(np.interp(grid, stage, share, left=0.0, right=1.0), prepend=0.0)
    away = (grid[:, None] - grid[None, :]) / step
    table = np.empty((ROUGHNESS_M.size, N_TABLE))
    for k, rough in enumerate(ROUGHNESS_M):
        if rough == 0:
            table[k] = np.cumsum(mass)
            continue
        kernel = np.exp(-0.5 * (away * step / abs(rough)) ** 2)
        kernel /= kernel.sum(axis=0)
        found = kernel @ mass if rough > 0 else _sharpen(mass, kernel)
        table[k] = np.cumsum(found) / found.sum()
    return np.clip(table, 0.0, 1.0), np.array([grid[0], step, floor + hidden, hidden, depth])
