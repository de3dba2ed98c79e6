"""Reflectance in the ten bands: leaf and canopy by PROSPECT-D and 4SAIL, water, ground, snow.

Canopies and leaves come from the ``prosail`` library (Jacquemoud et al. 2009, Remote Sens. Environ. 113:S56; Verhoef et al.
2007, IEEE TGRS 45:1808). Over a Lambertian background of reflectance ``r`` a layer's reflectance is
``c + t r / (1 - s r)``; a layer table holds c, t and s. Spectra of bark, dark organic ground, gravel, snow and ice are
typed from memory of common spectral collections.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import prosail
from prosail.FourSAIL import foursail

from inundate.common.codes import BAND_ROLES

WAVELENGTHS = np.arange(400, 2501)
CENTRES_NM = np.array([492.4, 559.8, 664.6, 704.1, 740.5, 782.8, 832.8, 864.7, 1613.7, 2202.4])
"""Band centres by role order; with the widths, the mission's published nominal values, typed from memory."""
WIDTHS_NM = np.array([66.0, 36.0, 31.0, 15.0, 15.0, 20.0, 106.0, 21.0, 91.0, 175.0])
N_BANDS = len(BAND_ROLES)
LAI_STEP, N_LAI = 0.1, 71
WAI_STEP, N_WAI = 0.05, 41
DEPTH_STEP_M, N_DEPTH = 0.02, 91
GROUND_KINDS = ("floor", "meadow", "field", "gravel")
N_MIX, N_WET = 11, 11


def band_mean(spectrum: np.ndarray) -> np.ndarray:
    """Average a spectrum (2101 values, 400..2500 nm) over Gaussian bands; shape (10,)."""
    sigma = WIDTHS_NM / 2.3548
    weight = np.exp(-0.5 * ((WAVELENGTHS[None, :] - CENTRES_NM[:, None]) / sigma[:, None]) ** 2)
    return (weight * spectrum[None, :]).sum(axis=1) / weight.sum(axis=1)


@dataclass(frozen=True, slots=True)
class Leaf:
    """Leaf of PROSPECT-D and the mean leaf angle of its canopy (degrees, ellipsoidal)."""

    n: float
    cab: float
    car: float
    brown: float
    cw: float
    cm: float
    ant: float
    angle: float


LEAVES = {
    "green": Leaf(1.6, 45, 9, 0.0, 0.012, 0.006, 0.0, 45),
    "autumn": Leaf(1.8, 7, 9, 0.35, 0.008, 0.006, 1.5, 45),
    "needle": Leaf(2.2, 52, 10, 0.12, 0.020, 0.018, 0.0, 55),
    "herb": Leaf(1.5, 38, 8, 0.0, 0.014, 0.005, 0.0, 62),
    "dead": Leaf(2.1, 2, 2, 0.6, 0.002, 0.010, 0.0, 55),
}
_KNOTS_NM = (400, 490, 560, 665, 705, 740, 783, 865, 1610, 2200, 2500)
_TYPED = {
    "bark": (0.07, 0.09, 0.12, 0.15, 0.17, 0.19, 0.21, 0.25, 0.36, 0.27, 0.22),
    "organic": (0.035, 0.045, 0.055, 0.075, 0.085, 0.095, 0.105, 0.125, 0.22, 0.19, 0.17),
    "gravel": (0.14, 0.18, 0.22, 0.25, 0.26, 0.27, 0.28, 0.30, 0.37, 0.34, 0.32),
    "snow": (0.80, 0.84, 0.85, 0.85, 0.84, 0.82, 0.81, 0.77, 0.10, 0.06, 0.05),
    "ice": (0.42, 0.44, 0.43, 0.37, 0.33, 0.30, 0.27, 0.22, 0.03, 0.02, 0.02),
}


@cache
def _typed(name: str) -> np.ndarray:
    return band_mean(np.interp(WAVELENGTHS, _KNOTS_NM, _TYPED[name]))


