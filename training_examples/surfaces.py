"""Spectra of surfaces, 400 to 2500 nm at 1 nm, by published radiative-transfer models and generic shapes.

Every function takes a ``numpy.random.Generator``, draws its own parameters, and returns reflectance 0..1 as float64 of
shape (2101,). Parameter ranges are wide on purpose ("common practice, no source" unless a source is named).
"""

from __future__ import annotations

import numpy as np
from prosail import run_prospect, run_sail, spectral_lib

WAVE_NM = np.arange(400, 2501, dtype=float)
Rng = np.random.Generator

# Absorption of pure water, 1/m. Below 727 nm: Pope & Fry 1997 (Applied Optics 36:8710), anchor values typed from
# memory; above: the water absorption carried by PROSPECT-D (1/cm of water thickness).
_POPE_FRY = {
    400: 0.0066,
    440: 0.0064,
    480: 0.0127,
    520: 0.0409,
    560: 0.0619,
    600: 0.2224,
    640: 0.311,
    680: 0.465,
    720: 1.231,
}


def water_absorption() -> np.ndarray:
    """Return the absorption of pure water, 1/m, shape (2101,)."""
    leaf = 100.0 * spectral_lib.prospectd.kw
    anchors = np.exp(np.interp(WAVE_NM, list(_POPE_FRY), np.log(list(_POPE_FRY.values()))))
    return np.where(WAVE_NM < 727, anchors, np.maximum(leaf, anchors[WAVE_NM == 720][0]))


_AW = water_absorption()
_BBW = 0.5 * 0.00288 * (WAVE_NM / 500.0) ** -4.32  # Morel 1974, backscatter of pure water, 1/m


def uniform(rng: Rng, low: float, high: float) -> float:
    """Return one uniform draw."""
    return float(rng.uniform(low, high))


def log_uniform(rng: Rng, low: float, high: float) -> float:
    """Return one draw uniform in the logarithm."""
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def soil(rng: Rng) -> np.ndarray:
    """Dry to moist mineral soil: mix of the dry and wet soil carried by PROSAIL, brightness drawn."""
    mix = uniform(rng, 0, 1)
    return uniform(rng, 0.35, 1.25) * (mix * spectral_lib.soil.rsoil1 + (1 - mix) * spectral_lib.soil.rsoil2)


def mud(rng: Rng) -> np.ndarray:
    """Dark wet ground: dark soil under a film of water (Beer-Lambert, 0.05 to 1 mm, two ways), surface gloss added."""
    base = uniform(rng, 0.15, 0.75) * (0.5 * spectral_lib.soil.rsoil1 + 0.5 * spectral_lib.soil.rsoil2)
    organic = 1 - uniform(rng, 0, 0.6) * np.exp(-(WAVE_NM - 400) / uniform(rng, 300, 900))
    film_m = log_uniform(rng, 0.5e-4, 1.0e-3)
    return base * organic * np.exp(-2 * _AW * film_m) + uniform(rng, 0, 0.008)


def litter(rng: Rng) -> np.ndarray:
    """Dead leaves on the ground: stack of brown leaves (PROSPECT-D, SAIL), dry to soaked."""
    wet = uniform(rng, 0, 1)
    leaf = run_prospect(
        uniform(rng, 1.5, 2.6),
        uniform(rng, 0, 6),
        uniform(rng, 0, 5),
        uniform(rng, 0.4, 2.2),
        0.0008 + 0.012 * wet,
        uniform(rng, 0.004, 0.012),
        prospect_version="D",
        ant=0.0,
    )
    dark = 1 - uniform(rng, 0.1, 0.55) * wet
    stack = run_sail(
        leaf[1], leaf[2], uniform(rng, 1.5, 5), uniform(rng, 10, 35), 0.05, 40.0, 0.0, 0.0, rsoil0=mud(rng)
    )
    return dark * stack * np.exp(-2 * _AW * 2e-4 * wet)


def bark(rng: Rng) -> np.ndarray:
    """Stems and twigs: thick brown dry tissue (PROSPECT-D stack), brightness drawn."""
    leaf = run_prospect(
        2.5,
        uniform(rng, 0, 4),
        2.0,
        uniform(rng, 0.6, 1.6),
        uniform(rng, 5e-4, 4e-3),
        0.012,
        prospect_version="D",
        ant=0.0,
    )
    return uniform(rng, 0.35, 0.8) * run_sail(leaf[1], leaf[2], 6.0, 60.0, 0.05, 40.0, 0.0, 0.0, rsoil0=0.5 * soil(rng))


def built(rng: Rng) -> np.ndarray:
    """Roads, roofs, gravel: flat spectrum with a drawn level, a slope that levels off, and one broad dip."""
    level = log_uniform(rng, 0.05, 0.55)
    rise = level * uniform(rng, -0.25, 1.8) * (1 - np.exp(-(WAVE_NM - 400) / uniform(rng, 200, 900)))
    dip = 1 - uniform(rng, 0, 0.3) * np.exp(-(((WAVE_NM - uniform(rng, 1900, 2350)) / 220.0) ** 2))
    return np.clip((level + rise) * dip, 0.01, 0.9)


