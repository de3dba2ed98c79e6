"""The card of a trained model, and the folder that holds model and card."""

from __future__ import annotations

import json
import platform
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import lightgbm as lgb
import numpy as np
import pandas as pd
import sklearn

from inundate.common.errors import InputError
from inundate.common.writing import plain, write_json, write_text
from inundate.pixels.calibration import reliability
from inundate.pixels.folds import Folds
from inundate.pixels.scoring import leaf_state_names

if TYPE_CHECKING:
    from inundate.pixels.classifier import WaterClassifier


def versions() -> dict[str, str]:
    """Return the versions of what a model's numbers depend on."""
    return {
        "python": platform.python_version(),
        "lightgbm": lgb.__version__,
        "numpy": np.__version__,
        "scikit-learn": sklearn.__version__,
    }


def make_card(
    model: WaterClassifier, y: np.ndarray, weight: np.ndarray, info: pd.DataFrame, folds: Folds
) -> dict[str, Any]:
    """Return the card of a classifier: features, folds, scores, reliability, calibration, seeds, versions, counts.

    Parameters
    ----------
    model : WaterClassifier
        During its fit, results in the order of ``info``.
    y, weight : ndarray, shape (row,)
    info : DataFrame
        Columns wetland, date, leaf_state, source.
    folds : Folds

    Returns
    -------
    dict
        Plain values only.
    """
    p = model.oof_probability_
    known = np.isfinite(p)
    states = leaf_state_names(info["leaf_state"].to_numpy())
    own = pd.DataFrame({"source": info["source"], "leaf_state": states, "label": np.where(y == 1, "water", "dry")})
    tables = {"all": reliability(p[known], y[known], weight[known])}
    for state in sorted(set(states[known])):
        mine = known & (states == state)
        tables[state] = reliability(p[mine], y[mine], weight[mine])
    counts = own.value_counts(sort=False).rename("n").reset_index()
    card = {
        "kind": "water classifier",
        "classes": model.classes_,
        "settings": model.get_params(),
        "features": model.feature_names_,
        "n_trees": model.n_trees_,
        "loss_by_trees": [round(v, 6) for v in model.losses_],
        "folds": {
            "rule": "a test example's wetland and date block are both absent from its training examples",
            "by_wetland": int(folds.wetland.max(initial=0)) + 1,
            "by_date": int(folds.date.max(initial=0)) + 1,
            "n_scored": int(known.sum()),
            "wetlands": {
                str(k): sorted(set(info["wetland"][folds.scored & (folds.wetland == k)]))
                for k in np.unique(folds.wetland)
            }
            if info["wetland"].nunique() < 2000 and not info["wetland"].equals(info["key"])
            else "one group a distinct row",
        },
        "counts": counts.to_dict("records"),
        "n_doubtful": int(model._flagged.sum()),
        "error_rates": model.error_rates_.to_dict("records"),
        "reliability": tables,
        "calibration": model.calibration_.to_json(),
        "likeness": model.likeness_.to_json(),
        "versions": versions(),
    }
    return cast("dict[str, Any]", plain(card))


def write_model(folder: Path, name: str, booster: lgb.Booster, card: dict[str, Any]) -> None:
    """Write ``<name>.txt`` and ``<name>.json`` into a folder, the card last."""
    folder.mkdir(parents=True, exist_ok=True)
    write_text(folder / f"{name}.txt", booster.model_to_string())
    write_json(folder / f"{name}.json", card)


def read_model(folder: Path, name: str) -> tuple[lgb.Booster, dict[str, Any]]:
    """Read ``<name>.txt`` and ``<name>.json``.

    Raises
    ------
    InputError
        A file is missing, or the card cannot be read.
    """
    model, card = folder / f"{name}.txt", folder / f"{name}.json"
    for path in (model, card):
        if not path.is_file():
            message = f"{path}: no such file; a trained model is a pair {name}.txt and {name}.json, train it first"
            raise InputError(message)
    try:
        values = json.loads(card.read_text(encoding="utf-8"))
        booster = lgb.Booster(model_str=model.read_text(encoding="utf-8"))
    except (ValueError, lgb.basic.LightGBMError) as error:
        message = f"{folder}: model {name} cannot be read ({error}); train it again"
        raise InputError(message) from error
    return booster, values
