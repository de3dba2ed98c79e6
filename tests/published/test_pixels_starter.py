"""Trained on starter examples alone: real spectra and real images that it has never seen."""

import importlib.util
import math
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from inundate.pixels import WaterClassifier, features, starter_examples

ROOT = Path(__file__).resolve().parents[2]
REAL = ROOT.parent / "shared" / "realdata"
SIX = ("blue", "green", "red", "nir", "swir16", "swir22")


@pytest.fixture(scope="module")
def model():
    rows = starter_examples()
    table = rows.table
    return WaterClassifier(num_threads=1).fit(
        rows.X,
        rows.y,
        wetland=table["wetland_id"].to_numpy(),
        source=table["source"].to_numpy(),
        leaf_state=table["leaf_state"].to_numpy(),
    )


@pytest.mark.parametrize("leaf_share", [0.0, 0.5, 1.0, np.nan])
def test_real_landsat_8_spectra(model, leaf_share):
    """Landsat 8 surface reflectance of water, vegetation and built surfaces, carried by spyndex (doi:10.1038/s41597-023-02096-0)."""
    spyndex = pytest.importorskip("spyndex")
    table = spyndex.datasets.open("spectral")
    values = table[[f"SR_B{k}" for k in (2, 3, 4, 5, 6, 7)]].to_numpy().T
    called = (
        model.predict(features(values, ("blue", "green", "red", "nir08", "swir16", "swir22"), leaf_share, 50.0)) == 1
    )
    water = (table["class"] == "Water").to_numpy()
    assert (called == water).mean() >= 0.95
    print(pd.crosstab(table["class"], called))


def test_real_sentinel_2_chip(model, tmp_path):
    """The Sentinel-2 chip (four 10 m bands) carried by spyndex: water where NDWI > 0, hardly elsewhere; picture written."""
    spyndex = pytest.importorskip("spyndex")
    from scipy import ndimage

    chip = spyndex.datasets.open("sentinel").to_numpy() / 1e4
    shape = chip.shape[1:]
    p = model.predict_proba(features(chip.reshape(4, -1), ("blue", "green", "red", "nir"), 0.8, 50.0))[:, 1].reshape(
        shape
    )
    ndwi = (chip[1] - chip[3]) / (chip[1] + chip[3])
    water = ndwi > 0
    assert (p[water] > 0.5).mean() >= 0.95
    near = ndimage.binary_dilation(water, iterations=2)
    assert (p[~near] > 0.5).mean() < 0.003
    write_picture(tmp_path / "sentinel_chip.png", chip, ndwi, p)
    print(f"picture: {tmp_path / 'sentinel_chip.png'}")


def write_picture(path, chip, ndwi, p):
    import matplotlib as mpl

    mpl.use("Agg")
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(1, 3, figsize=(15, 5))
    axes[0].imshow(np.clip(chip[[2, 1, 0]].transpose(1, 2, 0) / 0.18, 0, 1))
    axes[1].imshow(ndwi, vmin=-0.6, vmax=0.6, cmap="RdBu")
    axes[2].imshow(p, vmin=0, vmax=1, cmap="Blues")
    for axis, title in zip(axes, ("true colour", "NDWI", "water probability"), strict=True):
        axis.set_title(title)
    figure.savefig(path)
    plt.close(figure)


def test_starter_file_is_what_the_script_makes(tmp_path):
    """Spot check: rows made anew equal the shipped ones, and the bands are those of reference values."""
    pytest.importorskip("prosail")
    import sys

    folder = ROOT / "training_examples"
    sys.path.insert(0, str(folder))
    try:
        spec = importlib.util.spec_from_file_location("make_starter", folder / "make_starter.py")
        script = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(script)
    finally:
        sys.path.remove(str(folder))
    shipped = pd.read_parquet(ROOT / "inundate" / "pixels" / "starter" / "examples.parquet")
    assert len(shipped) == sum(script.COUNTS.values())
    pick = shipped.groupby("family").head(2)
    for _, old in pick.iterrows():
        new = script.row(old["family"], int(old["number"]))
        assert new["label"] == old["label"]
        for name in ("fraction", "leaf_share", "blue", "green", "red", "swir16"):
            assert (pd.isna(new[name]) and pd.isna(old[name])) or new[name] == pytest.approx(old[name], abs=2e-4)


