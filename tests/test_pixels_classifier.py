"""Classifier and fraction model: contract, grouped folds, calibration, doubtful labels, saving, determinism."""

import json

import numpy as np
import pandas as pd
import pytest
from scipy.special import expit
from sklearn.utils.estimator_checks import parametrize_with_checks

from inundate.common.errors import InputError
from inundate.pixels import FractionModel, WaterClassifier, starter_examples, train_models
from inundate.pixels.calibration import Calibration, reliability
from inundate.pixels.folds import FoldOptions, make_folds
from inundate.pixels.scoring import clustered_rate

SMALL = {"n_trees": 60, "num_threads": 1}


@parametrize_with_checks([WaterClassifier(**SMALL)])
def test_estimator_contract(estimator, check):
    check(estimator)


def world(n=1500, seed=0):
    """Two noisy features, groups with their own offset, dates over two years."""
    rng = np.random.default_rng(seed)
    wetland = rng.integers(0, 20, n)
    offset = np.random.default_rng(9).normal(0, 0.4, 20)
    X = rng.normal(0, 1, (n, 4))
    p = expit(2.0 * X[:, 0] - X[:, 1] + offset[wetland])
    y = (rng.random(n) < p).astype(int)
    date = np.datetime64("2030-01-01") + rng.integers(0, 700, n)
    return X, y, np.array([f"w{k}" for k in wetland]), date, rng.integers(0, 3, n)


def test_no_test_example_shares_wetland_or_date_block_with_training():
    _, y, wetland, date, _ = world(800)
    folds = make_folds(wetland, date, y, np.ones(800, bool), FoldOptions(4, 3, 30, 0))
    blocks = date.astype("datetime64[D]").astype(int) // 30
    seen = np.zeros(800, int)
    for train_rows, test_rows in folds.splits():
        assert not set(wetland[train_rows]) & set(wetland[test_rows])
        assert not set(blocks[train_rows]) & set(blocks[test_rows])
        seen[test_rows] += 1
    assert (seen == 1).all()


def test_folds_do_not_depend_on_row_order():
    _, y, wetland, date, _ = world(500)
    order = np.random.default_rng(1).permutation(500)
    options = FoldOptions(4, 3, 30, 0)
    one = make_folds(wetland, date, y, np.ones(500, bool), options)
    two = make_folds(wetland[order], date[order], y[order], np.ones(500, bool), options)
    np.testing.assert_array_equal(one.wetland[order], two.wetland)
    np.testing.assert_array_equal(one.date[order], two.date)


def test_a_random_split_flatters_and_the_grouped_one_does_not():
    rng = np.random.default_rng(2)
    wetland = np.repeat(np.arange(30), 30)
    X = rng.normal(0, 1, (30, 3))[wetland] + 0.05 * rng.normal(size=(900, 3))
    y = rng.integers(0, 2, 30)[wetland]  # nothing to learn but each wetland by heart
    grouped = WaterClassifier(**SMALL).fit(X, y, wetland=wetland.astype(str))
    loose = WaterClassifier(**SMALL).fit(X, y)
    error = {k: (np.nan_to_num(m.oof_probability_) > 0.5) != y for k, m in (("grouped", grouped), ("loose", loose))}
    assert error["loose"].mean() < 0.1
    assert error["grouped"].mean() > 0.3


def test_row_order_and_threads_do_not_matter():
    X, y, wetland, date, state = world(400)
    order = np.random.default_rng(5).permutation(y.size)
    one = WaterClassifier(n_trees=20, num_threads=1).fit(X, y, wetland=wetland, date=date, leaf_state=state)
    two = WaterClassifier(n_trees=20, num_threads=2).fit(
        X[order], y[order], wetland=wetland[order], date=date[order], leaf_state=state[order]
    )
    np.testing.assert_allclose(one.predict_proba(X), two.predict_proba(X), atol=1e-9)
    np.testing.assert_allclose(one.oof_probability_[order], two.oof_probability_, atol=1e-9)
    assert one.n_trees_ == two.n_trees_


