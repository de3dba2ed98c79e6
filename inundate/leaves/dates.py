"""Tables of leaf dates from pooled fits, warmth and fixed dates."""

from __future__ import annotations

import itertools
import re
from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.leaves.curves import LOGIT_10
from inundate.leaves.fallback import Warmth, warmth_dates
from inundate.leaves.fitting import FALL, FALL_SCALE, RISE, RISE_SCALE
from inundate.leaves.pooling import DECIDUOUS, EVERGREEN, Pooled
from inundate.leaves.views import Views, season_date, season_time

KNOTS = ("green_up_start", "green_up_mid", "green_up_end", "leaf_fall_start", "leaf_fall_mid", "leaf_fall_end")
FIXED_KEYS = ("green_up", "leaf_on", "leaf_fall", "leaf_off")
_COVER_NAMES = ("open", "deciduous", "evergreen")
_YEAR_SD_DAYS, _UNKNOWN_SD_DAYS = 8.0, 25.0
"""Uncertainty of a year without views, where other years tell and where nothing does (common practice, no source)."""
_BETWEEN_SD_DAYS = 5.0
"""Spread between wetlands of one landscape where no views tell (common practice, no source)."""
_LIMBS, _SCALES = [RISE, FALL], [RISE_SCALE, FALL_SCALE]


def check_fixed(fixed: dict[str, str] | None, offset_days: int) -> dict[str, str]:
    """Return fixed dates (``MM-DD`` by key), checked.

    Raises
    ------
    InputError
        On an unknown key, a date that is none, or dates out of order.
    """
    fixed = dict(fixed or {})
    out: dict[str, float] = {}
    for key, value in fixed.items():
        if key not in FIXED_KEYS:
            message = f"fixed leaf dates: key {key!r} is unknown; use {', '.join(FIXED_KEYS)}"
            raise InputError(message)
        if not re.fullmatch(r"\d{2}-\d{2}", str(value)):
            message = f"fixed leaf dates: {key} = {value!r} is not MM-DD; write for example '04-20'"
            raise InputError(message)
        date = pd.to_datetime(f"2023-{value}", errors="coerce")
        if date is pd.NaT:
            message = f"fixed leaf dates: {key} = {value!r} is no day of the year; write for example '04-20'"
            raise InputError(message)
        out[key] = float(season_time(np.array([date.to_datetime64()]), offset_days)[1][0])
    given = [(k, out[k]) for k in FIXED_KEYS if k in out]
    for (one, a), (two, b) in itertools.pairwise(given):
        if a >= b:
            message = f"fixed leaf dates: {one} = {fixed[one]} is not before {two} = {fixed[two]}"
            raise InputError(message + "; order them green_up, leaf_on, leaf_fall, leaf_off")
    return fixed


def _fixed_days(fixed: dict[str, str], years: np.ndarray, offset_days: int) -> dict[str, np.ndarray]:
    """Return fixed dates as days of each season year, shape (n,) a key."""
    out = {}
    for key, value in fixed.items():
        day = np.full(years.shape, np.nan)
        for ahead in (0, 1):  # a season that spans New Year ends in the next calendar year
            dates = np.array([f"{y + ahead:04d}-{value}" for y in years.tolist()], "datetime64[D]")
            year, place = season_time(dates, offset_days)
            day = np.where(year == years, place, day)
        out[key] = day
    return out