def reservoir():
    """Landsat 5 digital numbers to reflectance at the top of the atmosphere (Chander et al. 2009, RSE 113:893; solar irradiance of TM from there, typed from memory)."""
    rasterio = pytest.importorskip("rasterio")
    folder = REAL / "l5_reservoir_polygons"
    text = (folder / "LT52240631988227CUB02_MTL.txt").read_text()

    def number(key):
        return float(re.search(key + r"\s*=\s*([-\d.E+]+)", text).group(1))

    with rasterio.open(folder / "lsat_7band_dn.tif") as source:
        dn, transform, crs = source.read().astype(float), source.transform, source.crs
    sun = number("SUN_ELEVATION")
    irradiance = {1: 1958, 2: 1827, 3: 1551, 4: 1036, 5: 214.9, 7: 80.65}
    rows = [
        math.pi
        * (dn[b - 1] * number(f"RADIANCE_MULT_BAND_{b}") + number(f"RADIANCE_ADD_BAND_{b}"))
        / (e * math.sin(math.radians(sun)))
        for b, e in irradiance.items()
    ]
    return np.array(rows), transform, crs, sun


def polygon_masks(folder, transform, shape, crs):
    import geopandas as gpd
    from rasterio.features import rasterize

    layer = gpd.read_file(REAL / folder / "training_polygons.gpkg").to_crs(crs)
    ids = rasterize([(g, i + 1) for i, g in enumerate(layer.geometry)], shape, transform=transform)
    return ids, np.array(["", *layer["class"]])


@pytest.mark.skipif(not REAL.is_dir(), reason="real chips are not at ../shared/realdata")
def test_real_reservoir_with_starter_only_and_with_its_own_polygons(model):
    """Landsat 5 TM, 1988-08-14, reservoir with hand-drawn polygons (public domain image; see its SOURCE.txt).

    For scale, there: a boosted classifier on raw numbers reaches 0.9999 balanced accuracy by polygon, 15.6 % of the chip water.
    """
    values, transform, crs, sun = reservoir()
    shape = values.shape[1:]
    X = features(values.reshape(6, -1), SIX, 0.8, sun)
    ids, names = polygon_masks("l5_reservoir_polygons", transform, shape, crs)
    inside = ids.ravel() > 0
    water = names[ids.ravel()[inside]] == "water"
    called = model.predict(X) == 1
    recall = [called[inside][water].mean(), (~called[inside][~water]).mean()]
    assert np.mean(recall) >= 0.98
    assert 0.14 < called.mean() < 0.20
    own = WaterClassifier(num_threads=1).fit(X[inside], water.astype(int), wetland=ids.ravel()[inside].astype(str))
    p = own.oof_probability_
    assert np.isfinite(p).all()
    assert np.mean([(p[water] > 0.5).mean(), (p[~water] < 0.5).mean()]) >= 0.995


@pytest.mark.skipif(not REAL.is_dir(), reason="real chips are not at ../shared/realdata")
def test_real_narrow_river_by_polygon(model):
    """Landsat 7 ETM+, 1999-11-18, a river narrower than its pixels (public domain image; labels CC BY-SA, see SOURCE.txt).

    There: 15 of 16 water pixels found and 1 false in 702 by polygon-grouped validation; MNDWI > 0 finds almost none.
    """
    rasterio = pytest.importorskip("rasterio")
    with rasterio.open(REAL / "l7_river_two_dates" / "LE70220491999322EDC01_stack.tif") as source:
        image, transform, crs = source.read().astype(float), source.transform, source.crs
    X = features(image[:6].reshape(6, -1) / 1e4, SIX, 0.8, 45.0)
    ids, names = polygon_masks("l7_river_two_dates", transform, image.shape[1:], crs)
    inside = ids.ravel() > 0
    water = names[ids.ravel()[inside]] == "water"
    assert (model.predict(X[inside][~water]) == 1).mean() < 0.005  # starter only: no false water
    own = WaterClassifier(num_threads=1).fit(X[inside], water.astype(int), wetland=ids.ravel()[inside].astype(str))
    p = own.oof_probability_
    assert (p[water] > 0.5).sum() >= 12
    assert (p[~water] > 0.5).sum() <= 4
