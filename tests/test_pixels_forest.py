"""Fast scoring equals LightGBM's own, at ties, missing values and odd inputs, whatever the order of rows."""

from __future__ import annotations

import os
import subprocess
import sys
import warnings
from pathlib import Path

import lightgbm as lgb
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from inundate.common.errors import InputError
from inundate.pixels.forest import FastForest, ForestFallbackWarning, JointForest
from inundate.pixels.forest_text import read_forest

TIGHT = 1e-9  # the promise is 1e-6; sums are kept to 51 bits
OBJECTIVES = ("binary", "regression", "poisson", "cross_entropy")


def train(x: np.ndarray, y: np.ndarray, trees: int = 20, **options: object) -> lgb.Booster:
    base = {"objective": "binary", "num_leaves": 31, "verbose": -1, "num_threads": 1, "seed": 1, "min_data_in_leaf": 5}
    categories = options.pop("categories", "auto")
    return lgb.train({**base, **options}, lgb.Dataset(x, y, categorical_feature=categories), trees)


def table(rng: np.random.Generator, n: int, width: int) -> tuple[np.ndarray, np.ndarray]:
    x = rng.normal(size=(n, width))
    return x, (np.sin(3 * x[:, 0]) + x[:, 1] * x[:, -1] + rng.normal(0, 0.3, n) > 0).astype(float)


def awkward(rng: np.random.Generator, booster: lgb.Booster, n: int, width: int) -> np.ndarray:
    """Values at thresholds, one step beside them, NaN, infinite, zero of both signs and almost zero."""
    own = [t.threshold for t in read_forest(booster.model_to_string()).trees]
    pool = np.concatenate([*own, [0.0, -0.0, 1e-35, -1e-35, 1e-36, 2e-35, np.inf, -np.inf, np.nan]])
    x = rng.choice(pool, (n, width))
    beside = np.nextafter(x, rng.choice([-np.inf, np.inf], x.shape))
    return np.where(rng.random(x.shape) < 0.4, beside, x)


@pytest.fixture(scope="module")
def forest() -> tuple[lgb.Booster, FastForest, np.ndarray]:
    rng = np.random.default_rng(3)
    x, y = table(rng, 6000, 6)
    x[rng.random(x.shape) < 0.05] = np.nan
    booster = train(x, y, 60)
    return booster, FastForest.from_booster(booster), x


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(seed=st.integers(0, 2**32 - 1), data=st.data())
def test_equals_lightgbm_on_random_models(seed: int, data: st.DataObject) -> None:
    """Random small models over awkward data: same raw score and prediction, float64 and float32."""
    rng = np.random.default_rng(seed)
    width = data.draw(st.integers(2, 7))
    x, y = table(rng, data.draw(st.integers(60, 900)), width)
    if data.draw(st.booleans()):
        x = np.round(x, 1)
    x[rng.random(x.shape) < data.draw(st.sampled_from([0.0, 0.2]))] = data.draw(st.sampled_from([np.nan, 0.0]))
    booster = train(
        x,
        y,
        data.draw(st.integers(1, 30)),
        objective=data.draw(st.sampled_from(OBJECTIVES)),
        num_leaves=data.draw(st.integers(2, 70)),
        min_data_in_leaf=data.draw(st.integers(1, 10)),
        zero_as_missing=data.draw(st.booleans()),
        use_missing=data.draw(st.booleans()),
        max_bin=data.draw(st.sampled_from([7, 255, 700])),
        sigmoid=data.draw(st.sampled_from([1.0, 0.6])),
    )
    quick = FastForest.from_booster(booster)
    assert quick.reason == ""
    rows = awkward(rng, booster, 300, width)
    with np.errstate(over="ignore"):
        singles = rows.astype(np.float32)
    for values in (x, rows, singles):
        want = booster.predict(values, raw_score=True)
        np.testing.assert_allclose(quick.predict_raw(values), want, rtol=TIGHT, atol=TIGHT)
        np.testing.assert_allclose(quick.predict(values), booster.predict(values), rtol=TIGHT, atol=TIGHT)


