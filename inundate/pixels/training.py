"""Both models from one example table."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.pixels.classifier import STARTER, WaterClassifier
from inundate.pixels.examples import ExampleSet
from inundate.pixels.fraction import FractionModel
from inundate.pixels.mixing import MixOptions, mix_examples

MIXED_SHARE = 0.25
"""Share of the fraction model's weight that mixed examples have; about that of shore pixels in small wetlands (common
practice, no source)."""


@dataclass(frozen=True, slots=True)
class PixelModels:
    """A fitted classifier and fraction model, and what the user should know.

    Attributes
    ----------
    classifier : WaterClassifier
    fraction : FractionModel
    doubtful : DataFrame
        row (of the labels file), label, probability, wetland_id, date, scene_id: labels that the others contradict.
    notes : tuple of str
    """

    classifier: WaterClassifier
    fraction: FractionModel
    doubtful: pd.DataFrame
    notes: tuple[str, ...]


def train_models(
    examples: ExampleSet,
    *,
    seed: int = 0,
    num_threads: int = 2,
    mix: MixOptions | None = None,
    strata: pd.DataFrame | None = None,
) -> PixelModels:
    """Fit the classifier, then the fraction model on mixtures of the examples whose labels stand.

    Parameters
    ----------
    examples : ExampleSet
    seed, num_threads : int
    mix : MixOptions, optional
    strata : DataFrame, one row an example, optional

    Returns
    -------
    PixelModels
    """
    table, X = examples.table, examples.X
    source = table["source"].to_numpy()
    classifier = WaterClassifier(seed=seed, num_threads=num_threads).fit(
        X,
        examples.y,
        table["weight"].to_numpy(),
        wetland=table["wetland_id"].to_numpy(),
        date=table["date"].to_numpy(),
        leaf_state=table["leaf_state"].to_numpy(),
        source=source,
        strata=strata,
    )
    trusted = np.ones(len(table), bool)
    trusted[classifier.doubtful_["row"].to_numpy(int)] = False
    mixed = mix_examples(examples, trusted, options=mix or MixOptions(seed=seed))
    starter = (mixed.table["source"] == STARTER).to_numpy()
    made = (mixed.table["source"] == "mixed").to_numpy()
    odds = MIXED_SHARE / (1 - MIXED_SHARE)
    weight = np.where(made, odds * (~made).sum() / max(int(made.sum()), 1), 1.0)
    fraction = FractionModel(seed=seed, num_threads=num_threads).fit(
        mixed.X,
        mixed.table["fraction"].to_numpy(),
        weight,
        wetland=mixed.table["wetland_id"].to_numpy(),
        date=mixed.table["date"].to_numpy(),
        scored=~starter,
    )
    listed = classifier.doubtful_
    where = table.iloc[listed["row"].to_numpy(int)].reset_index(drop=True)
    doubtful = pd.DataFrame(
        {
            "row": where["row"],
            "label": np.where(where["label"] == 1, "water", "dry"),
            "probability": listed["probability"],
            "wetland_id": where["wetland_id"],
            "date": where["date"],
            "scene_id": where["scene_id"],
        }
    )
    notes = list(examples.notes)
    if len(doubtful):
        notes.append(
            f"{len(doubtful)} labels are contradicted by the others; they are listed, and weigh {classifier.doubt_weight:g} of the rest"
        )
    return PixelModels(classifier, fraction, doubtful, tuple(notes))
