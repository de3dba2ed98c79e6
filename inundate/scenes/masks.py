"""From the classes or bit fields of a mask layer to view codes."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np

from inundate.common.codes import ViewCode

MASK_CODES = {
    "clear": ViewCode.CLEAR,
    "cloud": ViewCode.CLOUD,
    "shadow": ViewCode.SHADOW,
    "snow_ice": ViewCode.SNOW_ICE,
    "fill": ViewCode.FILL,
}
_TABLE_SIZE = 65536


@dataclass(frozen=True, slots=True)
class MaskRule:
    """One rule of a mask: where it holds, the pixel gets ``code``.

    Attributes
    ----------
    code : ViewCode
    values : tuple of int
        Whole values for which the rule holds; empty for a bit rule.
    low_bit, n_bits : int
        A field of ``n_bits`` bits from ``low_bit`` (0 = least significant); ``n_bits`` 0 for a value rule.
    at_least : int
        The bit rule holds where the field's number is this or more.
    """

    code: ViewCode
    values: tuple[int, ...] = ()
    low_bit: int = 0
    n_bits: int = 0
    at_least: int = 1


@dataclass(frozen=True, slots=True)
class MaskRules:
    """Ordered rules of a mask layer; the first that holds decides, ``otherwise`` where none does."""

    rules: tuple[MaskRule, ...]
    otherwise: ViewCode = ViewCode.FILL
    fill: int | None = field(default=None)

    def table(self) -> np.ndarray:
        """Return the view code (uint8) of each mask value 0..65535."""
        return _table(self)

    def decode(self, values: np.ndarray) -> np.ndarray:
        """Turn mask values into view codes.

        Parameters
        ----------
        values : ndarray
            Mask values of any shape; integer, or float holding whole numbers. NaN, negative and values above 65535
            become FILL.

        Returns
        -------
        ndarray of uint8, same shape
        """
        values = np.asarray(values)
        table = self.table()
        if values.dtype in (np.uint8, np.uint16):
            return table[values]
        known = np.isfinite(values) & (values >= 0) & (values < _TABLE_SIZE)
        index = np.where(known, values, 0).astype(np.int64)
        return np.where(known, table[index], np.uint8(ViewCode.FILL)).astype(np.uint8)


@lru_cache(maxsize=64)
def _table(rules: MaskRules) -> np.ndarray:
    value = np.arange(_TABLE_SIZE)
    table = np.full(_TABLE_SIZE, int(rules.otherwise), np.uint8)
    for rule in reversed(rules.rules):
        if rule.n_bits:
            holds = (value >> rule.low_bit & ((1 << rule.n_bits) - 1)) >= rule.at_least
        else:
            holds = np.isin(value, rule.values)
        table[holds] = int(rule.code)
    if rules.fill is not None and 0 <= rules.fill < _TABLE_SIZE:
        table[rules.fill] = int(ViewCode.FILL)
    table.setflags(write=False)
    return table