def test_float32_next_to_a_threshold_is_compared_in_double(forest: tuple) -> None:
    """A float32 just above a threshold that rounds onto it goes right, as LightGBM has it."""
    booster, quick, _ = forest
    thresholds = np.concatenate([t.threshold for t in read_forest(booster.model_to_string()).trees])
    rng = np.random.default_rng(0)
    near = rng.choice(thresholds, (4000, 6)).astype(np.float32)
    exact = near.astype(np.float64)
    assert np.any(~np.isin(exact, thresholds))  # rounding did move some off their thresholds
    np.testing.assert_allclose(quick.predict_raw(near), booster.predict(near, raw_score=True), rtol=TIGHT, atol=TIGHT)


def test_order_and_cuts_do_not_matter(forest: tuple) -> None:
    """Any order of rows, any chunks and any number of threads give the same bits."""
    _, quick, x = forest
    rows = np.tile(x, (12, 1))[:70_001].astype(np.float32)
    whole = quick.predict_raw(rows)
    order = np.random.default_rng(1).permutation(len(rows))
    np.testing.assert_array_equal(quick.predict_raw(rows[order]), whole[order])
    np.testing.assert_array_equal(quick.predict_raw(rows, threads=2), whole)
    cut = np.concatenate([quick.predict_raw(part) for part in np.split(rows, [1, 65, 700, 33_333])])
    np.testing.assert_array_equal(cut, whole)


def test_more_thresholds_than_a_byte_holds() -> None:
    """A feature with over 255 thresholds is ranked in 16 bits."""
    rng = np.random.default_rng(5)
    x = rng.normal(size=(8000, 2))
    booster = train(x, np.sin(9 * x[:, 0]) + x[:, 1], 80, objective="regression", max_bin=5000, min_data_in_leaf=2)
    quick = FastForest.from_booster(booster)
    assert len(np.unique(np.concatenate([t.threshold for t in read_forest(booster.model_to_string()).trees]))) > 600
    rows = awkward(rng, booster, 2000, 2)
    np.testing.assert_allclose(quick.predict_raw(rows), booster.predict(rows, raw_score=True), rtol=TIGHT, atol=TIGHT)


def test_many_trees_do_not_overflow_the_halves() -> None:
    """More trees than the 32-bit halves hold at once, all with large values of one sign."""
    rng = np.random.default_rng(6)
    x = rng.normal(size=(500, 3))
    booster = train(x, 1e6 + 1e5 * x[:, 0], 900, objective="regression", num_leaves=8, learning_rate=0.02)
    rows = rng.normal(size=(2000, 3))
    want = booster.predict(rows, raw_score=True)
    np.testing.assert_allclose(FastForest.from_booster(booster).predict_raw(rows), want, rtol=1e-12)


def test_trees_without_a_split() -> None:
    """A forest that learned nothing gives its constant."""
    x = np.random.default_rng(0).normal(size=(100, 2))
    booster = train(x, np.full(100, 3.5), 5, objective="regression")
    np.testing.assert_allclose(FastForest.from_booster(booster).predict(x), booster.predict(x), atol=TIGHT)


def test_best_iteration_is_kept() -> None:
    """With a best iteration set, the fast forest scores what LightGBM scores: that iteration, not the last."""
    rng = np.random.default_rng(8)
    x, y = table(rng, 800, 4)
    booster = train(x, y, 30)
    booster.best_iteration = 11
    quick = FastForest.from_booster(booster)
    np.testing.assert_allclose(quick.predict(x), booster.predict(x, num_iteration=11), atol=TIGHT)
    assert np.abs(quick.predict(x) - booster.predict(x, num_iteration=30)).max() > 1e-3


def test_forests_scored_together_equal_each_alone() -> None:
    """A classifier and a regression over the same features share one ranking and keep their own results."""
    rng = np.random.default_rng(9)
    x, y = table(rng, 3000, 5)
    boosters = [train(x, y, 30), train(x, np.abs(x[:, 0]), 20, objective="regression")]
    both = JointForest([FastForest.from_booster(b) for b in boosters]).predict(x.astype(np.float32))
    assert len(both) == 2
    for got, booster in zip(both, boosters, strict=True):
        np.testing.assert_allclose(got, booster.predict(x.astype(np.float32)), rtol=TIGHT, atol=TIGHT)


