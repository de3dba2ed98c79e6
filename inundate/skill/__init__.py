"""Scores against field-measured stage, held-out views and loggers, and extents walked on the ground.

Tables in, one plain dictionary out. Measures come from ``scores``, ``scikit-learn`` and ``scipy``; what is done here is
pairing and grouping.
"""

from inundate.skill.measures import area_measures, interval_measures, probability_measures, wet_dry_measures
from inundate.skill.pairing import pair_with_stage, size_class
from inundate.skill.scoring import SkillInputs, headline, score_all, unusual

__all__ = [
    "SkillInputs",
    "area_measures",
    "headline",
    "interval_measures",
    "pair_with_stage",
    "probability_measures",
    "score_all",
    "size_class",
    "unusual",
    "wet_dry_measures",
]
