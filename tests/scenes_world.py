"""A small landscape seen many times: known shift, gain and haze, clouds, water that comes and goes, leaves on and off."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from inundate.common.grid import Window
from inundate.scenes import Block, View

SIDE, OVER = 120, 4
BANDS = ("green", "red", "nir", "swir16")
WINDOW = Window(0, SIDE, 0, SIDE)
_BARE = np.array(
    [
        [0.05, 0.08, 0.06, 0.1, 0.07],
        [0.06, 0.1, 0.05, 0.14, 0.08],
        [0.18, 0.22, 0.25, 0.3, 0.2],
        [0.2, 0.25, 0.15, 0.3, 0.22],
    ]
)
_LEAFY = np.array(
    [
        [0.06, 0.05, 0.07, 0.05, 0.06],
        [0.04, 0.05, 0.06, 0.03, 0.04],
        [0.35, 0.4, 0.3, 0.45, 0.38],
        [0.17, 0.2, 0.22, 0.18, 0.15],
    ]
)
_PAD = 8


def _field(seed: int, sigma: float) -> np.ndarray:
    n = (SIDE + 2 * _PAD) * OVER
    field = ndimage.gaussian_filter(np.random.default_rng(seed).standard_normal((n, n)), sigma, mode="wrap")
    return field / field.std()


class World:
    """Ground at a quarter of a pixel."""

    def __init__(self, seed: int = 1) -> None:
        self.land = np.digitize(_field(seed, 20), [-0.8, -0.2, 0.3, 0.9])
        self.forest = _field(seed + 1, 15) > 0
        self.grain = _field(seed + 2, 3)
        self.low = _field(seed + 3, 12)

    def view(
        self,
        name: str,
        dx: float = 0.0,
        dy: float = 0.0,
        *,
        leafy: bool = False,
        cloud: float = 0.2,
        noise: float = 0.004,
        gain: float = 1.0,
        haze: float = 0.0,
        missed: float = 0.1,
    ) -> View:
        """Draw a view; a tenth of the cloud is missed by the mask."""
        rng = np.random.default_rng(int.from_bytes(name.encode(), "little") % 2**32)
        table = _LEAFY if leafy else _BARE
        ground = np.stack([row[self.land] * (1 + 0.05 * self.grain) for row in table])
        ground[:, self.low > (1.0 if leafy else 0.6 + 0.4 * rng.random())] = np.array([0.05, 0.04, 0.03, 0.02])[:, None]
        if leafy:
            ground[:, self.forest] = 0.5 * ground[:, self.forest] + 0.5 * np.array([0.04, 0.04, 0.4, 0.2])[:, None]
        edge = _PAD * OVER
        moved = np.stack([ndimage.shift(band, (dy * OVER, dx * OVER), order=1) for band in ground])
        moved = moved[:, edge:-edge, edge:-edge]
        seen = moved.reshape(len(BANDS), SIDE, OVER, SIDE, OVER).mean(axis=(2, 4))
        seen = gain * seen + haze + noise * rng.standard_normal(seen.shape)
        code = np.zeros((SIDE, SIDE), np.uint8)
        if cloud > 0:
            thick = ndimage.gaussian_filter(rng.standard_normal((SIDE, SIDE)), 10)
            seen[:, thick > np.quantile(thick, 1 - cloud)] += 0.3
            code[thick > np.quantile(thick, 1 - cloud * (1 - missed))] = 1
        return View(name, BANDS, (Block(WINDOW, seen.astype(np.float32), code),))
