"""The fitted set of relations: prediction, the tables that go out, and keeping."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from inundate.common.errors import InputError, Refusal
from inundate.common.writing import plain
from inundate.relation import reading
from inundate.relation.curves import Curves
from inundate.relation.families import ELEVATION, FAMILIES, FAMILY_SIZE, N_PARAM, POWER, SPLINE

_STEPS_MOST = 5000
RELATION_COLUMNS = (
    "wetland_id",
    "period",
    "family",
    "parameters",
    "n_pairs",
    "stage_min_m",
    "stage_max_m",
    "rmse_m2",
    "pooled",
    "valid_from",
    "valid_to",
    "note",
)


def named_parameters(family: int, theta: np.ndarray, area_max_m2: float) -> dict[str, float | list[float]]:
    """Return a curve's parameters under published names: s_m2 and p of the power law, offsets and knots in plain units."""
    if family == ELEVATION:
        return {
            "vertical_offset_m": float(theta[0]),
            "roughness_m": float(theta[1]),
            "floor_power": float(np.exp(theta[2])),
            "area_max_m2": area_max_m2,
        }
    full, b = float(np.exp(theta[0])), float(np.exp(theta[1]))
    out: dict[str, float | list[float]] = {
        "s_m2": area_max_m2 / full**b,
        "p": 2.0 / b,
        "stage_full_m": full,
        "area_max_m2": area_max_m2,
    }
    if family > POWER:
        out["stage_offset_m"] = float(theta[2])
    if family == SPLINE:
        rise = np.exp(theta[3:]) / (N_PARAM - 3)
        out["knot_shares"] = [float(v) for v in np.concatenate([[0.0], np.cumsum(rise)])]
    return out


