"""From greenness views to leaf dates of every wetland and year, by empirical Bayes.

Landscape first (a generic prior), then each wetland over all years (prior: the landscape's spread), then the
year's departure over all wetlands, then each wetland in each year (prior: wetland plus year). Every level calls the same
fit; where views are few the prior speaks, and the posterior spread says so.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.leaves.curves import LOGIT_10, RATE, RATE_BRIGHT, Optics, ground_brightness
from inundate.leaves.fitting import (
    AUTUMN,
    DECLINE,
    FALL,
    FALL_SCALE,
    LEAF_AREA,
    RISE,
    RISE_SCALE,
    SPRING,
    Fitted,
    Series,
    fit_series,
)
from inundate.leaves.views import Views

GENERIC_RISE_DAY, GENERIC_FALL_DAY = 125.0, 290.0
"""Middle of green-up and of leaf fall of mid-latitude deciduous woods (common practice, no source)."""
GENERIC_SCALE_DAYS = 7.0
"""Logistic time scale of green-up and leaf fall (common practice, no source)."""
NOISE = 0.04
"""Spread of one NDVI view about its curve before data say otherwise (common practice, no source)."""
OPEN_COVER, DECIDUOUS, EVERGREEN = 0, 1, 2
_CLOSED = 0.65
_DEEP_LEAF_AREA = 5.1
"""Mean leaf area of temperate deciduous broadleaf woods (Asner et al. 2003, Global Ecol. Biogeogr. 12:191; from memory)."""
COLOUR_LEAD_DAYS = 8.0
"""Days by which autumn colour runs ahead of leaf fall (ground observers in temperate deciduous woods; from memory)."""
COLOURED_NDVI = 0.55
"""NDVI of deep canopy in autumn colour: PROSPECT-D with 4SAIL, chlorophyll 2-5, brown 0.3-0.5, gives 0.51-0.64."""


@dataclass(frozen=True, slots=True)
class Scale:
    """Greenness of ground and of canopy in this landscape.

    Attributes
    ----------
    bare, dense, top : float
        Of leafless ground, of the densest canopies, and of endlessly deep canopy.
    rise, fall : float
        First guess of the days of mid green-up and mid leaf fall.
    plain : bool
        Whether greenness is taken not to saturate.
    """

    bare: float
    dense: float
    top: float
    rise: float
    fall: float
    plain: bool = False

    @property
    def optics(self) -> Optics:
        """How leaf area becomes greenness."""
        if self.plain:
            return Optics(self.top, self.centre, plain=True)
        return Optics(self.top, self.centre, max(self.dense - COLOURED_NDVI, 0.0), COLOUR_LEAD_DAYS)

    @property
    def centre(self) -> float:
        """Day halfway between green-up and leaf fall."""
        return 0.5 * (self.rise + self.fall)

    def cover_share(self, greenness: np.ndarray) -> np.ndarray:
        """Return greenness on the scale from bare ground (0) to densest canopy (1)."""
        return (greenness - self.bare) / (self.dense - self.bare)


@dataclass(frozen=True, slots=True)
class Pooled:
    """Parameters of landscape, wetlands, and wetland-years.

    Attributes
    ----------
    landscape : ndarray, shape (8,)
    spread : ndarray, shape (8,)
        Standard deviation between wetlands.
    wetland : Fitted
        One entry a wetland that has views.
    years : ndarray of int64, shape (year,)
    year_shift, year_sd : ndarray, shape (year, 2)
        Departure of green-up and leaf fall from the landscape's mean, days, and how well it is known.
    single : Fitted
        Every wetland in every year with views, with (wetland, year index) in ``key``.
    key : ndarray of int64, shape (single, 2)
    residual_sd : ndarray, shape (2,)
        Spread of wetland-years about wetland plus year, days.
    """

    landscape: np.ndarray
    spread: np.ndarray
    wetland: Fitted
    years: np.ndarray
    year_shift: np.ndarray
    year_sd: np.ndarray
    single: Fitted
    key: np.ndarray
    residual_sd: np.ndarray


def grouped_quantile(group: np.ndarray, value: np.ndarray, size: int, q: float, *, least: int = 3) -> np.ndarray:
    """Return the quantile of ``value`` in each group 0..size-1; NaN where a group holds fewer than ``least`` values."""
    order = np.lexsort((value, group))
    group, value = group[order], value[order]
    count = np.bincount(group, minlength=size)
    first = np.concatenate([[0], np.cumsum(count)[:-1]])
    out = np.full(size, np.nan)
    ok = count >= least
    place = first[ok] + q * (count[ok] - 1)
    low = np.floor(place).astype(np.int64)
    high = np.minimum(low + 1, first[ok] + count[ok] - 1)
    out[ok] = value[low] + (place - low) * (value[high] - value[low])
    return out


def find_scale(views: Views, bare: float | None, dense: float | None, *, saturation: bool) -> Scale:
    """Read the landscape's greenness scale and rough season from its views."""
    size = views.ids.size
    high = grouped_quantile(views.wetland, views.value, size, 0.9, least=5)
    low = grouped_quantile(views.wetland, views.value, size, 0.1, least=5)
    rise, fall = _rough_season(views, low, high)
    centre = 0.5 * (rise + fall)
    dormant = (views.day < rise - 25) | (views.day > fall + 25)
    leafy = np.abs(views.day - centre) < 0.25 * (fall - rise)
    if dense is None:
        peak = grouped_quantile(views.wetland[leafy], views.value[leafy], size, 0.8)
        dense = float(np.nanquantile(peak, 0.9)) if np.isfinite(peak).any() else 0.85
        dense = min(max(dense, 0.75), 0.97)
    if bare is None:
        floor = grouped_quantile(views.wetland[dormant], views.value[dormant], size, 0.5)
        bare = float(np.nanquantile(floor, 0.1)) if np.isfinite(floor).any() else 0.15
        bare = min(max(bare, 0.0), 0.35)
    if saturation:
        bright = float(ground_brightness(np.array(bare)))
        left = bright * np.exp(-(RATE + RATE_BRIGHT * bright) * _DEEP_LEAF_AREA)
        return Scale(bare, dense, float(dense + (dense - bare) * left), rise, fall)
    return Scale(bare, dense, float(bare + _FAR * (dense - bare)), rise, fall, plain=True)


