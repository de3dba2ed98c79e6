"""Settings of the stage-area calibrator; every default is stated with its ground."""

from __future__ import annotations

from dataclasses import dataclass

from inundate.common.errors import InputError
from inundate.relation.families import FAMILIES


@dataclass(frozen=True, slots=True)
class RelationOptions:
    """Settings of :func:`inundate.relation.fit_relations`.

    Attributes
    ----------
    families : tuple of str
        Families that may be chosen: any of ``power``, ``power_offset``, ``spline``, ``elevation``.
    level : float
        Share of the truth that bands should hold, 0..1.
    n_draws : int
        Curves drawn for each wetland's bands.
    nu : float
        Degrees of freedom of the Student-t errors (4: outliers lose weight; common practice).
    n_blocks : int
        Contiguous blocks of dates that are held out in turn.
    pool : bool
        Learn the prior of the shape from all wetlands; false keeps the wide default.
    area_sd_share : float
        Area sd where a pair has none, as a share of the largest extent.
    stage_sd_m : float
        Stage sd where a pair has none, m.
    stage_limit_m : float
        Stages above it are not believed (readings in centimetres); where elevation is known the limit is ten times the
        bowl's depth plus 1 m, if lower.
    shift_alpha : float
        Chance, for each wetland, that noise alone is reported as a shift.
    shift_least_m : float
        Smallest stage shift reported, m.
    shift_least_share : float
        Smallest extent shift reported, as a share of the extent.
    """

    families: tuple[str, ...] = FAMILIES
    level: float = 0.90
    n_draws: int = 200
    nu: float = 4.0
    n_blocks: int = 5
    pool: bool = True
    area_sd_share: float = 0.05
    stage_sd_m: float = 0.02
    stage_limit_m: float = 15.0
    shift_alpha: float = 0.002
    shift_least_m: float = 0.03
    shift_least_share: float = 0.10

    def __post_init__(self) -> None:
        """Check the settings."""
        unknown = [name for name in self.families if name not in FAMILIES]
        if unknown or not self.families:
            message = f"families: got {self.families!r}; each must be one of {FAMILIES}; name at least one"
            raise InputError(message)
        rules = (
            ("level", self.level, 0.5 <= self.level < 1, "between 0.5 and 1"),
            ("n_draws", self.n_draws, 20 <= self.n_draws <= 5000, "between 20 and 5000"),
            ("nu", self.nu, 1 <= self.nu <= 200, "between 1 and 200"),
            ("n_blocks", self.n_blocks, 2 <= self.n_blocks <= 50, "between 2 and 50"),
            ("stage_limit_m", self.stage_limit_m, self.stage_limit_m > 0, "above 0 m"),
            ("shift_alpha", self.shift_alpha, 0 < self.shift_alpha < 0.5, "between 0 and 0.5"),
        )
        for name, value, good, rule in rules:
            if not good:
                message = f"[relation] {name}: got {value!r}; it must be {rule}; change it in the pipeline file"
                raise InputError(message)
