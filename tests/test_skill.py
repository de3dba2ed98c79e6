"""Scores of a delivery equal an independent recomputation from its tables; trend, bad and missing input."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from inundate.products.report import ReportTables
from inundate.skill import (
    SkillInputs,
    headline,
    interval_measures,
    pair_with_stage,
    score_all,
    size_class,
    unusual,
    wet_dry_measures,
)
from tests.report_world import make_card, make_heldout, make_stage, make_tables

Z = 1.6448536269514722


@pytest.fixture(scope="module")
def tables() -> ReportTables:
    return make_tables([f"W{i}" for i in range(8)], n_logged=5, pictures=0)


@pytest.fixture(scope="module")
def stage(tables: ReportTables) -> pd.DataFrame:
    return make_stage(tables.daily, tables.shapes, [f"W{i}" for i in range(5)])


def by_hand_pairs(tables: ReportTables, stage: pd.DataFrame) -> list[dict]:
    """Days with a used view and stage, row by row."""
    known = {(r.wetland_id, pd.Timestamp(r.date).date()): r for r in stage.itertuples()}
    largest = dict(zip(tables.shapes["wetland_id"], tables.shapes["area_max_m2"], strict=True))
    out = []
    for view in tables.observed.itertuples():
        day = known.get((view.wetland_id, view.datetime.date()))
        if view.used and day is not None:
            if day.censored:
                wet = False if day.stage_m <= 0 else None
            else:
                wet = True if day.stage_m > 2 * day.stage_sd_m else False if day.stage_m < -2 * day.stage_sd_m else None
            out.append({"leaf": view.leaf_state, "wet": wet, "seen": view.area_m2 > 0.02 * largest[view.wetland_id]})
    return out


def test_wet_dry_counts_equal_counting_by_hand(tables: ReportTables, stage: pd.DataFrame) -> None:
    rows = by_hand_pairs(tables, stage)
    found = tables.skill["wet_dry"]
    assert found["unsure_days"] == sum(r["wet"] is None for r in rows)
    groups = {"all": rows, **{s: [r for r in rows if r["leaf"] == s] for s in found["by_leaf_state"]}}
    for name, mine in groups.items():
        score = found["all"] if name == "all" else found["by_leaf_state"][name]
        sure = [r for r in mine if r["wet"] is not None]
        assert score["n"] == len(sure)
        assert score["both_wet"] == sum(r["wet"] and r["seen"] for r in sure)
        assert score["only_seen"] == sum(r["seen"] and not r["wet"] for r in sure)
        assert score["only_known"] == sum(r["wet"] and not r["seen"] for r in sure)
        assert score["accuracy"] == pytest.approx(np.mean([r["wet"] == r["seen"] for r in sure]))
    assert found["all"]["both_dry"] + found["all"]["only_seen"] > 0, "the invented season has dry days too"


def test_filled_scores_equal_plain_formulas(tables: ReportTables) -> None:
    for kind in ("views", "logger"):
        rows = tables.heldout[tables.heldout["kind"] == kind].merge(
            tables.shapes[["wetland_id", "area_max_m2", "cover"]], on="wetland_id"
        )
        half = Z * rows["known_sd_m2"]
        low = rows["area_m2"] - np.sqrt((rows["area_m2"] - rows["area_lo_m2"]) ** 2 + half**2)
        high = rows["area_m2"] + np.sqrt((rows["area_hi_m2"] - rows["area_m2"]) ** 2 + half**2)
        error = (rows["area_m2"] - rows["known_m2"]) / rows["area_max_m2"]
        below, above = np.maximum(low - rows["known_m2"], 0), np.maximum(rows["known_m2"] - high, 0)
        found = tables.skill["filled"][kind]
        assert found["all"]["n"] == len(rows)
        assert found["all"]["rmse"] == pytest.approx(np.sqrt((error**2).mean()))
        assert found["all"]["bias"] == pytest.approx(error.mean())
        assert found["all"]["coverage"] == pytest.approx(((below == 0) & (above == 0)).mean())
        score = (high - low + 20 * (below + above)) / rows["area_max_m2"]
        assert found["all"]["interval_score"] == pytest.approx(score.mean())
        for group, column in (("by_leaf_state", "leaf_state"), ("by_cover", "cover"), ("by_wetland", "wetland_id")):
            expected = np.sqrt((error**2).groupby(rows[column]).mean())
            assert {k: v["rmse"] for k, v in found[group].items()} == pytest.approx(expected.to_dict())


def test_rank_correlation_and_relation_equal_scipy(tables: ReportTables, stage: pd.DataFrame) -> None:
    pairs = pair_with_stage(tables.observed, stage, tables.shapes)
    sure = pairs[~pairs["censored"]]
    rho = {w: g["area_m2"].rank().corr(g["stage_m"].rank()) for w, g in sure.groupby("wetland_id") if len(g) >= 5}
    assert tables.skill["rank"]["median_rho"] == pytest.approx(np.median(list(rho.values())))
    share = (tables.relations["rmse_m2"] / tables.shapes["area_max_m2"].to_numpy()).dropna()
    assert tables.skill["relation"]["median_rmse_share"] == pytest.approx(share.median())
    assert tables.skill["relation"]["with_pairs"] == 5


def test_row_order_does_not_matter(tables: ReportTables, stage: pd.DataFrame) -> None:
    shake = lambda t: t.sample(frac=1.0, random_state=3).reset_index(drop=True)  # noqa: E731
    choices = pd.DataFrame({"wetland_id": ["W0"], "family": ["power"]})
    parts = (
        tables.shapes,
        tables.observed,
        tables.daily,
        stage,
        tables.relations,
        choices,
        make_heldout(tables.observed, tables.daily),
    )
    one = headline(score_all(SkillInputs(*parts, None, make_card())))
    two = headline(
        score_all(SkillInputs(parts[0], *(shake(t) for t in parts[1:5]), choices, shake(parts[6]), None, make_card()))
    )
    assert one.keys() == two.keys()
    assert len(one) == 9, "with labels, loggers and hidden values every followed score is defined"
    for name, value in one.items():
        assert two[name] == pytest.approx(value, rel=1e-9), name


def test_without_field_data_scores_say_so(tables: ReportTables) -> None:
    empty = tables.observed.iloc[:0]
    choices = pd.DataFrame({"wetland_id": [], "family": []})
    found = score_all(SkillInputs(tables.shapes, empty, tables.daily, None, tables.relations.iloc[:0], choices))
    assert found["wet_dry"] is None
    assert found["rank"] is None
    assert found["walked"] is None
    assert found["filled"]["views"]["all"] == {"n": 0}
    assert headline(found) == {}
    assert set(found["by_wetland"]) == set(tables.shapes["wetland_id"])


def test_walked_extents_are_held_against_the_day(tables: ReportTables) -> None:
    day = tables.daily.iloc[[3, 500]]
    walked = pd.DataFrame(
        {"wetland_id": day["wetland_id"], "date": day["date"], "area_m2": day["area_m2"] * 1.1, "sd_m2": 1.0}
    )
    choices = pd.DataFrame({"wetland_id": [], "family": []})
    found = score_all(
        SkillInputs(tables.shapes, tables.observed, tables.daily, None, tables.relations, choices, None, walked)
    )["walked"]
    largest = day["wetland_id"].map(tables.shapes.set_index("wetland_id")["area_max_m2"])
    assert found["all"]["n"] == 2
    assert found["all"]["bias"] == pytest.approx((-0.1 * day["area_m2"] / largest).mean())
    assert [r["date"] for r in found["rows"]] == [f"{d:%Y-%m-%d}" for d in day["date"]]


def test_unusual_months_are_told_and_usual_ones_are_not() -> None:
    trend = [(f"2031-{m:02d}", "agreement", 0.9 + 0.005 * (m % 3)) for m in range(1, 9)]
    assert unusual({"agreement": 0.91}, trend, "2031-09") == []
    told = unusual({"agreement": 0.6}, trend, "2031-09")
    assert len(told) == 1
    assert told[0].startswith("agreement is 0.600 this month")
    assert unusual({"agreement": 0.6}, trend, "2031-04") == [], "three earlier months are too few"
    assert unusual({"agreement": 0.6}, [("2031-09", "agreement", 0.9)] * 9, "2031-09") == [], "own month left out"


def test_size_classes_hold_their_lower_edge() -> None:
    assert size_class(np.array([2999.9, 3000.0, 9999.9, 10000.0])).tolist() == [
        "under 0.3 ha",
        "0.3 to 1 ha",
        "0.3 to 1 ha",
        "1 ha and more",
    ]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.booleans(), st.booleans()), min_size=1, max_size=60))
def test_wet_dry_measures_keep_their_bounds(rows: list[tuple[bool, bool]]) -> None:
    known, seen = (np.array(v) for v in zip(*rows, strict=True))
    found = wet_dry_measures(known, seen)
    assert found["both_wet"] + found["both_dry"] + found["only_seen"] + found["only_known"] == found["n"] == len(rows)
    for name in ("accuracy", "omission", "commission"):
        assert found[name] is None or 0 <= found[name] <= 1
    assert found["mcc"] is None or -1 - 1e-12 <= found["mcc"] <= 1 + 1e-12


@settings(max_examples=60, deadline=None)
@given(st.floats(-10, 10), st.floats(0, 10), st.floats(-30, 30))
def test_interval_score_is_never_under_the_width(low: float, width: float, value: float) -> None:
    found = interval_measures(np.array([low]), np.array([low + width]), np.array([value]), np.ones(1))
    assert found["interval_score"] >= found["width"] - 1e-9
    if found["coverage"] == 1.0:
        assert found["interval_score"] == pytest.approx(found["width"], abs=1e-4)