def water(rng: Rng, kind: str, sun_zenith_deg: float) -> np.ndarray:
    """Water body by the shallow-water model of Lee et al. 1998, 1999 (Applied Optics 37:6329, 38:3831).

    Parameters
    ----------
    kind : {"clear", "stained", "turbid", "green"}
    sun_zenith_deg : float
    """
    cdom = {"clear": (0.03, 0.8), "stained": (1.5, 18.0), "turbid": (0.2, 3.0), "green": (0.3, 3.0)}[kind]
    scatter = {"clear": (0.001, 0.015), "stained": (0.002, 0.04), "turbid": (0.08, 1.8), "green": (0.02, 0.25)}[kind]
    chl = {"clear": (0.3, 4), "stained": (0.5, 8), "turbid": (1, 15), "green": (15, 120)}[kind]
    pigment = 0.06 * log_uniform(rng, *chl) ** 0.65  # order of Bricaud et al. 1995, typed from memory
    shape = np.exp(-(((WAVE_NM - 440) / 60) ** 2)) + 0.5 * np.exp(-(((WAVE_NM - 675) / 14) ** 2))
    absorb = _AW + log_uniform(rng, *cdom) * np.exp(-uniform(rng, 0.013, 0.019) * (WAVE_NM - 440)) + pigment * shape
    back = _BBW + log_uniform(rng, *scatter) * (550 / WAVE_NM) ** uniform(rng, 0, 1.5)
    u, kappa = back / (absorb + back), absorb + back
    depth = log_uniform(rng, 0.04, 4.0)
    bottom = (mud, litter, soil)[int(rng.integers(3))](rng)
    sun = 1 / np.cos(np.arcsin(np.sin(np.radians(sun_zenith_deg)) / 1.34))
    deep = (0.084 + 0.17 * u) * u
    below = deep * (1 - np.exp(-(sun + 1.03 * np.sqrt(1 + 2.4 * u)) * kappa * depth))
    below += bottom / np.pi * np.exp(-(sun + 1.04 * np.sqrt(1 + 5.4 * u)) * kappa * depth)
    above = np.pi * 0.5 * below / (1 - 1.5 * below)
    gloss = log_uniform(rng, 0.001, 0.03)
    return above + gloss * (WAVE_NM / 550.0) ** -uniform(rng, 0, 0.5)


def green_leaf(rng: Rng) -> tuple[np.ndarray, np.ndarray]:
    """Reflectance and transmittance of a living leaf (PROSPECT-D)."""
    _, refl, trans = run_prospect(
        uniform(rng, 1.2, 2.2),
        uniform(rng, 18, 70),
        uniform(rng, 4, 14),
        uniform(rng, 0, 0.25),
        uniform(rng, 0.006, 0.022),
        uniform(rng, 0.003, 0.011),
        prospect_version="D",
        ant=0.0,
    )
    return refl, trans


def canopy(rng: Rng, lai: float, ground: np.ndarray, sun_zenith_deg: float) -> np.ndarray:
    """Leaf canopy over a ground (4SAIL), nadir view."""
    refl, trans = green_leaf(rng)
    return run_sail(
        refl, trans, lai, uniform(rng, 35, 68), uniform(rng, 0.01, 0.2), sun_zenith_deg, 0.0, 0.0, rsoil0=ground
    )


def senesced(rng: Rng, ground: np.ndarray, sun_zenith_deg: float) -> np.ndarray:
    """Standing dead grass or reed over a ground."""
    leaf = run_prospect(
        uniform(rng, 1.5, 2.5),
        uniform(rng, 0, 10),
        uniform(rng, 1, 6),
        uniform(rng, 0.1, 0.9),
        uniform(rng, 5e-4, 5e-3),
        uniform(rng, 0.004, 0.012),
        prospect_version="D",
        ant=0.0,
    )
    lai = uniform(rng, 1.0, 4.0)
    return run_sail(leaf[1], leaf[2], lai, uniform(rng, 55, 75), 0.05, sun_zenith_deg, 0.0, 0.0, rsoil0=ground)


def under_stems(rng: Rng, ground: np.ndarray, cover: float, sun_zenith_deg: float) -> np.ndarray:
    """Leafless wood over a ground: stems seen from above, and the part of the ground that they shade.

    Shaded share: 1 - exp(-cover x tan(zenith) x k), k drawn 0.8 to 3 (stems as upright cylinders); a shaded ground keeps
    the diffuse light, 8 to 35 % at 550 nm and more in the blue (share as wavelength^-1).
    """
    shaded = 1 - np.exp(-cover * np.tan(np.radians(sun_zenith_deg)) * uniform(rng, 0.8, 3.0))
    diffuse = np.clip(uniform(rng, 0.08, 0.35) * 550.0 / WAVE_NM, 0, 1)
    lit = ground * (1 - shaded + shaded * diffuse)
    stems = bark(rng) * uniform(rng, 0.45, 1.0)
    return cover * stems + (1 - cover) * lit


def hazed(rng: Rng, spectrum: np.ndarray, amount: float) -> np.ndarray:
    """Add what is left of haze and thin cloud: bright veil, stronger at short wavelengths for small amounts."""
    slope = uniform(rng, 0.0, 2.0)
    veil = amount * (550.0 / WAVE_NM) ** slope
    veil = np.clip(veil, 0, 0.9)
    return spectrum * (1 - veil) + veil * uniform(rng, 0.45, 0.75)