def test_out_of_fold_probability_is_reliable():
    X, y, wetland, date, state = world(6000, 3)
    model = WaterClassifier(**SMALL).fit(X, y, wetland=wetland, date=date, leaf_state=state)
    table = pd.DataFrame(model.card_["reliability"]["all"])
    assert table["n"].sum() == 6000
    assert (table["gap"].abs() <= 0.03 + 2.5 * table["gap_sd"]).all()


def test_calibration_keeps_few_near_the_pooled_map_and_mends_many():
    rng = np.random.default_rng(0)
    raw = rng.normal(0, 2, 8000)
    state = np.where(np.arange(8000) < 30, 1, 0)
    truth = rng.random(8000) < expit(0.5 * raw + np.where(state == 1, 2.0, 0.0))
    found = Calibration.fit(raw, truth.astype(float), np.ones(8000), state, 20.0)
    grid = np.linspace(-4, 4, 9)
    np.testing.assert_allclose(found.apply(grid, np.zeros(9, int)), expit(0.5 * grid), atol=0.03)
    shift = found.states[1][2] - found.pooled[2]
    assert 0 < shift < 1.5  # pulled from 2 towards 0
    assert (np.diff(found.apply(np.linspace(-9, 9, 50), np.ones(50, int))) >= 0).all()
    again = Calibration.from_json(json.loads(json.dumps(found.to_json())))
    np.testing.assert_array_equal(found.apply(grid, np.ones(9, int)), again.apply(grid, np.ones(9, int)))


def test_reliability_by_hand():
    table = reliability(np.array([0.05, 0.05, 0.95, 1.0]), np.array([0, 1, 1, 1]))
    assert (table[0]["n"], table[0]["share_water"], table[9]["n"]) == (2, 0.5, 2)
    assert table[9]["gap"] == pytest.approx(1 - 0.975)


def test_clustered_sd_is_wider_when_errors_come_in_lumps():
    hit = np.zeros(100)
    hit[:10] = 1
    together = clustered_rate(hit, np.ones(100), np.repeat(np.arange(10), 10))
    apart = clustered_rate(hit, np.ones(100), np.tile(np.arange(10), 10))
    assert together[0] == apart[0] == pytest.approx(0.1)
    assert together[1] == pytest.approx(0.1)  # one of ten clusters wholly wrong: sqrt(0.1 * 0.9 / 9)
    assert apart[1] < 0.04
    assert np.isnan(clustered_rate(hit, np.zeros(100), np.arange(100))[0])


def test_wrong_labels_are_listed_and_kept():
    rng = np.random.default_rng(4)
    X = rng.normal(0, 1, (2000, 4))
    clean = (X[:, 0] > 0).astype(int)
    wrong = rng.random(2000) < 0.04
    y = np.where(wrong, 1 - clean, clean)
    model = WaterClassifier(**SMALL).fit(X, y, wetland=rng.integers(0, 30, 2000).astype(str))
    listed = model.doubtful_["row"].to_numpy()
    assert wrong[listed].mean() > 0.9
    assert wrong[listed].sum() / wrong.sum() > 0.8
    np.testing.assert_array_equal(model.doubtful_["label"], y[listed])
    assert model.card_["n_doubtful"] == listed.size
    assert np.isfinite(model.oof_probability_).all()
    assert (model.predict(X) == clean).mean() > 0.97


def test_starter_examples_train_but_are_not_scored():
    X, y, wetland, _, _ = world(400)
    source = np.where(np.arange(400) < 150, "starter", "own")
    model = WaterClassifier(**SMALL).fit(X, y, wetland=wetland, source=source)
    np.testing.assert_array_equal(np.isfinite(model.oof_probability_), source == "own")
    assert model.card_["folds"]["n_scored"] == 250


