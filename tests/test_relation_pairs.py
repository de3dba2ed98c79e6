"""Joining extents with stage."""

import numpy as np
import pandas as pd
import pytest

from inundate.common.errors import InputError
from inundate.relation import best_pairs, make_pairs


def extents() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "wetland_id": ["a", "a", "a", "a", "b"],
            "scene_id": list("12345"),
            "datetime": pd.to_datetime(
                ["2031-03-01T10:00", "2031-03-01T10:20", "2031-03-11T10:00", "2031-03-21T10:00", "2031-03-01T10:00"]
            ),
            "area_m2": [100.0, 200.0, 300.0, 400.0, 50.0],
            "area_sd_m2": [10.0, 10.0, 10.0, 10.0, 5.0],
            "clear_fraction": 1.0,
            "view_fraction": [0.5, 0.9, 1.0, 1.0, 1.0],
            "leaf_state": "leaf_off",
            "used": [True, True, True, False, True],
            "reason": "",
        }
    )


def stages() -> pd.DataFrame:
    days = pd.date_range("2031-02-20", "2031-03-31")
    one = pd.DataFrame(
        {
            "wetland_id": "a",
            "date": days,
            "stage_m": np.linspace(0.1, 0.49, len(days)),
            "stage_sd_m": 0.02,
            "period": "1",
        }
    )
    better = one.assign(stage_m=0.3, stage_sd_m=0.01).iloc[5:12]
    return pd.concat([one.assign(logger_id="L1"), better.assign(logger_id="L2")]).assign(quality="good", censored=False)


def test_pairs_join_days_average_views_and_take_the_surest_logger():
    pairs = make_pairs(extents(), stages())
    assert pairs["wetland_id"].tolist() == ["a", "a"]
    first = pairs.iloc[0]
    assert first["area_m2"] == pytest.approx(150.0)
    assert first["view_fraction"] == 0.9
    assert first["stage_m"] == 0.3
    assert first["stage_sd_m"] == 0.01
    assert pairs.iloc[1]["stage_m"] == pytest.approx(0.1 + 0.39 * 19 / 39)
    assert pairs.iloc[1]["rising"] == pytest.approx(0.07, abs=0.001)


def test_days_of_poor_quality_and_unused_views_give_no_pair():
    poor = stages()
    poor.loc[poor["date"] == "2031-03-11", "quality"] = "suspect"
    assert make_pairs(extents(), poor)["date"].tolist() == [pd.Timestamp("2031-03-01")]


def test_row_order_does_not_matter():
    plain = make_pairs(extents(), stages())
    mixed = make_pairs(extents().sample(frac=1, random_state=1), stages().sample(frac=1, random_state=2))
    pd.testing.assert_frame_equal(plain, mixed)


def test_a_missing_column_is_named():
    with pytest.raises(InputError, match=r"stage_daily.*stage_sd_m"):
        make_pairs(extents(), stages().drop(columns="stage_sd_m"))


def test_canopies_serve_only_where_nothing_better_does():
    """Pairs under leaves stand in for few leaf-off ones, unless an outlet ties the wetland to an elevation model."""
    pairs = pd.DataFrame(
        {
            "wetland_id": ["a"] * 3 + ["b"] * 3 + ["c"] * 10,
            "period": "1",
            "leaf_state": ["leaf_off", "leaf_on", "leaf_on"] * 2 + ["leaf_off"] * 9 + ["green_up"],
        }
    )
    count = best_pairs(pairs).groupby("wetland_id").size()
    assert count.to_dict() == {"a": 3, "b": 3, "c": 9}
    assert best_pairs(pairs, anchored={"b"}).groupby("wetland_id").size().to_dict() == {"a": 3, "b": 1, "c": 9}
