"""Make the starter examples: ``python training_examples/make_starter.py [OUT.parquet]``. Seeded; same bytes each time."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd
import surfaces as s

from inundate.common.codes import BAND_ROLES
from inundate.common.seeds import rng_for
from inundate.common.writing import write_table

SEED = 20
TARGET = Path(__file__).resolve().parents[1] / "inundate" / "pixels" / "starter" / "examples.parquet"

# Centre and width, nm. Sentinel-2A and Landsat values are the operators' published centre wavelengths and bandwidths
# (as carried by the spyndex band table); the four-band set is generic. A band is its mean over centre +- width / 2.
SENSORS = {
    "msi": {
        "blue": (492.4, 66),
        "green": (559.8, 36),
        "red": (664.6, 31),
        "rededge071": (704.1, 15),
        "rededge075": (740.5, 15),
        "rededge078": (782.8, 20),
        "nir": (832.8, 106),
        "nir08": (864.7, 21),
        "swir16": (1613.7, 91),
        "swir22": (2202.4, 175),
    },
    "oli": {
        "blue": (480, 60),
        "green": (560, 60),
        "red": (655, 30),
        "nir08": (865, 30),
        "swir16": (1610, 80),
        "swir22": (2200, 180),
    },
    "tm": {
        "blue": (485, 70),
        "green": (560, 80),
        "red": (660, 60),
        "nir": (830, 140),
        "swir16": (1650, 200),
        "swir22": (2215, 270),
    },
    "visnir": {"blue": (485, 60), "green": (545, 90), "red": (630, 80), "nir": (820, 80)},
}
SENSOR_SHARE = {"msi": 0.64, "oli": 0.14, "tm": 0.12, "visnir": 0.10}

SEEN = 0.50  # a canopy over water is labelled water where it lets at least this share of the ground be seen
UNSEEN = 0.20  # ... and dry (no water to be seen) where it lets less than this; between the two it is left out
MIXED_OUT = (0.4, 0.6)  # water fraction of mixed pixels that get no label (fraction kept)

DRY_GROUND = (s.soil, s.mud, s.litter)
COUNTS = {
    "water_clear": 260,
    "water_stained": 420,
    "water_turbid": 220,
    "water_green": 120,
    "water_under_stems": 420,
    "water_sparse_leaves": 300,
    "water_closed_canopy": 120,
    "soil": 220,
    "mud": 420,
    "litter": 360,
    "grass": 260,
    "senesced": 220,
    "built": 260,
    "canopy": 420,
    "evergreen": 160,
    "dry_under_stems": 480,
    "deep_shade": 90,
    "mixed": 900,
}


def dry_surface(rng: s.Rng, zenith: float) -> np.ndarray:
    """One dry surface of any kind that borders water."""
    pick = int(rng.integers(5))
    if pick < 3:
        return DRY_GROUND[pick](rng)
    if pick == 3:
        return s.canopy(rng, s.uniform(rng, 0.5, 4), s.soil(rng), zenith)
    return s.under_stems(rng, s.litter(rng), s.uniform(rng, 0.05, 0.4), zenith)


def any_water(rng: s.Rng, zenith: float) -> np.ndarray:
    """One water surface of any kind."""
    kind = ("clear", "stained", "stained", "turbid", "green")[int(rng.integers(5))]
    return s.water(rng, kind, zenith)


def gap(lai: float) -> float:
    """Share of the ground seen from straight above: exp(-0.5 LAI), spherical leaves (Monsi & Saeki 1953)."""
    return float(np.exp(-0.5 * lai))


def one(family: str, rng: s.Rng, zenith: float) -> tuple[np.ndarray, float, float, float]:
    """Return spectrum, water fraction (0, 1 or between), leaf share (NaN: any) and share of the ground seen."""
    any_leaf, seen = np.nan, 1.0
    if family in {"water_clear", "water_stained", "water_turbid", "water_green"}:
        return s.water(rng, family.split("_")[1], zenith), 1.0, any_leaf, seen
    if family == "water_under_stems":
        cover = s.uniform(rng, 0.04, 0.42)
        return s.under_stems(rng, any_water(rng, zenith), cover, zenith), 1.0, 0.0, 1 - cover
    if family == "dry_under_stems":
        cover = s.uniform(rng, 0.04, 0.5)
        return s.under_stems(rng, DRY_GROUND[int(rng.integers(3))](rng), cover, zenith), 0.0, 0.0, 1 - cover
    if family == "water_sparse_leaves":
        lai = s.uniform(rng, 0.05, -2 * np.log(SEEN))
        return s.canopy(rng, lai, any_water(rng, zenith), zenith), 1.0, min(lai / 4, 1.0), gap(lai)
    if family == "water_closed_canopy":
        lai = s.uniform(rng, -2 * np.log(UNSEEN), 7)
        return s.canopy(rng, lai, any_water(rng, zenith), zenith), 0.0, min(lai / 4, 1.0), gap(lai)
    if family in {"soil", "mud", "litter", "built"}:
        return getattr(s, family)(rng), 0.0, any_leaf, seen
    if family == "grass":
        return (
            s.canopy(rng, s.log_uniform(rng, 0.3, 6), DRY_GROUND[int(rng.integers(2))](rng), zenith),
            0.0,
            any_leaf,
            seen,
        )
    if family == "senesced":
        return s.senesced(rng, DRY_GROUND[int(rng.integers(3))](rng), zenith), 0.0, any_leaf, seen
    if family == "canopy":
        lai = s.uniform(rng, 0.2, 7)
        spectrum = s.canopy(rng, lai, DRY_GROUND[int(rng.integers(3))](rng), zenith) * s.log_uniform(rng, 0.3, 1.0)
        return spectrum, 0.0, min(lai / 4, 1.0), gap(lai)
    if family == "evergreen":
        return s.canopy(rng, s.uniform(rng, 2, 6), s.litter(rng), zenith) * s.uniform(rng, 0.3, 0.8), 0.0, any_leaf, 0.1
    if family == "deep_shade":
        diffuse = np.clip(s.uniform(rng, 0.1, 0.5) * (550 / s.WAVE_NM) ** s.uniform(rng, 0.3, 1.2), 0, 1)
        return dry_surface(rng, zenith) * diffuse, 0.0, any_leaf, seen
    share = s.uniform(rng, 0.02, 0.98)
    return share * any_water(rng, zenith) + (1 - share) * dry_surface(rng, zenith), share, any_leaf, seen


def to_bands(spectrum: np.ndarray, sensor: str) -> dict[str, float]:
    """Return band means of a spectrum."""
    return {
        role: float(spectrum[np.abs(s.WAVE_NM - centre) <= width / 2].mean())
        for role, (centre, width) in SENSORS[sensor].items()
    }


def row(family: str, number: int) -> dict[str, object]:
    """Return one example as a table row."""
    rng = rng_for(SEED, family, number)
    zenith = s.uniform(rng, 25, 75)
    spectrum, fraction, leaf_share, seen = one(family, rng, zenith)
    haze = 0.0 if rng.random() < 0.35 else s.log_uniform(rng, 0.002, 0.22 if rng.random() < 0.3 else 0.03)
    spectrum = s.hazed(rng, spectrum, haze) * s.uniform(rng, 0.94, 1.06)
    if np.isnan(leaf_share):
        leaf_share = 0.0 if rng.random() < 0.5 else s.uniform(rng, 0, 1)
    if rng.random() < 0.2:  # an atmosphere that was corrected too far
        spectrum = spectrum - s.uniform(rng, 0, 0.012)
    sensor = str(rng.choice(list(SENSOR_SHARE), p=list(SENSOR_SHARE.values())))
    values = {k: v + 0.002 * rng.standard_normal() for k, v in to_bands(spectrum, sensor).items()}
    labelled = not MIXED_OUT[0] < fraction < MIXED_OUT[1]
    return {
        "family": family,
        "number": number,
        "sensor": sensor,
        "label": (int(fraction >= 0.5) if labelled else -1),
        "fraction": round(fraction, 3),
        "leaf_share": round(leaf_share, 3),
        "sun_elevation_deg": round(90 - zenith, 1),
        "seen": round(seen, 3),
        "haze": round(haze, 4),
        **{role: round(values[role], 4) if role in values else np.nan for role in BAND_ROLES},
    }


def main(argv: list[str]) -> None:
    """Make all rows and write them."""
    target = Path(argv[0]) if argv else TARGET
    table = pd.DataFrame([row(family, k) for family, n in COUNTS.items() for k in range(n)])
    small = ["fraction", "leaf_share", "sun_elevation_deg", "seen", "haze", *BAND_ROLES]
    table[small] = table[small].astype(np.float32)
    table["label"] = table["label"].astype(np.int8)
    table["number"] = table["number"].astype(np.int16)
    write_table(target, table)
    print(f"{len(table)} starter examples, {target.stat().st_size} bytes: {target}")


if __name__ == "__main__":
    main(sys.argv[1:])