@cache
def leaf_optics(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Return band reflectance and transmittance of a leaf (or of bark, opaque); each shape (10,)."""
    if name == "bark":
        return _typed("bark"), np.full(N_BANDS, 1e-4)
    leaf = LEAVES[name]
    _, refl, trans = prosail.run_prospect(
        leaf.n, leaf.cab, leaf.car, leaf.brown, leaf.cw, leaf.cm, ant=leaf.ant, prospect_version="D"
    )
    return band_mean(refl), band_mean(trans)


def sky_share(sun_zenith_deg: float) -> np.ndarray:
    """Share of light from the sky in each band: stronger in blue and in low sun (common practice, no source)."""
    air_mass = 1.0 / np.cos(np.radians(min(sun_zenith_deg, 80.0)))
    return np.clip(0.17 * (CENTRES_NM / 500.0) ** -1.5 * air_mass**0.6, 0.02, 0.6)


def _layer(name: str, area_index: float, angle: float, sun_zenith_deg: float) -> np.ndarray:
    """One layer's c, t, s by band; shape (3, 10)."""
    rho, tau = leaf_optics(name)
    terms = foursail(rho, tau, angle, 0.0, 2, area_index, 0.05, sun_zenith_deg, 3.0, 90.0, np.zeros(N_BANDS))
    tss, too, tsstoo, rdd, tdd, _, tsd, rdo, tdo, rso = terms[:10]
    sky = sky_share(sun_zenith_deg)
    through = (1 - sky) * (tsstoo + (tss + tsd) * tdo + tsd * too) + sky * tdd * (too + tdo)
    return np.stack([(1 - sky) * rso + sky * rdo, through, rdd * np.ones(N_BANDS)])


@cache
def layer_table(name: str, sun_zenith_deg: float) -> np.ndarray:
    """Return the layer table of a leaf canopy: shape (N_LAI, 3, 10), LAI 0, 0.1 ... 7.0; (N_WAI, 3, 10) for bark."""
    wood = name == "bark"
    n, step = (N_WAI, WAI_STEP) if wood else (N_LAI, LAI_STEP)
    angle = 72.0 if wood else LEAVES[name].angle
    wanted = np.arange(n) * step
    knots = np.unique(np.concatenate([[0.0], np.geomspace(step, wanted[-1], 13)]))
    values = np.empty((knots.size, 3, N_BANDS))
    values[0, 0], values[0, 1], values[0, 2] = 0.0, 1.0, 0.0
    for i, index in enumerate(knots[1:], start=1):
        values[i] = _layer(name, float(index), angle, sun_zenith_deg)
    flat = values.reshape(knots.size, -1)
    out = np.stack([np.interp(wanted, knots, flat[:, j]) for j in range(flat.shape[1])], axis=1)
    return out.reshape(n, 3, N_BANDS).astype(np.float32)


def view_extinction(name: str) -> float:
    """Extinction per unit area index looking straight down: the ground seen is ``exp(-k index)``."""
    angle = 72.0 if name == "bark" else LEAVES[name].angle
    rho, tau = leaf_optics(name)
    too = foursail(rho, tau, angle, 0.0, 2, 1.0, 0.05, 40.0, 0.0, 0.0, np.zeros(N_BANDS))[1]
    return float(-np.log(np.mean(too)))


@cache
def water_absorption() -> np.ndarray:
    """Absorption of pure water in each band, 1/m, from the PROSPECT water spectrum."""
    return 100.0 * band_mean(np.asarray(prosail.spectral_lib.prospectd.kw))


def through_water(bottom: np.ndarray, depth_m: np.ndarray | float, stain: float, cloudy: float) -> np.ndarray:
    """Return reflectance of a water column over a bottom.

    Parameters
    ----------
    bottom : ndarray, shape (10,)
        Reflectance of the dry bottom.
    depth_m : float or ndarray of shape (depth, 1)
    stain : float
        Absorption by dissolved organic matter at 440 nm, 1/m.
    cloudy : float
        Backscatter by particles at 550 nm, 1/m.

    Returns
    -------
    ndarray, shape (10,) or (depth, 10)

    Notes
    -----
    Shallow-water form of Maritorena et al. 1994 (Limnol. Oceanogr. 39:1689), deep term 0.33 bb / (a + bb) (Gordon et al.
    1975, Appl. Opt. 14:417), the surface by 0.54 R / (1 - 0.48 R). At depth 0 it gives wet ground.
    """
    absorb = water_absorption() + stain * np.exp(-0.016 * (CENTRES_NM - 440.0)) + 0.3 * cloudy
    scatter = 0.0008 * (500.0 / CENTRES_NM) ** 4.3 + cloudy * (550.0 / CENTRES_NM)
    deep = 0.33 * scatter / (absorb + scatter)
    light = np.exp(-2.4 * (absorb + scatter) * depth_m)
    under = deep + (bottom - deep) * light
    return 0.54 * under / (1 - 0.48 * under)


@cache
def ground_table() -> np.ndarray:
    """Return ground reflectance, shape (kind, N_MIX, N_WET, 10).

    Mix runs from leaf litter to dark organic ground (kind ``floor``), or from darker to brighter soil; wetness from dry to
    saturated. Wet ground is a thin film of water in the pores (Twomey et al. 1986, Appl. Opt. 25:431, for the darkening).
    """
    soils = prosail.spectral_lib.soil
    bright, dark = band_mean(np.asarray(soils.rsoil1)), band_mean(np.asarray(soils.rsoil2))
    rho, tau = leaf_optics("dead")
    litter = (
        np.asarray(foursail(rho, tau, 22.0, 0.0, 2, 3.5, 0.05, 45.0, 3.0, 90.0, 0.6 * dark)[17], dtype=float) * 0.72
    )
    pairs = {
        "floor": (litter, _typed("organic")),
        "meadow": (0.7 * dark + 0.02, 0.5 * bright),
        "field": (0.9 * dark + 0.02, 0.95 * bright),
        "gravel": (0.9 * _typed("gravel"), 1.1 * _typed("gravel")),
    }
    out = np.empty((len(GROUND_KINDS), N_MIX, N_WET, N_BANDS))
    for k, kind in enumerate(GROUND_KINDS):
        first, last = pairs[kind]
        for m, mix in enumerate(np.linspace(0, 1, N_MIX)):
            dry = (1 - mix) * first + mix * last
            wet = through_water(dry, 0.00022, 0.0, 0.0) * 1.10
            for w, wetness in enumerate(np.linspace(0, 1, N_WET)):
                out[k, m, w] = (1 - wetness) * dry + wetness * wet
    return out.astype(np.float32)


def water_table(stain: float, cloudy: float, mix: float, sun_zenith_deg: float) -> np.ndarray:
    """Return water reflectance by depth, shape (N_DEPTH, 10), over a floor of litter and organic ground."""
    floor = ground_table()[0, round(mix * (N_MIX - 1)), 0].astype(float)
    depth = (np.arange(N_DEPTH) * DEPTH_STEP_M)[:, None]
    seen = through_water(floor, np.maximum(depth, 0.003), stain, cloudy)
    return (seen + 0.004 + 0.02 * sky_share(sun_zenith_deg)).astype(np.float32)


def cover_spectra() -> tuple[np.ndarray, np.ndarray]:
    """Return the spectra of snow and of white ice, each shape (10,) float32."""
    return _typed("snow").astype(np.float32), _typed("ice").astype(np.float32)
