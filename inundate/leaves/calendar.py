"""The leaf calendar: leaf state and leaf share of every wetland on every day, with the days' uncertainty."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
from sklearn.base import BaseEstimator
from sklearn.utils.validation import check_is_fitted

from inundate.common.codes import COVERS, LEAF_STATES, LeafCode
from inundate.common.errors import InputError
from inundate.common.writing import plain
from inundate.leaves.curves import LOGIT_10, logistic
from inundate.leaves.dates import KNOTS, Limbs, build_seasons, check_fixed
from inundate.leaves.fallback import read_warmth
from inundate.leaves.pooling import DECIDUOUS, EVERGREEN, OPEN_COVER, find_scale, pool, tell_cover
from inundate.leaves.views import check_dates, prepare, season_date, season_time

LANDSCAPE = ""
"""The ``wetland_id`` under which the landscape's own dates stand in ``landscape_``."""


class LeafCalendar(BaseEstimator):
    """Leaf dates of every wetland and year from greenness through time.

    A robust saturating double logistic is fitted to each wetland and year and pooled over years and neighbours where
    views are few (see :mod:`inundate.leaves.pooling`); dates are those at which 10, 50 and 90 % of the leaves are
    out or down. Years without views take their dates from air temperature, or else from the other years.

    Deciduous wetlands are pooled among themselves, and open ones, whose plants are herbs, among themselves: their leaf
    share is that of their herbs (how much it hides is told pixel by pixel by :func:`inundate.leaves.view_fraction`).
    Evergreen wetlands are always ``leaf_on``.

    Parameters
    ----------
    dense_greenness, bare_greenness : float, optional
        Greenness of the densest canopies and of leafless ground; read from the views when not given. Needed for an index
        whose scale is not that of NDVI, and where the landscape holds no closed canopy.
    saturation : bool
        Whether greenness saturates with leaf area (Baret & Guyot 1991). False fits the plain double logistic of Beck et
        al. (2006), whose 10, 50 and 90 % then mean greenness, not leaf area.

    Attributes
    ----------
    seasons_ : DataFrame
        wetland_id, year, cover, green_up_start, green_up_mid, green_up_end, leaf_fall_start, leaf_fall_mid,
        leaf_fall_end (dates), sd_days, green_up_sd_days, leaf_fall_sd_days, source (``views``, ``pooled``,
        ``temperature``, ``day_of_year``, ``fixed``, ``none``), n_views. NaT for evergreen wetlands.
    landscape_ : DataFrame
        The same columns for the landscape's deciduous woods, one row a year.
    cover_ : dict of str to str
        open, deciduous or evergreen.
    offset_days_ : int
        Start of the season year after New Year (0, or 182 where the growing season spans New Year).
    scale_ : dict
        Greenness of bare ground, densest canopy and endless canopy in this landscape.

    Examples
    --------
    >>> import pandas as pd
    >>> none = pd.DataFrame({"wetland_id": [], "date": [], "ndvi": []})
    >>> fixed = {"green_up": "04-20", "leaf_on": "05-15", "leaf_fall": "10-05", "leaf_off": "11-10"}
    >>> calendar = LeafCalendar().fit(none, fixed=fixed)
    >>> calendar.states(["W1"], ["2024-07-01"])[0]
    array([2], dtype=uint8)
    """

    def __init__(
        self,
        *,
        dense_greenness: float | None = None,
        bare_greenness: float | None = None,
        saturation: bool = True,
    ) -> None:
        self.dense_greenness = dense_greenness
        self.bare_greenness = bare_greenness
        self.saturation = saturation

    def fit(
        self,
        greenness: pd.DataFrame,
        temperature: pd.DataFrame | None = None,
        fixed: dict[str, str] | None = None,
    ) -> LeafCalendar:
        """Fit leaf dates.

        Parameters
        ----------
        greenness : DataFrame
            wetland_id, date, ndvi [, weight]; several years, any order, gaps allowed; NaN rows are dropped.
        temperature : DataFrame, optional
            date, air_temperature_c, daily.
        fixed : dict, optional
            Any of green_up, leaf_on, leaf_fall, leaf_off: the day (``MM-DD``) on which that state begins. Overrides what
            the greenness says, in every year.

        Returns
        -------
        LeafCalendar

        Raises
        ------
        InputError
            On missing columns, bad dates, greenness outside -1..1, temperature outside -80..60 C, or fixed dates that are
            none or out of order.
        """
        views = prepare(greenness)
        given = check_fixed(fixed, views.offset_days)
        for name, value in (("dense_greenness", self.dense_greenness), ("bare_greenness", self.bare_greenness)):
            if value is not None and not -1.0 <= value <= 1.0:
                message = f"{name}: {value!r} lies outside -1..1; give an index value such as 0.85"
                raise InputError(message)
        scale = find_scale(views, self.bare_greenness, self.dense_greenness, saturation=self.saturation)
        if not scale.dense > scale.bare:
            message = (
                f"dense_greenness {scale.dense:.3f} is not above bare_greenness {scale.bare:.3f}; "
                "give the greenness of the densest canopy and of leafless ground"
            )
            raise InputError(message)
        cover = tell_cover(views, scale)
        warmth = read_warmth(temperature, views.offset_days)
        kinds = {}
        for code in (DECIDUOUS, OPEN_COVER):
            pooled = pool(views, cover == code, scale)
            kinds[code] = (pooled, Limbs.from_pooled(pooled, warmth))
        self.seasons_, self.landscape_ = build_seasons(views, cover, kinds, given)
        self.cover_ = {str(k): COVERS[_COVER_PLACE[int(c)]] for k, c in zip(views.ids, cover, strict=True)}
        self.offset_days_ = views.offset_days
        self.scale_ = {"bare": scale.bare, "dense": scale.dense, "top": scale.top}
        self._index()
        return self

    def states(self, wetland_ids: object, dates: object) -> tuple[np.ndarray, np.ndarray]:
        """Leaf state and leaf share of wetlands on dates.

        Parameters
        ----------
        wetland_ids, dates : array-like, shape (n,) or scalar
            Paired; a scalar serves for all. A wetland that was not in ``fit`` (or ``""``) takes the landscape's dates; a
            year that was not, the mean of those that were.

        Returns
        -------
        codes : ndarray of uint8, shape (n,)
            Position in ``common.codes.LEAF_STATES``.
        leaf_share : ndarray of float32, shape (n,)
            0 bare .. 1 full leaf.

        Raises
        ------
        InputError
            If lengths differ or a date is none.
        """
        check_is_fitted(self, "seasons_")
        names = np.atleast_1d(np.asarray(wetland_ids)).astype(str)
        when = check_dates(dates, "dates")
        if names.size != when.size and 1 not in (names.size, when.size):
            message = (
                f"states: {names.size} wetland_ids against {when.size} dates; give one date a wetland, or one of either"
            )
            raise InputError(message)
        unique, inverse = np.unique(names, return_inverse=True)
        place = np.array([self._place.get(str(u), len(self._place)) for u in unique], np.int64)[inverse.ravel()]
        return self._look_up(place, when)

    def _look_up(self, place: np.ndarray, when: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Code and leaf share of wetlands, by their place among the fitted ones, on dates paired with them."""
        year, day = season_time(when, self.offset_days_)
        row = np.where((year >= self._year0) & (year < self._year0 + self._years), year - self._year0, self._years)
        place, row, day = np.broadcast_arrays(place, row, day)
        knots = self._knots[place, row]
        evergreen = self._evergreen[place]
        codes, share = _read(knots, day)
        codes = np.where(evergreen, np.uint8(LeafCode.LEAF_ON), codes).astype(np.uint8)
        return codes, np.where(evergreen, 1.0, share).astype(np.float32)

    def grid(self, wetland_ids: object, dates: object) -> tuple[np.ndarray, np.ndarray]:
        """Leaf state and leaf share of every wetland on every date, date by date: :meth:`states` for many of both.

        Parameters
        ----------
        wetland_ids : array-like, shape (wetland,)
        dates : array-like of dates, shape (date,)

        Returns
        -------
        codes : ndarray of uint8, shape (date, wetland)
        leaf_share : ndarray of float32, shape (date, wetland)
        """
        check_is_fitted(self, "seasons_")
        names, when = np.asarray(wetland_ids).astype(str), check_dates(dates, "dates")
        place = np.array([self._place.get(str(n), len(self._place)) for n in names], np.int64)
        codes = np.empty((when.size, names.size), np.uint8)
        share = np.empty(codes.shape, np.float32)
        for i in range(when.size):
            codes[i], share[i] = self._look_up(place, when[i : i + 1])
        return codes, share

    def daily(self, dates: object) -> pd.DataFrame:
        """Leaf state and share of every fitted wetland on each date.

        Parameters
        ----------
        dates : array-like of dates, shape (day,)

        Returns
        -------
        DataFrame
            wetland_id, date, leaf_state, leaf_share, sorted by wetland and date.
        """
        check_is_fitted(self, "seasons_")
        when = np.unique(check_dates(dates, "dates"))
        ids = np.array(sorted(self.cover_), dtype=object)
        codes, share = self.states(np.repeat(ids, when.size), np.tile(when, ids.size))
        return pd.DataFrame(
            {
                "wetland_id": np.repeat(ids, when.size),
                "date": np.tile(when, ids.size),
                "leaf_state": np.array(LEAF_STATES, dtype=object)[codes],
                "leaf_share": share,
            }
        )

    def to_json(self) -> str:
        """Return the fitted calendar as JSON text."""
        check_is_fitted(self, "seasons_")
        body: dict[str, Any] = {
            "kind": "leaf_calendar",
            "version": 1,
            "options": self.get_params(),
            "offset_days": self.offset_days_,
            "scale": self.scale_,
            "cover": self.cover_,
        }
        for name, table in (("seasons", self.seasons_), ("landscape", self.landscape_)):
            out = table.copy()
            for column in KNOTS:
                out[column] = out[column].dt.strftime("%Y-%m-%d")
            body[name] = {c: [None if pd.isna(v) else v for v in out[c].tolist()] for c in out.columns}
        return json.dumps(plain(body), sort_keys=True, allow_nan=False)

    @classmethod
    def from_json(cls, text: str) -> LeafCalendar:
        """Rebuild a calendar from :meth:`to_json`.

        Raises
        ------
        InputError
            If the text is not a leaf calendar of version 1.
        """
        try:
            body = json.loads(text)
            if body["kind"] != "leaf_calendar" or body["version"] != 1:
                raise KeyError("kind")  # noqa: EM101 - reported below
            out = cls(**body["options"])
            tables = [pd.DataFrame(body[name]) for name in ("seasons", "landscape")]
        except (ValueError, KeyError, TypeError) as fault:
            message = f"leaf calendar: not JSON written by to_json, version 1 ({fault}); fit the calendar again"
            raise InputError(message) from fault
        for table in tables:
            for column in KNOTS:
                table[column] = pd.to_datetime(table[column]).astype("datetime64[ns]")
            for column in ("sd_days", "green_up_sd_days", "leaf_fall_sd_days"):
                table[column] = table[column].astype(float)
            table["year"] = table["year"].astype(np.int64)
            table["n_views"] = table["n_views"].astype(np.int64)
        out.seasons_, out.landscape_ = (table[list(_COLUMNS)] for table in tables)
        out.cover_, out.scale_ = dict(body["cover"]), dict(body["scale"])
        out.offset_days_ = int(body["offset_days"])
        out._index()
        return out

    def _index(self) -> None:
        """Lay the dates out as days of the season year, (wetland, year, knot), for quick look-up."""
        ids = sorted(self.cover_)
        self._place = {name: i for i, name in enumerate(ids)}
        years = self.landscape_["year"].to_numpy(np.int64)
        self._year0, self._years = int(years.min()), int(years.size)
        table = pd.concat([self.seasons_, self.landscape_], ignore_index=True)
        first = season_date(table["year"].to_numpy(np.int64), np.ones(len(table)), self.offset_days_)
        days = np.column_stack(
            [(table[c].to_numpy("datetime64[ns]") - first) / np.timedelta64(1, "D") + 1.0 for c in KNOTS]
        )
        knots = np.full((len(ids) + 1, self._years + 1, len(KNOTS)), np.nan)
        place = table["wetland_id"].map(self._place).fillna(len(ids)).to_numpy(np.int64)
        knots[place, table["year"].to_numpy(np.int64) - self._year0] = days
        seen = np.isfinite(knots[:, :-1]).sum(axis=1)
        knots[:, -1] = np.nansum(knots[:, :-1], axis=1) / np.where(seen, seen, np.nan)
        self._knots = np.where(np.isnan(knots), knots[-1:, :, :], knots)
        self._evergreen = np.array([self.cover_[i] == "evergreen" for i in ids] + [False])


_COLUMNS = (
    "wetland_id",
    "year",
    "cover",
    *KNOTS,
    "sd_days",
    "green_up_sd_days",
    "leaf_fall_sd_days",
    "source",
    "n_views",
)
_COVER_PLACE = {OPEN_COVER: 0, DECIDUOUS: 1, EVERGREEN: 2}


def _read(knots: np.ndarray, day: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Code and leaf share from six knots (n, 6) and days (n,): straight lines between knots on the logit scale."""
    up = _limb(knots[:, :3], day)
    down = _limb(knots[:, 3:], day)
    codes = np.full(day.shape, LeafCode.LEAF_OFF, np.uint8)
    codes[(day >= knots[:, 0]) & (day < knots[:, 2])] = LeafCode.GREEN_UP
    codes[(day >= knots[:, 2]) & (day < knots[:, 3])] = LeafCode.LEAF_ON
    codes[(day >= knots[:, 3]) & (day < knots[:, 5])] = LeafCode.LEAF_FALL
    return codes, up * (1.0 - down)


def _limb(knots: np.ndarray, day: np.ndarray) -> np.ndarray:
    before = LOGIT_10 / np.maximum(knots[:, 1] - knots[:, 0], 0.5)
    after = LOGIT_10 / np.maximum(knots[:, 2] - knots[:, 1], 0.5)
    lag = day - knots[:, 1]
    return logistic(lag * np.where(lag < 0, before, after))


__all__ = ["LANDSCAPE", "LeafCalendar"]
