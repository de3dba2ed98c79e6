"""Features, examples, the water classifier and the water fraction of mixed pixels, and fast exact scoring of forests.

Arrays and tables in and out, no files but the model folder (LightGBM text and a JSON card). Labels become examples
(``check_labels``, ``label_pixels``, ``match_scenes``, ``make_examples``), examples become models (``train_models``, or
``WaterClassifier`` and ``FractionModel`` alone), and models score features (``features``).
"""

from inundate.pixels.classifier import WaterClassifier
from inundate.pixels.examples import ExampleSet, ViewState, join_starter, make_examples, starter_examples
from inundate.pixels.features import FEATURES, features, scene_context
from inundate.pixels.forest import FastForest, ForestFallbackWarning, JointForest
from inundate.pixels.fraction import FractionModel
from inundate.pixels.labels import check_labels, label_pixels, match_scenes
from inundate.pixels.lasting import between_sd, lasting_errors
from inundate.pixels.mixing import MixOptions, mix_examples
from inundate.pixels.training import PixelModels, train_models

__all__ = [
    "FEATURES",
    "ExampleSet",
    "FastForest",
    "ForestFallbackWarning",
    "FractionModel",
    "JointForest",
    "MixOptions",
    "PixelModels",
    "ViewState",
    "WaterClassifier",
    "between_sd",
    "check_labels",
    "features",
    "join_starter",
    "label_pixels",
    "lasting_errors",
    "make_examples",
    "match_scenes",
    "mix_examples",
    "scene_context",
    "starter_examples",
    "train_models",
]