class RelationSet:
    """Stage-area relations of all wetlands.

    Attributes
    ----------
    relations : DataFrame
        One row a wetland and period, columns of relations.parquet (and period, note): ``rmse_m2`` is the root mean square of
        held-out date blocks against observed extents (NaN with fewer than 3 pairs); ``pooled`` is true where the pairs
        decide less than half of the chosen curve's parameters.
    choices : DataFrame
        Held-out score of every family: wetland_id, period, family, n_heldout, heldout_rmse_m2, heldout_score, weight, chosen.
    shifts : DataFrame
        Changes found: wetland_id, period, date, date_lo, date_hi, kind, size_m, share, confidence, n_before, n_after, words.
        Never applied by itself: confirm one by splitting the period in the registry.
    hysteresis : DataFrame
        wetland_id, period, size_m, confidence, words: extents that differ between rising and falling water.
    refused : list of Refusal
        Pairs and wetlands that were set aside, and why.
    """

    def __init__(self, curves: Curves, tables: dict[str, pd.DataFrame], refused: Sequence[Refusal] = ()) -> None:
        self._curves = curves
        self.relations = tables["relations"]
        self.choices = tables["choices"]
        self.shifts = tables["shifts"]
        self.hysteresis = tables["hysteresis"]
        self.refused = list(refused)
        self._rows = {str(key): rows.to_numpy() for key, rows in curves.table.groupby("wetland_id")["unit"]}
        self._starts = curves.table["valid_from"].to_numpy("datetime64[ns]")

    @property
    def wetland_ids(self) -> list[str]:
        """Wetlands that have a relation, sorted."""
        return sorted(self._rows)

    @property
    def band_scale(self) -> tuple[float, float, float]:
        """Factor by which held-out pairs widened the bands inside and outside the stages seen, and without pairs."""
        return self._curves.scale

    def predict(self, wetland_id: str, stage_m: np.ndarray, dates: np.ndarray | None = None) -> pd.DataFrame:
        """Predict extent from stage for one wetland.

        Parameters
        ----------
        wetland_id : str
        stage_m : array_like, shape (row,)
            Stage above the wetland's lowest ground, m; NaN gives NaN.
        dates : array_like of datetime64, shape (row,), optional
            Choose the relation of the confirmed period each date lies in; without it the latest period's serves.

        Returns
        -------
        DataFrame
            stage_m, area_m2, area_lo_m2, area_hi_m2, area_sd_m2, in the order given: 0 <= lo <= area <= hi <= largest.

        Raises
        ------
        InputError
            When the wetland has no relation.
        """
        stage = np.atleast_1d(np.asarray(stage_m, float))
        unit = self._unit_of(np.full(stage.size, str(wetland_id), object), dates)
        return self._curves.read(unit, stage)

    def predict_many(
        self, wetland_ids: Sequence[str] | np.ndarray, stage_m: np.ndarray, dates: np.ndarray | None = None
    ) -> pd.DataFrame:
        """Predict extent for rows of many wetlands at once; columns of :meth:`predict` with wetland_id before them.

        Parameters are arrays of one length; rows keep their order. Raises as :meth:`predict`.
        """
        names = np.asarray(wetland_ids, object).astype(str).astype(object)
        out = self._curves.read(self._unit_of(names, dates), np.asarray(stage_m, float))
        out.insert(0, "wetland_id", names)
        return out

    def draws(self, wetland_id: str, stage_m: np.ndarray, n: int = 100, dates: np.ndarray | None = None) -> np.ndarray:
        """Return whole drawn curves read at the stages, m2, shape (draw, row): errors that days of a wetland share.

        Parameters
        ----------
        wetland_id, stage_m, dates
            As in :meth:`predict`.
        n : int
            Number of draws (they repeat beyond the number of curves kept).
        """
        stage = np.atleast_1d(np.asarray(stage_m, float))
        unit = self._unit_of(np.full(stage.size, str(wetland_id), object), dates)
        out = np.empty((n, stage.size))
        for one in np.unique(unit):
            out[:, unit == one] = self._curves.sample(int(one), stage[unit == one], n)
        return out

    def _unit_of(self, names: np.ndarray, dates: np.ndarray | None) -> np.ndarray:
        when = None if dates is None else np.asarray(pd.to_datetime(pd.Series(np.asarray(dates))), "datetime64[ns]")
        codes, unique = pd.factorize(names)
        out = np.empty(names.size, np.int64)
        for k, key in enumerate(unique):
            if key not in self._rows:
                message = f"wetland {key!r}: it has no relation; ask for one of those in `relations`, or give it pairs or elevation"
                raise InputError(message)
            rows = self._rows[key]
            mine = codes == k
            out[mine] = rows[-1]
            if when is not None and rows.size > 1:
                out[mine] = rows[np.searchsorted(self._starts[rows[1:]], when[mine], side="right")]
        return out

    def table(self, step_m: float = 0.01) -> pd.DataFrame:
        """Return every relation in steps of stage, from dry to spill.

        Parameters
        ----------
        step_m : float
            Step of stage, m.

        Returns
        -------
        DataFrame
            wetland_id, stage_m, area_m2, area_lo_m2, area_hi_m2, volume_m3, volume_lo_m3, volume_hi_m3, seen (stage within
            the pairs' range), period; sorted by wetland, period and stage. Volume is the integral of area over stage.

        Raises
        ------
        InputError
            When the step is not positive, or so fine that a wetland would need over 5,000 rows.
        """
        if not step_m > 0:
            message = f"step_m: got {step_m!r}; it must be above 0 m; 0.01 is usual"
            raise InputError(message)
        c = self._curves
        end = np.minimum(
            np.maximum(c.top_stage() + step_m, c.table["stage_max_m"].fillna(0.0).to_numpy(float)), c.grid[:, -1]
        )
        count = np.ceil(end / step_m - 1e-9).astype(np.int64) + 1
        if count.size and count.max() > _STEPS_MOST:
            message = f"step_m: {step_m} m gives {count.max()} rows for one wetland; at most {_STEPS_MOST}; take a coarser step"
            raise InputError(message)
        unit = np.repeat(np.arange(c.size), count)
        stage = (np.arange(unit.size) - np.repeat(np.cumsum(count) - count, count)) * step_m
        out = c.read(unit, stage).drop(columns="area_sd_m2")
        size = c.table["area_max_m2"].to_numpy(float)[unit]
        side = reading.band_at(c.grid, c.values[:, 3:], unit, stage)
        volume = reading.volume_of_rows(c.family, c.best, unit, c.ground, stage) * size
        base = side[:, 0] * size
        out["volume_m3"] = volume
        out["volume_lo_m3"] = np.clip(volume - np.maximum(base - side[:, 1] * size, 0.0), 0.0, None)
        out["volume_hi_m3"] = volume + np.maximum(side[:, 2] * size - base, 0.0)
        low, high = c.table["stage_min_m"].to_numpy(float)[unit], c.table["stage_max_m"].to_numpy(float)[unit]
        out["seen"] = (stage >= low) & (stage <= high)
        out["period"] = c.table["period"].to_numpy(object)[unit]
        out.insert(0, "wetland_id", c.table["wetland_id"].to_numpy(object)[unit])
        return out

    def to_json(self) -> str:
        """Return the set as JSON text; :meth:`from_json` gives the same predictions back."""
        c = self._curves
        kept = {
            "format": "inundate relations 1",
            "units": _records(c.table),
            "theta": {FAMILIES[f]: v[:, : FAMILY_SIZE[f]].tolist() for f, v in c.theta.items()},
            "cov": {FAMILIES[f]: v[:, : FAMILY_SIZE[f], : FAMILY_SIZE[f]].tolist() for f, v in c.cov.items()},
            "family": c.family.tolist(),
            "weights": c.weights.tolist(),
            "datum_sd_m": c.datum_sd_m.tolist(),
            "reference_m": c.reference_m.tolist(),
            "scale": list(c.scale),
            "seed": c.seed,
            "n_draws": c.n_draws,
            "level": c.level,
            "hypsometry": {k: [s.tolist(), a.tolist()] for k, (s, a) in c.hypsometry.items()},
            "refused": [one.as_dict() for one in self.refused],
        }
        for name in ("relations", "choices", "shifts", "hysteresis"):
            kept[name] = _records(getattr(self, name))
        return json.dumps(plain(kept), allow_nan=False)

    @classmethod
    def from_json(cls, text: str) -> RelationSet:
        """Rebuild a set from :meth:`to_json`.

        Raises
        ------
        InputError
            When the text is not such a set.
        """
        try:
            kept = json.loads(text)
        except json.JSONDecodeError as error:
            message = f"relations file: not JSON ({error}); it must be what `to_json` wrote; fit again"
            raise InputError(message) from error
        if not isinstance(kept, dict) or kept.get("format") != "inundate relations 1":
            message = "relations file: no 'format': 'inundate relations 1'; it must be what `to_json` wrote; fit again"
            raise InputError(message)
        table = _table(kept["units"])
        n = len(table)
        theta, cov = {}, {}
        for name, rows in kept["theta"].items():
            f = FAMILIES.index(name)
            size = int(FAMILY_SIZE[f])
            theta[f] = np.zeros((n, N_PARAM))
            theta[f][:, :size] = np.array(rows).reshape(n, size)
            cov[f] = np.zeros((n, N_PARAM, N_PARAM))
            cov[f][:, :size, :size] = np.array(kept["cov"][name]).reshape(n, size, size)
        curves = Curves(
            table,
            theta,
            cov,
            np.array(kept["family"], np.int64),
            np.array(kept["weights"]).reshape(n, len(FAMILIES)),
            np.array(kept["datum_sd_m"], float),
            np.array(kept["reference_m"], float),
            (kept["scale"][0], kept["scale"][1], kept["scale"][2]),
            kept["seed"],
            kept["n_draws"],
            kept["level"],
            {k: (np.array(s), np.array(a)) for k, (s, a) in kept["hypsometry"].items()},
        )
        names = ("relations", "choices", "shifts", "hysteresis")
        return cls(curves, {name: _table(kept[name]) for name in names}, [Refusal(**one) for one in kept["refused"]])


def _records(table: pd.DataFrame) -> dict[str, Any]:
    return {
        "columns": {name: str(kind) for name, kind in table.dtypes.items()},
        "values": {name: [plain(v) for v in table[name]] for name in table.columns},
    }


def _table(kept: dict[str, Any]) -> pd.DataFrame:
    return pd.DataFrame(
        {
            name: pd.Series(
                pd.to_datetime(kept["values"][name]) if kind.startswith("datetime") else kept["values"][name],
                dtype=kind,
            )
            for name, kind in kept["columns"].items()
        }
    )
