"""What a reserve of a given size holds: grid, days, counts. No science here, only sizes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from inundate.common.errors import InputError
from inundate.common.grid import Grid

FINE_STEP_M = 2.5
CELLS_PER_PIXEL = 4
CRS = "EPSG:32633"
LATITUDE_DEG = 43.2


@dataclass(frozen=True, slots=True)
class Plan:
    """Sizes of one reserve.

    Attributes
    ----------
    seed : int
    size : str
        ``default`` or ``small``.
    n_wetlands, n_loggers, n_labels : int
    side_px : int
        Pixels of 10 m along each side of the square area (even).
    area_limits_ha : tuple of float
        Smallest and largest wetland, hectares.
    first_day : str
        ISO date of the first day.
    n_days : int
    view_every_days : int
    scene_limits : tuple of int
        Fewest and most scenes that are kept.
    """

    seed: int
    size: str
    n_wetlands: int
    n_loggers: int
    n_labels: int
    side_px: int
    area_limits_ha: tuple[float, float]
    first_day: str
    n_days: int
    view_every_days: int
    scene_limits: tuple[int, int]

    @property
    def grid(self) -> Grid:
        """The 10 m grid of the scenes."""
        return Grid(CRS, 431_200.0, 4_783_600.0, 10.0, self.side_px, self.side_px)

    @property
    def fine(self) -> Grid:
        """The 2.5 m grid on which the ground is known."""
        n = self.side_px * CELLS_PER_PIXEL
        return Grid(CRS, self.grid.west, self.grid.north, FINE_STEP_M, n, n)

    @property
    def days(self) -> pd.DatetimeIndex:
        """All days, midnight UTC."""
        return pd.date_range(self.first_day, periods=self.n_days, freq="D", unit="ns")


def make_plan(seed: int, size: str) -> Plan:
    """Return the plan of a size.

    Raises
    ------
    InputError
        Where the size is unknown or the seed is not a non-negative whole number.
    """
    if isinstance(seed, bool) or not isinstance(seed, int | np.integer) or seed < 0:
        message = f"seed: got {seed!r}; it must be a whole number of 0 or more; give for example seed=1"
        raise InputError(message)
    if size == "default":
        return Plan(int(seed), size, 44, 11, 2000, 360, (0.05, 5.0), "2031-01-01", 1096, 5, (130, 170))
    if size == "small":
        return Plan(int(seed), size, 8, 3, 420, 120, (0.06, 2.4), "2031-10-01", 548, 10, (36, 44))
    message = f"size: got {size!r}; the reserve comes in 'default' and 'small'; give one of these"
    raise InputError(message)
