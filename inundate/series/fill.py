"""Gap-filled daily extent of every wetland."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd

from inundate.common.codes import LEAF_STATES
from inundate.series.calibrate import (
    WIDTH_90,
    blended_evidence,
    choose_weights,
    fit_widths,
    size_third,
    stage_width,
)
from inundate.series.drivers import build_drivers
from inundate.series.fitting import Setup, make_setup, pool_items
from inundate.series.heldout import Evidence, hide_blocks, hide_loggers, join, relation_share
from inundate.series.inputs import Events, FillOptions, SeriesInputs, build_panel
from inundate.series.maps import LevelMaps, build_maps, share_at, slope_at
from inundate.series.model import (
    Fitted,
    Levels,
    available_kinds,
    blend,
    fit_kind,
    learn_kind,
    left_out_scores,
    smooth_levels,
)
from inundate.series.result import Joint, SeriesResult, daily_table, lasting_left
from inundate.series.smooth import area_moments
from inundate.series.worth import correct_leafy, scene_factors

OBSERVED, STAGE, NEIGHBOURS, SEASON = range(4)


def fill_series(inputs: SeriesInputs, *, options: FillOptions | None = None, seed: int = 0) -> SeriesResult:
    """Fill the daily extent of every wetland, with 90 % intervals and the reason for each choice.

    A wetland's level is what its predictor says plus a slowly varying departure, observed by views (through the bounded
    level-area map, with error) and by its own logger. Predictors are a water balance and a linear one on antecedent rain
    minus evapotranspiration, season and the region's loggers; parameters are pooled across wetlands by size and cover.
    They are blended, apart for bare and leafy days, and intervals calibrated, by hiding whole seasons of views and whole loggers.

    Parameters
    ----------
    inputs : SeriesInputs
    options : FillOptions or None
    seed : int
        Same seed, same result, whatever the order of rows or the number of workers.

    Returns
    -------
    SeriesResult

    Raises
    ------
    InputError
        If a table lacks a column, an id occurs twice, an area is not positive or the dates are reversed.
    """
    options = options or FillOptions()
    panel = build_panel(inputs, options)
    setup = make_setup(panel, build_drivers(panel), options, seed)
    logged = {panel.ids[i] for i in np.flatnonzero(setup.drivers.fold > 0)}
    blind = _blind_maps(setup, inputs, logged)
    setup, views, begun = weigh_views(setup)
    fits = [fit_kind(setup, k, views, panel.stage, b) for k, b in zip(available_kinds(setup), begun, strict=True)]
    parts = [
        hide_loggers(setup, blind, fits, views, panel.stage),
        hide_blocks(setup, fits, views, panel.stage),
    ]
    found = [p for p in parts if p is not None and p.day.size]
    evidence = join(found) if found else None
    weights, scores = choose_weights(evidence, len(panel.ids), len(fits))
    everyone = range(len(panel.ids))
    levels = blend(
        [smooth_levels(setup, f, everyone, views, panel.stage, f.posterior) for f in fits], weights, panel.leaf
    )
    wide = _widen(setup, levels, evidence, weights, views)
    heldout = heldout_table(setup, blind, evidence, weights)
    reasons = _reasons(setup, fits, weights, scores, evidence)
    made = _assemble(
        setup,
        levels,
        wide,
        views,
        (reasons, _joint(evidence, weights, fits)),
        (options.lasting, inputs.lasting_part or {}),
    )
    return replace(made, heldout=heldout)


def _blind_maps(setup: Setup, inputs: SeriesInputs, logged: set[str]) -> LevelMaps:
    """Return level maps in which wetlands with logger are treated as if they had none."""

    class Others:
        def predict(self, wetland_id: str, stage_m: np.ndarray) -> pd.DataFrame:
            if inputs.relations is None or wetland_id in logged:
                raise KeyError(wetland_id)
            return inputs.relations.predict(wetland_id, stage_m)

    return build_maps(setup.panel.ids, setup.panel.area_max_m2, Others(), inputs.hypsometry)


def weigh_views(setup: Setup) -> tuple[Setup, Events, list[Fitted | None]]:
    """Return views with the errors they proved to have, and the first predictor learned from leaf-off views on the way.

    The setup returned knows the share of stray views.
    """
    kinds, stage, views = available_kinds(setup), setup.panel.stage, setup.panel.views
    begun: list[Fitted | None] = [None] * len(kinds)
    bare = views.keep(views.kind == 0)
    if bare.day.size:
        first = learn_kind(setup, kinds[0], bare, stage)
        scores = left_out_scores(setup, first, pool_items(setup), bare, stage)
        factor, stray = scene_factors(bare, scores)
        sd = views.sd.copy()
        sd[views.kind == 0] = bare.sd * factor
        views = views.with_sd(sd)
        setup = replace(setup, options=replace(setup.options, outlier_share=stray))
        begun[0] = first
    sure = stage.certain()
    return setup, correct_leafy(views, sure, relation_share(setup, sure)), begun


def _stage_days(stage: Events, days: int) -> np.ndarray:
    out = np.zeros((stage.start.size - 1, days), bool)
    out[stage.owner, stage.day] = True
    return out


def _widen(setup: Setup, levels: Levels, evidence: Evidence | None, weights: np.ndarray, views: Events) -> np.ndarray:
    """Return calibrated standard deviations of levels (wetland, day)."""
    panel = setup.panel
    third = size_third(panel.area_max_m2)
    factor = fit_widths(evidence, weights, third)
    sd = levels.sd * factor[panel.leaf, third[:, None]].astype(np.float32)
    own = _stage_days(panel.stage.certain(), len(panel.dates))
    relation = stage_width(setup, views, panel.stage.certain())
    for i in np.flatnonzero(own.any(axis=1)):
        table, full = setup.maps.share[i], float(setup.maps.full_m[i])
        days = np.flatnonzero(own[i])
        level = levels.mean[i, days].astype(float)
        nodes = np.linspace(0, full, table.size)
        error = np.interp(level, nodes, setup.maps.sd[i]) * relation
        slope = np.array([slope_at(x, table, full) for x in level])
        extra = np.where(slope > 0, error / np.maximum(slope, 0.02 / full), 0.0)
        sd[i, days] = np.sqrt(levels.sd[i, days] ** 2 + extra**2)
    return sd


def _joint(evidence: Evidence | None, weights: np.ndarray, fits: Sequence[Fitted]) -> Joint:
    """Measure how held-out errors hang together, across wetlands on one day and in time."""
    memory = float(np.median(np.concatenate([f.departure.memory for f in fits])))
    if evidence is None:
        return Joint(memory, 0.5)
    mean, sd = blended_evidence(evidence, weights)
    z = np.clip((0.5 * (np.clip(evidence.low, mean, None) + np.clip(evidence.high, None, mean)) - mean) / sd, -3, 3)
    frame = (
        pd.DataFrame({"w": evidence.wetland, "d": evidence.day // 5, "z": z})
        .groupby(["w", "d"], as_index=False)["z"]
        .mean()
    )
    by_day = frame.groupby("d")["z"].agg(["sum", "count", lambda x: (x**2).sum()])
    total, count, square = (by_day.iloc[:, k].to_numpy(float) for k in range(3))
    many = count > 1
    if many.sum() < 3 or square.sum() <= 0:
        return Joint(memory, 0.5)
    cross = (total[many] ** 2 - square[many]).sum() / (count[many] * (count[many] - 1)).sum()
    shared = float(np.clip(cross / (square.sum() / count.sum()), 0, 0.9))
    later = frame.assign(d=frame["d"] + 2).merge(frame, on=["w", "d"], suffixes=("", "_later"))
    if len(later) >= 50:
        level = np.clip((later["z"] * later["z_later"]).mean() / (frame["z"] ** 2).mean(), 0.05, 0.95)
        memory = float(np.clip(-10 / np.log(level), 3, 200))
    return Joint(memory, shared)


def _basis(setup: Setup, levels: Levels, views: Events) -> np.ndarray:
    """Return basis codes (wetland, day): a view whose sd is above 0.15 of the largest extent does not count."""
    panel = setup.panel
    regional = setup.drivers.has_weather or bool((setup.drivers.fold > 0).any())
    out = np.full(levels.mean.shape, NEIGHBOURS if regional else SEASON, np.uint8)
    stage = _stage_days(panel.stage.certain(), len(panel.dates))
    out[stage] = STAGE
    out[views.owner, views.day] = np.where(views.sd <= 0.15, OBSERVED, out[views.owner, views.day])
    return out


def _reasons(
    setup: Setup, fits: Sequence[Fitted], weights: np.ndarray, scores: np.ndarray, evidence: Evidence | None
) -> pd.DataFrame:
    panel = setup.panel
    logged = np.diff(panel.stage.start)
    frame = pd.DataFrame({"wetland_id": panel.ids, "area_source": panel.maps.source})
    names = [f.kind for f in fits]
    least = weights.min(axis=0)
    lead = np.argmax(least, axis=1)
    frame["predictor"] = [names[k] if least[i, k] >= 0.999 else "blend" for i, k in enumerate(lead)]
    for k, fit in enumerate(fits):
        key = fit.kind.replace(" ", "_")
        frame[f"weight_{key}_leaf_off"] = weights[0, :, k]
        frame[f"weight_{key}_leaf_on"] = weights[1, :, k]
        frame[f"score_{key}"] = scores[:, k]
    usual = weights.mean(axis=0)
    frame["departure_sd_m"] = sum(usual[:, k] * f.departure.sd for k, f in enumerate(fits)) * setup.maps.full_m
    frame["departure_memory_days"] = sum(usual[:, k] * f.departure.memory for k, f in enumerate(fits))
    frame["n_views"] = np.diff(panel.views.start)
    frame["n_stage_days"] = logged
    words = []
    for i in range(len(panel.ids)):
        lean = "; ".join(
            f"{name}: " + ", ".join(f"{names[k]} {w[i, k]:.2f}" for k in range(len(names)) if w[i, k] > 0)
            for name, w in zip(("leaves off", "leaves on"), weights, strict=True)
        )
        if evidence is None:
            tail = "nothing could be held out, so predictors count alike"
        elif np.isfinite(scores[i]).any():
            tail = (
                "held-out RMSE "
                + ", ".join(f"{names[k]} {scores[i, k]:.3f}" for k in range(len(names)))
                + " of the largest extent"
            )
        else:
            tail = "not scored itself, weights from the other wetlands"
        own = f"own stage on {logged[i]} days; else " if logged[i] else ""
        words.append(f"{own}{lean}: {tail}")
    frame["why"] = words
    return frame


def _assemble(
    setup: Setup,
    levels: Levels,
    sd: np.ndarray,
    views: Events,
    rest: tuple[pd.DataFrame, Joint],
    lasting: tuple[tuple[float, float], dict[str, float]],
) -> SeriesResult:
    panel = setup.panel
    count, days = levels.mean.shape
    areas = np.empty((3, count, days), np.float32)
    one = np.empty((3, days))
    for i in range(count):
        area_moments(
            levels.mean[i].astype(float),
            sd[i].astype(float),
            setup.maps.share[i],
            float(setup.maps.full_m[i]),
            one[0],
            one[1],
            one[2],
            WIDTH_90,
        )
        widen_lasting(one, lasting_left(*lasting, panel.ids[i]))
        areas[:, i] = np.minimum(one * panel.area_max_m2[i], panel.area_max_m2[i])
    basis = _basis(setup, levels, views)
    daily = daily_table(panel.ids, panel.dates, areas, basis, panel.leaf)
    return SeriesResult(
        daily,
        rest[0],
        panel.lacked,
        panel.ids,
        panel.dates,
        levels.mean,
        sd,
        setup.maps,
        panel.area_max_m2,
        rest[1],
        setup.seed,
        *lasting,
    )


def widen_lasting(share: np.ndarray, lasting: tuple[float, float]) -> None:
    """Widen 90 % intervals by errors that last in a wetland, in place.

    Parameters
    ----------
    share : ndarray of float64, shape (3, day)
        Middle, low and high share of the largest extent, 0..1. Days known to be dry (all three 0) stay so.
    lasting : (float, float)
        See ``FillOptions.lasting``.
    """
    middle, low, high = share
    reach = WIDTH_90 * np.hypot(middle * lasting[0], (1.0 - middle) * lasting[1])
    reach = np.where(high > 1e-9, reach, 0.0)
    share[1] = np.clip(middle - np.hypot(middle - low, reach), 0.0, middle)
    share[2] = np.clip(middle + np.hypot(high - middle, reach), middle, 1.0)


def heldout_table(
    setup: Setup, blind: LevelMaps, evidence: Evidence | None, weights: np.ndarray
) -> pd.DataFrame | None:
    """Return what was hidden beside what was predicted, in m2, with the calibrated 90 % interval.

    Wetlands whose logger was hidden are read through the maps that they had without it (``blind``).
    """
    if evidence is None or not evidence.day.size:
        return None
    panel = setup.panel
    mean, sd = blended_evidence(evidence, weights)
    third = size_third(panel.area_max_m2)
    sd = sd * fit_widths(evidence, weights, third)[evidence.leaf, third[evidence.wetland]]
    largest = panel.area_max_m2[evidence.wetland]
    low, middle, high = (
        np.array(
            [
                share_at(
                    level,
                    (blind if hidden else setup.maps).share[i],
                    float((blind if hidden else setup.maps).full_m[i]),
                )
                for level, i, hidden in zip(
                    mean + k * WIDTH_90 * sd, evidence.wetland, evidence.from_stage, strict=True
                )
            ]
        )
        for k in (-1.0, 0.0, 1.0)
    )
    out = pd.DataFrame(
        {
            "wetland_id": np.array(panel.ids, object)[evidence.wetland].astype(str),
            "date": panel.dates[evidence.day],
            "kind": np.where(evidence.from_stage, "logger", "views"),
            "leaf_state": np.array(LEAF_STATES, object)[evidence.leaf].astype(str),
            "known_m2": evidence.truth * largest,
            "known_sd_m2": evidence.truth_sd * largest,
            "area_m2": middle * largest,
            "area_lo_m2": low * largest,
            "area_hi_m2": high * largest,
        }
    )
    return out.sort_values(["wetland_id", "date", "kind"], kind="stable", ignore_index=True)
