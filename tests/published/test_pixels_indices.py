"""Index formulas against published forms, a reference library and its real spectra."""

import numpy as np
import pytest

from inundate.pixels import FEATURES, features

spyndex = pytest.importorskip("spyndex")
BANDS = ("blue", "green", "red", "nir", "swir16", "swir22")
COL = {name: i for i, name in enumerate(FEATURES)}


# Two spectra and the values of the formulas as printed: NDVI Rouse et al. 1974, NDWI McFeeters 1996, MNDWI Xu 2006,
# NDMI Wilson & Sader 2002, AWEInsh and AWEIsh Feyisa et al. 2014 (RSE 140:23): 4(G-S1)-(0.25N+2.75S2).
SPECTRA = {
    "vegetation": (0.05, 0.08, 0.06, 0.30, 0.18, 0.09),
    "water": (0.06, 0.055, 0.045, 0.03, 0.015, 0.01),
}
VALUES = {
    "vegetation": {
        "ndvi": 0.6666667,
        "ndwi": -0.5789474,
        "mndwi": -0.3846154,
        "ndmi": 0.25,
        "awei_nsh": -0.7225,
        "awei_sh": -0.4925,
    },
    "water": {
        "ndvi": -0.2,
        "ndwi": 0.2941176,
        "mndwi": 0.5714286,
        "ndmi": 0.3333333,
        "awei_nsh": 0.125,
        "awei_sh": 0.1275,
    },
}


@pytest.mark.parametrize("surface", list(SPECTRA))
def test_published_formulas(surface):
    x = features(np.array(SPECTRA[surface], "f4")[:, None], BANDS, 0.0, 30.0)[0]
    for name, value in VALUES[surface].items():
        assert x[COL[name]] == pytest.approx(value, abs=2e-6), name


@pytest.mark.parametrize(
    ("name", "theirs"),
    [("ndvi", "NDVI"), ("ndwi", "NDWI"), ("mndwi", "MNDWI"), ("ndmi", "NDMI"), ("awei_sh", "AWEIsh")],
)
def test_real_landsat_spectra_agree_with_spyndex(name, theirs):
    """spyndex (Montero et al. 2023, doi:10.1038/s41597-023-02096-0) on the Landsat 8 spectra that it carries.

    AWEInsh is left out: version 0.12 codes it with +2.75 S2, against the paper's bracket.
    """
    table = spyndex.datasets.open("spectral")
    values = table[[f"SR_B{k}" for k in (2, 3, 4, 5, 6, 7)]].to_numpy().T
    mine = features(values, BANDS, 0.0, 30.0)[:, COL[name]]
    params = dict(zip(("B", "G", "R", "N", "S1", "S2"), values, strict=True))
    other = spyndex.computeIndex(theirs, params=params)
    usable = (values > 1e-4).all(axis=0)
    assert usable.sum() > 110
    np.testing.assert_allclose(mine[usable], np.asarray(other)[usable], rtol=2e-5, atol=2e-6)
