"""Reading a LightGBM model text into arrays, and telling what cannot be scored the fast way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from inundate.pixels.forest_kernels import MOST_LEAVES


@dataclass(frozen=True, slots=True)
class Tree:
    """One tree of a model text.

    Attributes
    ----------
    feature, left, right, decision : ndarray of int64, shape (node,)
        Children below 0 are leaves, ``~child`` their number.
    threshold : ndarray of float64, shape (node,)
    leaf : ndarray of float64, shape (leaf,)
    """

    feature: np.ndarray
    threshold: np.ndarray
    left: np.ndarray
    right: np.ndarray
    decision: np.ndarray
    leaf: np.ndarray


@dataclass(frozen=True, slots=True)
class ForestText:
    """What a LightGBM model text holds: header entries, trees, and why it cannot be scored here (empty if it can)."""

    header: dict[str, str]
    trees: tuple[Tree, ...]
    reason: str = ""


PLAIN = ("regression", "regression_l1", "huber", "fair", "quantile", "mape")
EXPONENTIAL = ("poisson", "gamma", "tweedie")
SIGMOID = ("binary", "cross_entropy", "xentropy")


def read_forest(text: str) -> ForestText:
    """Read a LightGBM model text.

    Parameters
    ----------
    text : str
        From ``booster.model_to_string()``.

    Returns
    -------
    ForestText
    """
    parts = text.split("\nTree=")
    header = dict(line.split("=", 1) for line in parts[0].splitlines() if "=" in line)
    header["average_output"] = "yes" if "\naverage_output" in parts[0] else ""
    bodies = [dict(line.split("=", 1) for line in p.split("\n\n")[0].splitlines() if "=" in line) for p in parts[1:]]
    reason = _refusal(header, bodies)
    return ForestText(header, () if reason else tuple(_tree(b) for b in bodies), reason)


def _refusal(header: dict[str, str], bodies: list[dict[str, str]]) -> str:
    words = header.get("objective", "").split()
    if int(header.get("num_class", "1")) > 1 or int(header.get("num_tree_per_iteration", "1")) > 1:
        return "it has more than one class"
    if header["average_output"]:
        return "its trees are averaged, not summed"
    if words and words[0] not in PLAIN + EXPONENTIAL + SIGMOID:
        return f"its objective {words[0]} is not known here"
    for body in bodies:
        if int(body.get("num_cat", "0")) > 0:
            return "it splits on categories"
        if int(body.get("is_linear", "0")) > 0:
            return "its leaves are linear models"
        if int(body["num_leaves"]) > MOST_LEAVES:
            return f"a tree has {body['num_leaves']} leaves, more than {MOST_LEAVES}"
        if "inf" in body["leaf_value"] or "nan" in body["leaf_value"]:
            return "a leaf value is not finite"
    return ""


def _tree(body: dict[str, str]) -> Tree:
    def numbers(key: str, kind: type) -> np.ndarray:
        return np.array([kind(v) for v in body.get(key, "").split()], np.float64 if kind is float else np.int64)

    return Tree(
        numbers("split_feature", int),
        numbers("threshold", float),
        numbers("left_child", int),
        numbers("right_child", int),
        numbers("decision_type", int),
        numbers("leaf_value", float),
    )