@dataclass(frozen=True, slots=True)
class Limbs:
    """Departure of green-up and leaf fall of each year from the mean year.

    Attributes
    ----------
    years : ndarray of int64, shape (year,)
    shift, sd : ndarray, shape (year, 2)
        Days, with their uncertainty.
    told_by : ndarray of str, shape (year,)
        ``views``, ``temperature`` or ``day_of_year``.
    """

    years: np.ndarray
    shift: np.ndarray
    sd: np.ndarray
    told_by: np.ndarray

    @classmethod
    def from_pooled(cls, pooled: Pooled, warmth: Warmth | None) -> Limbs:
        """Join what views and warmth say of each year, by their precision."""
        spans = [s for s in (pooled.years, warmth.years if warmth is not None else pooled.years) if s.size]
        low = min((int(s[0]) for s in spans), default=2000)
        high = max((int(s[-1]) for s in spans), default=2000)
        years = np.arange(low, high + 1)
        unseen = _YEAR_SD_DAYS if pooled.key.size else _UNKNOWN_SD_DAYS
        shift, sd = np.zeros((years.size, 2)), np.full((years.size, 2), unseen)
        seen = np.zeros(years.size, bool)
        if pooled.key.size:
            at = pooled.years - low
            shift[at], sd[at] = pooled.year_shift, pooled.year_sd
            seen[at[np.unique(pooled.key[:, 1])]] = True
        told = np.where(seen, "views", "day_of_year").astype(object)
        if warmth is not None:
            known = np.where(seen[:, None] & (sd < 4.0), pooled.landscape[_LIMBS] + shift, np.nan)
            days, miss = warmth_dates(warmth, years, known)
            at = warmth.years - low
            depart = days - pooled.landscape[_LIMBS]
            ok = np.isfinite(depart)
            weight = np.where(ok, 1.0 / miss**2, 0.0)
            own = 1.0 / sd[at] ** 2
            shift[at] = (shift[at] * own + np.where(ok, depart, 0.0) * weight) / (own + weight)
            sd[at] = 1.0 / np.sqrt(own + weight)
            told[at[ok.any(axis=1) & ~seen[at]]] = "temperature"
        return cls(years, shift, sd, told)


def _knots(parameters: np.ndarray) -> np.ndarray:
    """Days at which 10, 50 and 90 % of leaves are out, then down; shape (n, 6)."""
    mid, reach = parameters[:, _LIMBS], LOGIT_10 * np.exp(parameters[:, _SCALES])
    days = np.stack([mid - reach, mid, mid + reach], axis=2).reshape(-1, 6)
    cross = days[:, 2] > days[:, 3]  # a short season: leaves begin to fall when the last are out
    half = 0.5 * (days[cross, 2] + days[cross, 3])
    days[cross, 2], days[cross, 3] = half, half
    return days


def _apply_fixed(days: np.ndarray, fixed: dict[str, np.ndarray]) -> np.ndarray:
    """Put fixed days in, each shape (n,); a limb with one fixed end keeps its length; dates stay in order."""
    days = days.copy()
    for first, (start, end) in ((0, ("green_up", "leaf_on")), (3, ("leaf_fall", "leaf_off"))):
        if start in fixed and end in fixed:
            middle = 0.5 * (fixed[start] + fixed[end])
            days[:, first : first + 3] = np.column_stack([fixed[start], middle, fixed[end]])
        elif start in fixed:
            days[:, first : first + 3] += (fixed[start] - days[:, first])[:, None]
        elif end in fixed:
            days[:, first : first + 3] += (fixed[end] - days[:, first + 2])[:, None]
    return np.maximum.accumulate(days, axis=1)


