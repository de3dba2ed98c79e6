"""Draw the surface of one view: 2.5 m cells to 10 m and 20 m bands with the sensor's blur and misregistration."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from scipy import sparse
from scipy.special import ndtr

from inundate.reserve import spectra
from inundate.reserve.canopy import Cover
from inundate.reserve.terrain import ROUGH_M, Ground

BANDS_10M = (0, 1, 2, 6)
BANDS_20M = (3, 4, 5, 7, 8, 9)
BLUR_10M, BLUR_20M = 3.2, 5.0
"""Standard deviation (m) of the optics' blur, beside the pixel's own square; for a modulation transfer near 0.3 at Nyquist."""


@dataclass(frozen=True, slots=True)
class Surface:
    """State of the landscape at one view.

    Attributes
    ----------
    stage : ndarray of float64, shape (wetland,)
    water : ndarray of float32, shape (wetland, N_DEPTH, 10)
    leaves : ndarray of float32, shape (offset, N_LAI, 3, 10)
        Deciduous layer tables by leaf offset.
    share : ndarray of float32, shape (offset,)
        Share of full leaf.
    needles, bark : ndarray of float32
        Layer tables.
    herbs : ndarray of float32, shape (kind, N_LAI, 3, 10)
    herb_share : ndarray of float32, shape (kind,)
    beam : ndarray of float32, shape (row, column)
        Share of direct light.
    sky : ndarray of float32, shape (10,)
    wetness, snow_mm, ice_m : float
    """

    stage: np.ndarray
    water: np.ndarray
    leaves: np.ndarray
    share: np.ndarray
    needles: np.ndarray
    bark: np.ndarray
    herbs: np.ndarray
    herb_share: np.ndarray
    beam: np.ndarray
    sky: np.ndarray
    wetness: float
    snow_mm: float
    ice_m: float


def blur_weights(n_fine: int, per_pixel: int, blur_m: float, shift_m: float, fine_m: float) -> sparse.csr_matrix:
    """Return weights (pixel, cell) of a pixel-wide box convolved with a Gaussian; rows add to 1, edges repeat.

    A positive ``shift_m`` moves the image content towards higher cell numbers.
    """
    n = n_fine // per_pixel
    half = 0.5 * per_pixel * fine_m
    reach = int(np.ceil((half + 3.2 * blur_m + abs(shift_m)) / fine_m)) + 1
    centre = (np.arange(n) + 0.5) * per_pixel
    taps = np.floor(centre)[:, None].astype(np.int64) + np.arange(-reach, reach + 1)[None, :]
    away = (taps + 0.5 - centre[:, None]) * fine_m + shift_m
    edge = fine_m / 2
    weight = np.zeros(away.shape)
    for offset in (-edge * 0.5, edge * 0.5):
        weight += ndtr((away + offset + half) / blur_m) - ndtr((away + offset - half) / blur_m)
    weight[weight < 1e-4] = 0.0
    weight /= weight.sum(axis=1, keepdims=True)
    rows = np.repeat(np.arange(n), taps.shape[1])
    cols = np.clip(taps, 0, n_fine - 1).ravel()
    matrix = sparse.csr_matrix((weight.ravel(), (rows, cols)), shape=(n, n_fine))
    matrix.sum_duplicates()
    matrix.eliminate_zeros()
    return matrix


@numba.njit(cache=True, nogil=True)
def _layer(value: np.ndarray, table: np.ndarray) -> None:
    """Put a layer over ``value`` (10,), in place; ``table`` (3, 10) holds c, t, s."""
    for b in range(10):
        value[b] = table[0, b] + table[1, b] * value[b] / (np.float32(1.0) - table[2, b] * value[b])


@numba.njit(cache=True, nogil=True)
def _floor(value: np.ndarray, ground: np.ndarray, water: np.ndarray, wet: float, texture: float, white: tuple) -> None:
    """Reflectance of water, ground, ice and snow of one cell, into ``value``."""
    snow, ice, opaque, frozen, snowy = white
    cover_dry, cover_ice = snowy, snowy * frozen * 0.8
    for b in range(10):
        dry = ground[b] * texture
        dry += cover_dry * (snow[b] - dry)
        aqua = water[b]
        if frozen > 0.0:
            aqua += frozen * opaque * (ice[b] - aqua)
            aqua += cover_ice * (snow[b] - aqua)
        value[b] = wet * aqua + (1.0 - wet) * dry


@numba.njit(cache=True, nogil=True)
def _draw_row(r: int, cells: tuple, ground: tuple, state: tuple, tables: tuple, out: tuple) -> None:
    """Draw one row of cells: reflectance into out[0] (10, column), water share, visible share and whiteness into out[1]."""
    trees, lai, wai, offset, herb, herb_lai, kind, mix, texture, patch = cells
    elevation, wetland, inside, lowest = ground
    stage, wetness, snow_mm, ice_m, beam, sky, share, herb_share = state
    water, leaves, needles, bark, herbs, floors, snow, ice, k_leaf, k_needle, k_bark, k_herb = tables
    row, facts = out
    value = np.empty(10, np.float32)
    blank = np.zeros(10, np.float32)
    for c in range(elevation.shape[1]):
        w = wetland[r, c]
        wet, damp, depth = 0.0, wetness, 0.0
        if w >= 0:
            above = stage[w] - (elevation[r, c] - lowest[w])
            wet = min(max(0.5 + above / ROUGH_M, 0.0), 1.0) * inside[r, c]
            damp = max(damp, min(max(1.0 + above / 0.28, 0.0), 1.0))
            depth = max(above, 0.0)
        bumpy = patch[r, c]
        frozen = min(max((ice_m - 0.004 - 0.003 * bumpy - 0.012 * depth) / 0.008, 0.0), 1.0) if ice_m > 0 else 0.0
        snowy = min(max((snow_mm / 7.0) + 0.3 * bumpy * min(snow_mm, 1.0), 0.0), 1.0) if snow_mm > 0.3 else 0.0
        opaque = min(max(0.06 + 3.5 * ice_m + 0.05 * bumpy, 0.02), 0.6)
        aqua = water[w, min(int(depth / 0.02 + 0.5), 90)] if wet > 0 else blank
        lie = floors[kind[r, c], mix[r, c], int(damp * 10 + 0.5)]
        _floor(value, lie, aqua, wet, texture[r, c], (snow, ice, opaque, frozen, snowy))
        h = herb[r, c]
        reach = herb_lai[r, c] * herb_share[h]
        if h == 0:
            reach *= 1.0 - wet * min(depth / 0.25, 1.0)
        reach *= 1.0 - 0.7 * snowy
        n_herb = int(reach + 0.5)
        if n_herb > 0:
            _layer(value, herbs[h, min(n_herb, 70)])
        dark = k_herb * n_herb * 0.1
        if wai[r, c] > 0:
            _layer(value, bark[wai[r, c]])
            dark += k_bark * wai[r, c] * 0.05
        if trees[r, c] == 1:
            n_leaf = int(lai[r, c] * share[offset[r, c]] + 0.5)
            if n_leaf > 0:
                _layer(value, leaves[offset[r, c], n_leaf])
                dark += k_leaf * n_leaf * 0.1
        elif trees[r, c] == 2 and lai[r, c] > 0:
            _layer(value, needles[lai[r, c]])
            dark += k_needle * lai[r, c] * 0.1
        lit = beam[r, c]
        for b in range(10):
            row[b, c] = value[b] * (sky[b] + (1.0 - sky[b]) * lit)
        facts[0, c] = wet
        facts[1, c] = np.exp(-dark)
        facts[2, c] = max(snowy, wet * frozen)


@numba.njit(cache=True, nogil=True)
def _across(sums: np.ndarray, indptr: np.ndarray, indices: np.ndarray, data: np.ndarray) -> np.ndarray:
    """Gather cells of each row into pixels: (band, row, cell) to (band, row, pixel)."""
    bands, rows, n = sums.shape[0], sums.shape[1], indptr.size - 1
    out = np.zeros((bands, rows, n), np.float32)
    for k in range(bands):
        for i in range(rows):
            for j in range(n):
                for p in range(indptr[j], indptr[j + 1]):
                    out[k, i, j] += np.float32(data[p]) * sums[k, i, indices[p]]
    return out


@numba.njit(cache=True, nogil=True)
def _draw(
    cells: tuple, ground: tuple, state: tuple, tables: tuple, tall: tuple, wide: tuple
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Draw all rows and gather them into pixels; tall and wide hold (indptr, indices, data) for 10 m, then 20 m."""
    n_fine = ground[0].shape[0]
    n10, n20 = n_fine // 4, n_fine // 8
    sum10 = np.zeros((4, n10, n_fine), np.float32)
    sum20 = np.zeros((6, n20, n_fine), np.float32)
    facts10 = np.zeros((3, n10, n10), np.float32)
    row = np.empty((10, n_fine), np.float32)
    facts = np.empty((3, n_fine), np.float32)
    first, second = np.array(BANDS_10M), np.array(BANDS_20M)
    for r in range(n_fine):
        _draw_row(r, cells, ground, state, tables, (row, facts))
        for p in range(tall[0][r], tall[0][r + 1]):
            for k in range(4):
                sum10[k, tall[1][p]] += np.float32(tall[2][p]) * row[first[k]]
        for p in range(tall[3][r], tall[3][r + 1]):
            for k in range(6):
                sum20[k, tall[4][p]] += np.float32(tall[5][p]) * row[second[k]]
        for f in range(3):
            for c in range(n_fine):
                facts10[f, r // 4, c // 4] += facts[f, c] / np.float32(16.0)
    out10 = _across(sum10, wide[0], wide[1], wide[2])
    out20 = _across(sum20, wide[3], wide[4], wide[5])
    return out10, out20, facts10


def draw_surface(
    cover: Cover, ground: Ground, surface: Surface, dx_m: float, dy_m: float, fine_m: float = 2.5
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Draw the landscape as seen from above, without air or clouds.

    Parameters
    ----------
    cover : Cover
    ground : Ground
    surface : Surface
    dx_m, dy_m : float
        How far the image content lies east and north of its true place.

    Returns
    -------
    ndarray (4, row, column) of blue, green, red, nir at 10 m; ndarray (6, row, column) of the other bands at 20 m; ndarray
    (3, row, column) at 10 m in true place: share under water, share of ground visible, share white with snow or ice
    """
    n = ground.elevation.shape[0]
    down10 = blur_weights(n, 4, BLUR_10M, -dy_m, fine_m).tocsc()
    down20 = blur_weights(n, 8, BLUR_20M, -dy_m, fine_m).tocsc()
    wide10 = blur_weights(n, 4, BLUR_10M, dx_m, fine_m)
    wide20 = blur_weights(n, 8, BLUR_20M, dx_m, fine_m)
    tall = (down10.indptr, down10.indices, down10.data, down20.indptr, down20.indices, down20.data)
    wide = (wide10.indptr, wide10.indices, wide10.data, wide20.indptr, wide20.indices, wide20.data)
    cells = (
        cover.trees, cover.lai, cover.wai, cover.offset, cover.herb, cover.herb_lai,
        cover.ground, cover.mix, cover.texture, cover.patch,
    )  # fmt: skip
    s = surface
    state = (s.stage, s.wetness, s.snow_mm, s.ice_m, s.beam, s.sky, s.share, s.herb_share)
    snow, ice = spectra.cover_spectra()
    k = [spectra.view_extinction(name) for name in ("green", "needle", "bark", "herb")]
    tables = (s.water, s.leaves, s.needles, s.bark, s.herbs, spectra.ground_table(), snow, ice, *k)
    return _draw(cells, (ground.elevation, ground.wetland, ground.share, ground.lowest_m), state, tables, tall, wide)