_FAR = 40.0


def _rough_season(views: Views, low: np.ndarray, high: np.ndarray) -> tuple[float, float]:
    """Half-height days of the median greenness by ten-day bin, over wetlands that swing."""
    swing = (high - low)[views.wetland]
    keep = np.isfinite(swing) & (swing > 0.15)
    bins = np.clip(((views.day[keep] - 1) // 10).astype(np.int64), 0, 36)
    scaled = (views.value[keep] - low[views.wetland[keep]]) / swing[keep]
    curve = grouped_quantile(bins, scaled, 37, 0.5, least=1)
    seen = np.flatnonzero(np.isfinite(curve))
    if seen.size < 8 or np.ptp(seen) < 12:
        return GENERIC_RISE_DAY, GENERIC_FALL_DAY
    curve = np.interp(np.arange(37), seen, curve[seen])
    smooth = np.convolve(np.pad(curve, 2, mode="edge"), [0.1, 0.25, 0.3, 0.25, 0.1], mode="valid")
    top = int(np.argmax(smooth))
    half_up = 0.5 * (smooth[top] + smooth[: top + 1].min())
    half_down = 0.5 * (smooth[top] + smooth[top:].min())
    below = np.flatnonzero(smooth[: top + 1] < half_up)
    above = np.flatnonzero(smooth[top:] < half_down)
    if not below.size or not above.size:
        return GENERIC_RISE_DAY, GENERIC_FALL_DAY
    i, j = int(below[-1]), top + int(above[0])
    rise = i + (half_up - smooth[i]) / max(smooth[i + 1] - smooth[i], 1e-9)
    fall = j - 1 + (smooth[j - 1] - half_down) / max(smooth[j - 1] - smooth[j], 1e-9)
    rise, fall = 10 * rise + 5.5, 10 * fall + 5.5
    return (rise, fall) if fall - rise > 40 else (GENERIC_RISE_DAY, GENERIC_FALL_DAY)


def tell_cover(views: Views, scale: Scale) -> np.ndarray:
    """Tell open, deciduous and evergreen wetlands apart (codes 0, 1, 2), by amplitude, bare level and timing.

    Snow, water and haze lower greenness in winter, so the bare level is the upper quartile of dormant views: an evergreen
    canopy is green in every winter view without snow; a leafless one is not in any. Woods put their leaves out within
    two to four weeks, herbs grow over two months and later in the year (common practice, no source): a wetland that
    greens slowly, or rather slowly and well after the landscape's woods, is open. One without enough views counts as
    deciduous: its water is then never taken as seen when leaves may hide it.
    """
    size = views.ids.size
    dormant = (views.day < scale.rise - 25) | (views.day > scale.fall + 25)
    leafy = np.abs(views.day - scale.centre) < 0.3 * (scale.fall - scale.rise)
    peak = scale.cover_share(grouped_quantile(views.wetland[leafy], views.value[leafy], size, 0.7))
    bare = scale.cover_share(grouped_quantile(views.wetland[dormant], views.value[dormant], size, 0.75))
    cover = np.full(size, DECIDUOUS, np.int64)
    cover[peak < _CLOSED] = OPEN_COVER
    cover[(peak >= _CLOSED) & (bare > _CLOSED) & (peak - bare < 0.3)] = EVERGREEN
    mean, spread = generic_prior(scale)
    spread[[RISE_SCALE, FALL_SCALE]] = 0.7
    series, who, _ = views.series(cover[views.wetland] == DECIDUOUS, by_year=False)
    if who.size:
        fitted = fit_series(series, mean, spread, optics=scale.optics, noise=NOISE)
        days = 2.0 * LOGIT_10 * np.exp(fitted.parameters[:, RISE_SCALE])
        known = fitted.sd[:, RISE_SCALE] < 0.5
        quick = fitted.parameters[known & (days < _WOODS_DAYS), RISE]
        late = fitted.parameters[:, RISE] - (np.median(quick) if quick.size else scale.rise)
        herbs = known & ((days > _HERB_DAYS) | ((days > _WOODS_DAYS) & (late > _HERB_LATE_DAYS)))
        cover[who[herbs]] = OPEN_COVER
    return cover


_WOODS_DAYS, _HERB_DAYS, _HERB_LATE_DAYS = 30.0, 42.0, 15.0
"""Ten to ninety percent of greening up in woods at most, in herbs at least, and how much later herbs are."""


def generic_prior(scale: Scale) -> tuple[np.ndarray, np.ndarray]:
    """Return mean and spread (8,) of a prior that knows only the rough season and the greenness scale."""
    leaf_area = 1.0 / _FAR if scale.plain else _DEEP_LEAF_AREA
    mean = np.empty(8)
    mean[[SPRING, AUTUMN]] = scale.bare + 0.1 * (scale.dense - scale.bare)
    mean[LEAF_AREA], mean[DECLINE] = np.log(leaf_area), 0.0
    mean[[RISE, FALL]] = scale.rise, scale.fall
    mean[[RISE_SCALE, FALL_SCALE]] = np.log(GENERIC_SCALE_DAYS)
    spread = np.array([0.2, 0.2, 0.5, 0.05, 25.0, 0.5, 25.0, 0.5])
    return mean, spread


def _robust(values: np.ndarray, own_sd: np.ndarray, least: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Median over rows, and spread between rows beyond what their own uncertainty explains (at least ``least``)."""
    middle = np.median(values, axis=0)
    mad = 1.4826 * np.median(np.abs(values - middle), axis=0)
    between = np.sqrt(np.maximum(mad**2 - np.median(own_sd**2, axis=0), least**2))
    return middle, between


def pool(views: Views, member: np.ndarray, scale: Scale) -> Pooled:
    """Fit landscape, wetlands, years and wetland-years of the wetlands of one kind (``member``, bool (wetland,)).

    The wetlands are fitted twice: once as if all years were alike, and again on days from which the year's departure has
    been taken, since mixed years would look like slow ones.
    """
    keep = member[views.wetland]
    years = np.arange(views.year.min(), views.year.max() + 1) if views.year.size else np.zeros(0, np.int64)
    shift, shift_sd, residual_sd = np.zeros((years.size, 2)), np.full((years.size, 2), 8.0), np.array([5.0, 5.0])
    series, who, when = views.series(keep, by_year=True)
    when = when - (years[0] if years.size else 0)
    landscape, spread, full, noise = _fit_wetlands(views, keep, shift, scale)
    if not who.size:
        single = fit_series(series, landscape, spread, noise=noise, optics=scale.optics)
        return Pooled(landscape, spread, full, years, shift, shift_sd, single, np.zeros((0, 2), np.int64), residual_sd)
    for loose in (True, True, False):
        mean, wide = full.parameters[who], np.tile(_WITHIN, (who.size, 1))
        mean[:, _LIMBS] += shift[when]
        wide[:, _LIMBS] = _LOOSE_DAYS if loose else np.sqrt(residual_sd**2 + shift_sd[when] ** 2)
        single = fit_series(series, mean, wide, noise=noise, optics=scale.optics)
        if loose:
            trust = 1.0 - np.minimum(single.sd[:, _LIMBS] ** 2 / _LOOSE_DAYS**2, 0.9)
            departure = shift[when] + (single.parameters - mean)[:, _LIMBS] / trust
            shift, shift_sd, residual_sd = _year_effects(departure, single.sd[:, _LIMBS] / trust, when, years.size)
            landscape, spread, full, noise = _fit_wetlands(views, keep, shift, scale)
    return Pooled(landscape, spread, full, years, shift, shift_sd, single, np.column_stack([who, when]), residual_sd)


_LIMBS = [RISE, FALL]
_LOOSE_DAYS = 14.0
_WITHIN = np.array([0.12, 0.12, 0.2, 0.03, 0.0, 0.2, 0.0, 0.2])
_LEAST = np.array([0.03, 0.03, 0.1, 0.01, 1.5, 0.1, 1.5, 0.1])


def _fit_wetlands(
    views: Views, keep: np.ndarray, shift: np.ndarray, scale: Scale
) -> tuple[np.ndarray, np.ndarray, Fitted, float]:
    """Fit each wetland over all years and return landscape mean, spread, fit of all wetlands, and noise."""
    mean, spread = generic_prior(scale)
    series, who, _ = views.series(keep, by_year=False)
    if not who.size:
        return mean, spread, _widen(None, who, views.ids.size, mean, spread), NOISE
    year = views.year[keep] - views.year.min()
    late = np.interp((series.day - scale.rise) / (scale.fall - scale.rise), [0.0, 1.0], [0.0, 1.0])
    day = series.day - (shift[year, 0] * (1.0 - late) + shift[year, 1] * late)
    series = Series(day, series.value, series.weight, series.start)
    fitted = fit_series(series, mean, spread, noise=NOISE, optics=scale.optics)
    for _ in range(2):
        noise = float(np.median(fitted.noise))
        steady = fitted.count >= min(20.0, float(np.median(fitted.count)))
        mean, between = _robust(fitted.parameters[steady], fitted.sd[steady], _LEAST)
        spread = np.minimum(between, spread) if steady.sum() >= 5 else spread
        fitted = fit_series(series, mean, spread, noise=noise, optics=scale.optics)
    return mean, spread, _widen(fitted, who, views.ids.size, mean, spread), noise


def _widen(fitted: Fitted | None, who: np.ndarray, size: int, mean: np.ndarray, spread: np.ndarray) -> Fitted:
    """Give every wetland an entry: the landscape's where it was not fitted."""
    out = Fitted(np.tile(mean, (size, 1)), np.tile(spread, (size, 1)), np.full(size, NOISE), np.zeros(size))
    if fitted is not None:
        out.parameters[who], out.sd[who] = fitted.parameters, fitted.sd
        out.noise[who], out.count[who] = fitted.noise, fitted.count
    return out


def _year_effects(
    departure: np.ndarray, sd: np.ndarray, when: np.ndarray, size: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Departure of each year from the mean year over all wetlands, its uncertainty, and what is left of wetland-years.

    Parameters
    ----------
    departure, sd : ndarray, shape (wetland-year, 2)
        Days from the wetland's own mean dates, and their uncertainty.
    when : ndarray of int64, shape (wetland-year,)
        Year index, 0..size-1.
    size : int

    Returns
    -------
    (shift, shift_sd, residual_sd)
        Shapes (size, 2), (size, 2), (2,).
    """
    shift, shift_sd, left = np.zeros((size, 2)), np.full((size, 2), np.inf), np.full(2, 5.0)
    for limb in range(2):
        informed = sd[:, limb] < 0.7 * _LOOSE_DAYS
        d, s, y = departure[informed, limb], sd[informed, limb], when[informed]
        middle = grouped_quantile(y, d, size, 0.5, least=1)
        rest = d - middle[y]
        count = np.bincount(y, minlength=size)
        if d.size >= 10 and (count > 1).any():
            several = count[y] > 2
            if several.sum() >= 10:
                mad = 1.4826 * np.median(np.abs(rest[several]))
                left[limb] = np.sqrt(max(mad**2 - np.median(s[several] ** 2), 1.5**2))
        own = np.bincount(y, weights=s**2 + left[limb] ** 2, minlength=size)
        seen = count > 0
        shift_sd[seen, limb] = 1.2533 * np.sqrt(own[seen]) / count[seen]
        between = 8.0
        if seen.sum() >= 4:
            between = float(np.sqrt(max(np.var(middle[seen], ddof=1) - np.mean(shift_sd[seen, limb] ** 2), 2.0**2)))
        gain = np.where(seen, between**2 / (between**2 + shift_sd[:, limb] ** 2), 0.0)
        shift[:, limb] = np.where(seen, gain * np.nan_to_num(middle), 0.0)
        shift_sd[:, limb] = np.where(seen, np.sqrt(gain) * np.minimum(shift_sd[:, limb], 1e6), between)
    return shift, shift_sd, left