def build_seasons(
    views: Views, cover: np.ndarray, kinds: dict[int, tuple[Pooled, Limbs]], fixed: dict[str, str]
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Build the tables of leaf dates of wetlands and of the landscape.

    Parameters
    ----------
    views : Views
    cover : ndarray of int64, shape (wetland,)
    kinds : dict
        Fits and years of deciduous and of open wetlands, by cover code; other covers have no dates.
    fixed : dict
        From :func:`check_fixed`.

    Returns
    -------
    (seasons, landscape)
    """
    pooled, limbs = kinds[DECIDUOUS]
    size, span = views.ids.size, limbs.years.size
    days, sd = np.full((size, span, 6), np.nan), np.full((size, span, 2), np.nan)
    source = np.full((size, span), "none", object)
    for code, (fits, years) in kinds.items():
        mine = cover == code
        parameters, spread, told = _of_kind(fits, years, size)
        days[mine] = _knots(parameters[mine].reshape(-1, 8)).reshape(-1, span, 6)
        sd[mine], source[mine] = spread[mine], told[mine]
    count = np.zeros((size, span), np.int64)
    np.add.at(count, (views.wetland, views.year - limbs.years[0]), 1)
    table = (np.repeat(views.ids.astype(object), span), np.tile(limbs.years, size), np.repeat(cover, span))
    seasons = _table(table, days.reshape(-1, 6), sd.reshape(-1, 2), source.ravel(), fixed, views.offset_days)
    seasons["n_views"] = count.ravel()
    common = np.tile(pooled.landscape, (span, 1))
    common[:, _LIMBS] += limbs.shift
    between = pooled.spread[_LIMBS] if pooled.key.size else _BETWEEN_SD_DAYS
    common_sd = np.sqrt(limbs.sd**2 + between**2 + _conversion_sd(common) ** 2)
    table = (np.full(span, "", object), limbs.years, np.full(span, DECIDUOUS))
    landscape = _table(table, _knots(common), common_sd, limbs.told_by, fixed, views.offset_days)
    landscape["n_views"] = count[cover == DECIDUOUS].sum(axis=0)
    return seasons, landscape


def _of_kind(pooled: Pooled, limbs: Limbs, size: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Parameters (wetland, year, 8), sd_days (wetland, year, 2) and source of wetland-years: own fit where it knows more."""
    span = limbs.years.size
    parameters = np.repeat(pooled.wetland.parameters[:, None, :], span, axis=1)
    parameters[:, :, _LIMBS] += limbs.shift[None]
    sd = np.sqrt(pooled.wetland.sd[:, None, _LIMBS] ** 2 + limbs.sd[None] ** 2 + pooled.residual_sd**2)
    source = np.tile(np.where(limbs.told_by == "views", "pooled", limbs.told_by).astype(object), (size, 1))
    if pooled.key.size:
        who, when = pooled.key[:, 0], pooled.key[:, 1] + pooled.years[0] - limbs.years[0]
        own = _BEYOND_FIT * pooled.single.sd[:, _LIMBS]
        better = own.mean(axis=1) < sd[who, when].mean(axis=1)
        who, when, own = who[better], when[better], own[better]
        parameters[who, when] = pooled.single.parameters[better]
        source[who, when] = np.where((own < sd[who, when]).all(axis=1), "views", source[who, when])
        sd[who, when] = own
    return parameters, np.sqrt(sd**2 + _conversion_sd(parameters) ** 2), source


_BEYOND_FIT = 1.4
"""Real error over the fit's own posterior spread, found by simulation with clouds, snow and changing water."""
_COLOUR_SD_DAYS = 5.0
"""How far the days between autumn colour and leaf fall vary (common practice, no source)."""


def _conversion_sd(parameters: np.ndarray) -> np.ndarray:
    """Uncertainty, in days, of what greenness says of leaf area.

    Ground brightness and clumping of young leaves are each known to a factor of two; on a rising logistic that is a shift of
    ``k ln 2`` each. In autumn the lead of colour over leaf fall comes on top.
    """
    scale = np.exp(parameters[..., _SCALES])
    rise = np.sqrt(2.0) * np.log(2.0) * scale[..., 0]
    return np.stack([rise, np.full_like(rise, _COLOUR_SD_DAYS)], axis=-1)


def _table(
    who: tuple[np.ndarray, np.ndarray, np.ndarray],
    days: np.ndarray,
    sd: np.ndarray,
    source: np.ndarray,
    fixed: dict[str, str],
    offset_days: int,
) -> pd.DataFrame:
    names, years, cover = who
    evergreen = cover == EVERGREEN
    source = source.astype(object).copy()
    if fixed:
        days, source = (
            _apply_fixed(days, _fixed_days(fixed, years, offset_days)),
            np.full(source.shape, "fixed", object),
        )
        sd = sd.copy()
        for limb, keys in enumerate((("green_up", "leaf_on"), ("leaf_fall", "leaf_off"))):
            if any(k in fixed for k in keys):
                sd[:, limb] = 0.0
    days = np.where(evergreen[:, None], np.nan, days)
    sd = np.where(evergreen[:, None], np.nan, sd)
    source[evergreen] = "none"
    out = pd.DataFrame({"wetland_id": names, "year": years, "cover": np.array(_COVER_NAMES, object)[cover]})
    for k, name in enumerate(KNOTS):
        out[name] = season_date(years, days[:, k], offset_days)
    out["sd_days"] = np.sqrt(np.mean(sd**2, axis=1))
    out["green_up_sd_days"], out["leaf_fall_sd_days"] = sd[:, 0], sd[:, 1]
    out["source"] = source
    return out