def test_save_and_load_give_the_same_numbers(tmp_path):
    X, y, wetland, date, state = world(600)
    model = WaterClassifier(**SMALL).fit(
        X,
        y,
        wetland=wetland,
        date=date,
        leaf_state=state,
        strata=pd.DataFrame({"size_class": np.where(X[:, 3] > 0, "large", "small")}),
    )
    model.save(tmp_path / "m")
    assert sorted(p.name for p in (tmp_path / "m").iterdir()) == ["water.json", "water.txt"]
    other = WaterClassifier.load(tmp_path / "m")
    np.testing.assert_array_equal(model.predict_proba(X, state), other.predict_proba(X, state))
    np.testing.assert_allclose(model.unlike(X), other.unlike(X))
    card = json.loads((tmp_path / "m" / "water.json").read_text())
    assert {"features", "folds", "error_rates", "reliability", "settings", "versions", "counts"} <= set(card)
    assert set(pd.DataFrame(card["error_rates"])["stratum"]) == {"all", "size_class"}
    assert list(other.error_rates_["omission"]) == pytest.approx(list(model.error_rates_["omission"]))
    with pytest.raises(InputError, match="no such file"):
        WaterClassifier.load(tmp_path)
    (tmp_path / "m" / "water.txt").write_text("rubbish")
    with pytest.raises(InputError, match="cannot be read"):
        WaterClassifier.load(tmp_path / "m")


def test_same_model_bytes_each_time(tmp_path):
    X, y, wetland, date, state = world(500)
    for name in ("a", "b"):
        WaterClassifier(**SMALL).fit(X, y, wetland=wetland, date=date, leaf_state=state).save(tmp_path / name)
    for file in ("water.txt", "water.json"):
        assert (tmp_path / "a" / file).read_bytes() == (tmp_path / "b" / file).read_bytes()


def test_unlike_grows_with_distance_and_bears_missing_values():
    X, y, wetland, _, _ = world(1500)
    model = WaterClassifier(**SMALL).fit(X, y, wetland=wetland)
    inside = model.unlike(X)
    assert (inside > 1).mean() < 0.05
    far = model.unlike(np.array([[8.0, 8, 8, 8], [30, 30, 30, 30], [8, np.nan, 8, 8], [np.nan] * 4]))
    assert 1 < far[0] < far[1]
    assert far[2] > 1
    assert np.isnan(far[3])


def test_bad_input_is_named():
    X, y, *_ = world(60)
    with pytest.raises(InputError, match="one class only"):
        WaterClassifier().fit(X, np.zeros(60, int))
    with pytest.raises(InputError, match="wetland: shape"):
        WaterClassifier(**SMALL).fit(X, y, wetland=np.array(["a", "b"]))
    with pytest.raises(InputError, match=r"1\.5 is no water fraction"):
        FractionModel(**SMALL).fit(X, np.where(y > 0, 1.5, 0.0))
    with pytest.raises(InputError, match="monotone: 'depth' is not a feature"):
        WaterClassifier(monotone={"depth": 1}, **SMALL).fit(X, y)


def test_fraction_model_beats_probability_on_mixtures(tmp_path):
    base = starter_examples()
    water = base.table["wetland_id"].str.contains("water_stained|water_clear").to_numpy()
    dry = base.table["wetland_id"].str.contains("litter|soil").to_numpy()
    sensor = np.isfinite(base.reflectance[3])  # all ten bands
    picked = base.take((water | dry) & sensor)
    picked.table["source"], picked.table["scene_id"] = "own", "s"
    models = train_models(picked, num_threads=1)
    # held out: mixtures of surfaces from other seeds of the same kind
    from inundate.pixels import MixOptions, mix_examples

    held = mix_examples(picked, options=MixOptions(n=1500, seed=99))
    new = (held.table["source"] == "mixed").to_numpy()
    truth = held.table["fraction"].to_numpy()[new]
    as_fraction = models.classifier.predict_proba(held.X[new])[:, 1]
    modelled = models.fraction.predict(held.X[new])
    rmse = {
        k: float(np.sqrt(np.mean((v - truth) ** 2))) for k, v in (("probability", as_fraction), ("model", modelled))
    }
    assert rmse["model"] < 0.75 * rmse["probability"]
    assert (modelled >= 0).all()
    assert (modelled <= 1).all()
    sd = models.fraction.sd(modelled)
    assert 0.7 < np.mean(np.abs(modelled - truth) <= sd) <= 1
    models.fraction.save(tmp_path)
    np.testing.assert_array_equal(
        FractionModel.load(tmp_path).predict(held.X[:50]), models.fraction.predict(held.X[:50])
    )
