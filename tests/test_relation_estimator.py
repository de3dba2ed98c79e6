"""The one-wetland estimator keeps the scikit-learn contract and the fits of the whole set."""

import numpy as np
import pytest
from sklearn.base import clone
from sklearn.exceptions import NotFittedError
from sklearn.model_selection import KFold, cross_val_score

from inundate.common.errors import InputError
from inundate.relation import RelationOptions, StageAreaRelation, fit_relations
from tests.relation_world import World


@pytest.fixture(scope="module")
def mine():
    world = World()
    return world, world.pairs[world.pairs["wetland_id"] == "w01"]


def test_constructor_only_stores_and_clone_keeps():
    model = StageAreaRelation(area_max_m2=500.0, families=("power",), level=0.8, random_state=4)
    assert clone(model).get_params() == model.get_params()
    with pytest.raises(NotFittedError):
        model.predict(np.array([[0.2]]))
    with pytest.raises(NotFittedError):
        model.predict_interval(np.array([[0.2]]))


def test_equals_the_fit_of_the_whole_set(mine):
    world, pairs = mine
    size = world.truth["w01"][2]
    model = StageAreaRelation(area_max_m2=size)
    got = model.fit(
        pairs[["stage_m"]].to_numpy(),
        pairs["area_m2"].to_numpy(),
        stage_sd_m=pairs["stage_sd_m"].to_numpy(),
        area_sd_m2=pairs["area_sd_m2"].to_numpy(),
        dates=pairs["date"].to_numpy(),
    )
    assert got is model
    assert model.n_features_in_ == 1
    sites = world.wetlands[world.wetlands["wetland_id"] == "w01"][["wetland_id", "area_max_m2"]]
    whole = fit_relations(pairs, sites, options=RelationOptions())
    stage = np.linspace(-0.1, 1, 30)
    np.testing.assert_allclose(model.predict(stage[:, None]), whole.predict("w01", stage)["area_m2"], rtol=1e-9)
    low, high = model.predict_interval(stage[:, None]).T
    assert (low <= model.predict(stage[:, None])).all()
    assert (model.predict(stage[:, None]) <= high).all()


def test_serves_in_cross_validation(mine):
    world, pairs = mine
    scores = cross_val_score(
        StageAreaRelation(area_max_m2=world.truth["w01"][2]),
        pairs[["stage_m"]].to_numpy(),
        pairs["area_m2"].to_numpy(),
        cv=KFold(4),
    )
    assert scores.min() > 0.7


def test_refuses_what_it_cannot_use():
    stage = np.linspace(0.1, 0.9, 12)
    with pytest.raises(InputError, match="falls as stage rises"):
        StageAreaRelation().fit(stage[:, None], 1000 - 900 * stage)
    with pytest.raises(InputError, match="2 columns"):
        StageAreaRelation().fit(np.column_stack([stage, stage]), stage)
    with pytest.raises(InputError, match="not negative"):
        StageAreaRelation().fit(stage[:, None], stage - 0.5)