@pytest.mark.parametrize(
    ("options", "y_of", "reason"),
    [
        (
            {"objective": "multiclass", "num_class": 3},
            lambda x: np.digitize(x[:, 0], [-0.5, 0.5]),
            "more than one class",
        ),
        ({"categories": [1]}, lambda x: (x[:, 1] % 2 == 0).astype(float), "splits on categories"),
        ({"objective": "regression", "linear_tree": True}, lambda x: x[:, 0] * 2, "linear models"),
        ({"num_leaves": 300, "min_data_in_leaf": 1}, lambda x: (np.sin(40 * x[:, 0]) > 0) * 1.0, "more than 255"),
        ({"boosting": "rf", "bagging_freq": 1, "bagging_fraction": 0.5}, lambda x: (x[:, 0] > 0) * 1.0, "averaged"),
    ],
)
def test_unsupported_models_fall_back_and_say_so(options: dict, y_of: object, reason: str) -> None:
    """A model of another kind is scored by LightGBM itself, after a warning that names the reason."""
    rng = np.random.default_rng(2)
    x = np.column_stack([rng.normal(size=3000), rng.integers(0, 9, 3000), rng.normal(size=3000)]).astype(float)
    booster = train(x, y_of(x), 3, **options)  # type: ignore[operator]
    assert not FastForest.supported(booster)
    with pytest.warns(ForestFallbackWarning, match=reason):
        slow = FastForest.from_booster(booster)
    np.testing.assert_array_equal(slow.predict(x), booster.predict(x, num_threads=1))


def test_supported_model_raises_no_warning(forest: tuple) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert FastForest.from_booster(forest[0]).reason == ""


@pytest.mark.parametrize("shape", [(5,), (5, 4), (5, 7), (2, 5, 6)])
def test_wrong_shape_is_refused(forest: tuple, shape: tuple[int, ...]) -> None:
    with pytest.raises(InputError, match=r"the forest needs \(rows, 6\)"):
        forest[1].predict(np.zeros(shape))


def test_no_rows_give_no_scores(forest: tuple) -> None:
    got = forest[1].predict(np.zeros((0, 6), np.float32))
    assert got.dtype == np.float64
    assert got.shape == (0,)


def test_threads_below_one_are_refused(forest: tuple) -> None:
    with pytest.raises(InputError, match="threads: 0 is below 1"):
        forest[1].predict_raw(np.zeros((4, 6)), threads=0)


def test_joint_forest_refuses_other_features(forest: tuple) -> None:
    x, y = table(np.random.default_rng(0), 200, 3)
    with pytest.raises(InputError, match=r"forests with \[6, 3\] features"):
        JointForest([forest[1], FastForest.from_booster(train(x, y, 2))])


def test_processor_without_wide_registers_gives_the_same(forest: tuple, tmp_path: Path) -> None:
    """Compiled for a plain processor, in a process of its own: the same bits."""
    booster, quick, x = forest
    booster.save_model(tmp_path / "model.txt")
    np.save(tmp_path / "x.npy", x)
    code = (
        "import sys, numpy as np, lightgbm as lgb\n"
        "from inundate.pixels.forest import FastForest\n"
        "from inundate.pixels.lanes import WIDE\n"
        "assert not WIDE\n"
        "quick = FastForest.from_booster(lgb.Booster(model_file=sys.argv[1] + '/model.txt'))\n"
        "np.save(sys.argv[1] + '/out.npy', quick.predict_raw(np.load(sys.argv[1] + '/x.npy')))\n"
    )
    plain = {**os.environ, "NUMBA_CPU_NAME": "generic", "NUMBA_CACHE_DIR": str(tmp_path)}
    subprocess.run([sys.executable, "-c", code, str(tmp_path)], env=plain, check=True)
    np.testing.assert_array_equal(np.load(tmp_path / "out.npy"), quick.predict_raw(x))
