"""The methods sheet of a delivery: what was done, with which settings, and from which published methods."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from jinja2 import Environment

from inundate.common.writing import write_text
from inundate.products.report.tables import ReportTables

SOURCES = (
    (
        "Spectral indices",
        "Rouse et al. 1974 (NDVI); McFeeters 1996, doi:10.1080/01431169608948714 (NDWI); Xu 2006, doi:10.1080/01431160600589179 (MNDWI); Wilson & Sader 2002, doi:10.1016/S0034-4257(01)00318-2 (NDMI); Feyisa et al. 2014, doi:10.1016/j.rse.2013.08.029 (AWEI)",
    ),
    (
        "Co-registration",
        "Lucas & Kanade 1981, inverse compositional form of Baker & Matthews 2004, doi:10.1023/B:VISI.0000011205.11775.fd; cubic convolution, Keys 1981",
    ),
    ("Leaf seasons", "Elmore et al. 2012; Beck et al. 2006; Zhang et al. 2003"),
    ("Canopy gap fraction", "Monsi & Saeki 1953; Nilson 1971; Baret & Guyot 1991; Campbell & Norman 1998"),
    (
        "Water probability",
        "gradient-boosted trees, Ke et al. 2017 (LightGBM); beta calibration, Kull et al. 2017, doi:10.1214/17-EJS1338SI",
    ),
    ("Mislabelled examples", "confident learning, Northcutt et al. 2021, doi:10.1613/jair.1.12125"),
    ("Stage", "water density, Tanaka et al. 2001, doi:10.1088/0026-1394/38/4/3"),
    (
        "Stage-area relation",
        "Hayashi & van der Kamp 2000, doi:10.1016/S0022-1694(00)00300-0; monotone cubic, Fritsch & Carlson 1980; deconvolution, Richardson 1972, Lucy 1974",
    ),
    (
        "Scores",
        "Nash & Sutcliffe 1970; Gupta et al. 2009; Moriasi et al. 2007; interval score and CRPS, Gneiting & Raftery 2007",
    ),
    (
        "Product files",
        "Climate and Forecast conventions 1.11; OGC GeoPackage; OGC Cloud Optimized GeoTIFF (21-026); Apache Parquet",
    ),
)


def _rows(settings: dict[str, Any]) -> list[tuple[str, str, str]]:
    """Return every setting as (section, key, value), paths of inputs and output by their own section's keys."""
    out = []
    for section, values in settings.items():
        if section == "compute":
            continue  # workers change no result
        if isinstance(values, dict):
            out += [(section, key, _text(value)) for key, value in values.items()]
    return sorted(out)


def _text(value: Any) -> str:
    if value is None:
        return "not given"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, list | tuple):
        return ", ".join(_text(v) for v in value)
    return str(value)


def _counts(tables: ReportTables) -> dict[str, Any]:
    observed, daily = tables.observed, tables.daily
    days = pd.to_datetime(daily["date"])
    used = observed["used"].astype(bool)
    reasons = observed.loc[~used, "reason"].astype(str).value_counts().sort_index()
    card = tables.skill.get("classifier") or {}
    relations = tables.relations
    basis = daily["basis"].value_counts(normalize=True)
    return {
        "wetlands": len(tables.shapes),
        "smallest": float(tables.shapes["area_max_m2"].min()) if len(tables.shapes) else np.nan,
        "largest": float(tables.shapes["area_max_m2"].max()) if len(tables.shapes) else np.nan,
        "scenes": int(observed["scene_id"].nunique()),
        "views": len(observed),
        "used": int(used.sum()),
        "set_aside": [(str(k) or "no reason given", int(v)) for k, v in reasons.items()],
        "first": f"{days.min():%Y-%m-%d}" if len(days) else "none",
        "last": f"{days.max():%Y-%m-%d}" if len(days) else "none",
        "labels": sum(int(r.get("n", 0)) for r in card.get("counts") or []),
        "trees": card.get("n_trees"),
        "doubtful": card.get("n_doubtful"),
        "folds": (card.get("folds") or {}).get("rule"),
        "features": ", ".join(card.get("features") or []),
        "logged": int(tables.stage["wetland_id"].nunique()),
        "stage_days": len(tables.stage),
        "families": [
            (str(k).replace("_", " with "), int(v)) for k, v in relations["family"].value_counts().sort_index().items()
        ],
        "pairs": int(relations["n_pairs"].sum()),
        "pooled": int(relations["pooled"].astype(bool).sum()),
        "predictors": []
        if tables.reasons is None
        else [(str(k), int(v)) for k, v in tables.reasons["predictor"].value_counts().sort_index().items()],
        "basis": [(str(k), float(v)) for k, v in sorted(basis.items())],
    }


def write_methods(folder: Path, tables: ReportTables) -> Path:
    """Write ``methods.html`` into ``folder``: one page, generated from the run, without any network address to load.

    Parameters
    ----------
    folder : Path
        The delivery's folder.
    tables : ReportTables

    Returns
    -------
    Path
    """
    env = Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True)
    template = files("inundate.products.report").joinpath("methods.html.j2").read_text(encoding="utf-8")
    settings = tables.run.get("settings") or {}
    text = env.from_string(template).render(
        run=tables.run,
        c=_counts(tables),
        settings=_rows(settings),
        leaves_fixed=all(
            (settings.get("leaves") or {}).get(k) for k in ("green_up", "leaf_on", "leaf_fall", "leaf_off")
        ),
        sources=SOURCES,
    )
    write_text(folder / "methods.html", text)
    return folder / "methods.html"
