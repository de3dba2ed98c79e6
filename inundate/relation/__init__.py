"""Stage-area relations: from pairs of stage and observed extent to area and volume with honest bands.

:func:`make_pairs` joins observed extents with daily stage; :func:`fit_relations` fits every wetland at once (power law,
power law with stage offset, monotone spline, elevation), chooses by held-out date blocks, pools across wetlands and reports
shifts; :class:`StageAreaRelation` is the same for one wetland as a scikit-learn estimator.
"""

from inundate.relation.estimator import StageAreaRelation
from inundate.relation.fit import fit_relations
from inundate.relation.lasting import leaf_factors, widen_bands, with_shared_errors
from inundate.relation.options import RelationOptions
from inundate.relation.outlets import believed_outlets, lasting_parts, outlet_levels, through_outlets, with_outlets
from inundate.relation.pairs import best_pairs, make_pairs
from inundate.relation.relations import RelationSet

__all__ = [
    "RelationOptions",
    "RelationSet",
    "StageAreaRelation",
    "believed_outlets",
    "best_pairs",
    "fit_relations",
    "lasting_parts",
    "leaf_factors",
    "make_pairs",
    "outlet_levels",
    "through_outlets",
    "widen_bands",
    "with_outlets",
    "with_shared_errors",
]
