"""The demo: make the invented reserve, run the whole job, score it against the known truth."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from inundate.batch.progress import Progress
from inundate.common.codes import LEAF_STATES
from inundate.common.errors import InputError
from inundate.common.writing import plain, write_json


def run_demo(folder: Path, *, seed: int, size: str, progress: Progress) -> dict[str, Any]:
    """Make the reserve in ``folder`` and run the pipeline on it.

    Parameters
    ----------
    folder : Path
        New or empty folder, or one that holds the same demo (then only what is missing is done).
    seed : int
    size : {"default", "small"}
    progress : Progress

    Returns
    -------
    dict
        month, products, seconds, scores against truth (rows), refused.

    Raises
    ------
    InputError
        When the folder holds something else.
    """
    from inundate.batch.run import run_month
    from inundate.reserve import make_reserve

    start = time.perf_counter()
    made = folder / "inputs" / "pipeline.toml"
    note = folder / "truth" / "demo.json"
    wanted = {"seed": seed, "size": size}
    if folder.exists() and any(folder.iterdir()):
        import json

        if not (note.exists() and made.exists() and json.loads(note.read_text(encoding="utf-8")) == wanted):
            message = f"{folder}: is not empty and holds no demo of seed {seed} and size '{size}'; give a new folder"
            raise InputError(message)
    else:
        with progress.step("making the Sallow Reserve"):
            make_reserve(folder, seed=seed, size=size)
        write_json(note, wanted)
    result = run_month(made, month=None, progress=progress)
    scores = score_against_truth(Path(result["products"]), folder / "truth")
    return {
        "folder": str(folder),
        "report": str(Path(result["products"]) / "report.html"),
        **result,
        "against_truth": scores,
        "seconds": round(time.perf_counter() - start, 1),
    }


def score_against_truth(products: Path, truth: Path) -> dict[str, Any]:
    """Score a delivery's daily series against the known truth.

    Parameters
    ----------
    products : Path
        Folder of the delivery.
    truth : Path
        Folder with ``extent_daily.parquet``.

    Returns
    -------
    dict
        ``cells``: rows by leaf state and logged / not logged with n, rmse and bias (share of the largest extent), coverage
        of the 90 % interval, mean interval width; ``total``: relative error of the landscape's total, overall coverage.
    """
    import geopandas as gpd

    daily = pd.read_parquet(products / "extent_daily.parquet")
    known = pd.read_parquet(truth / "extent_daily.parquet").rename(columns={"area_m2": "true_m2"})
    for table in (daily, known):
        table["date"] = pd.to_datetime(table["date"]).astype("datetime64[ns]")
    both = daily.merge(known, on=["wetland_id", "date"], how="inner")
    if len(both) != len(daily):
        message = f"{products}: {len(daily) - len(both)} of {len(daily)} rows have no truth to be held against"
        raise InputError(message)
    shapes = gpd.read_file(products / "wetlands.gpkg")
    largest = pd.Series(shapes.geometry.area.to_numpy(), index=shapes["wetland_id"])
    both["largest"] = both["wetland_id"].map(largest)
    logged = set(pd.read_parquet(products / "stage_daily.parquet")["wetland_id"])
    both["logged"] = both["wetland_id"].isin(logged)
    rows = []
    for state in LEAF_STATES:
        for flag in (True, False):
            cell = both[(both["leaf_state"] == state) & (both["logged"] == flag)]
            if len(cell):
                rows.append({"leaf_state": state, "logged": flag, **_measures(cell)})
    total = both.groupby("date")[["area_m2", "true_m2"]].sum()
    error = (total["area_m2"] - total["true_m2"]).to_numpy()
    whole = {
        **_measures(both),
        "total_rmse_share": float(np.sqrt(np.mean(error**2)) / total["true_m2"].mean()),
        "total_bias_share": float(error.mean() / total["true_m2"].mean()),
    }
    return plain({"cells": rows, "all": whole})  # type: ignore[return-value]


def _measures(cell: pd.DataFrame) -> dict[str, Any]:
    error = ((cell["area_m2"] - cell["true_m2"]) / cell["largest"]).to_numpy()
    inside = (cell["true_m2"] >= cell["area_lo_m2"] - 1e-6) & (cell["true_m2"] <= cell["area_hi_m2"] + 1e-6)
    width = (cell["area_hi_m2"] - cell["area_lo_m2"]) / cell["largest"]
    return {
        "n": len(cell),
        "rmse": float(np.sqrt(np.mean(error**2))),
        "bias": float(error.mean()),
        "coverage": float(inside.mean()),
        "width": float(width.mean()),
    }


def summary_lines(result: dict[str, Any]) -> list[str]:
    """Return the short table that the demo prints."""
    scores = result["against_truth"]
    lines = [
        f"Sallow Reserve, delivery {result['month']}: skill of the daily series against the known truth",
        "(errors in per cent of each wetland's largest extent; a 90 % interval should cover 90 %)",
        f"{'leaf state':<12}{'wetlands':<13}{'RMSE':>7}{'bias':>7}{'covered':>9}{'width':>7}{'days':>9}",
    ]
    rows = [(c["leaf_state"], "logged" if c["logged"] else "not logged", c) for c in scores["cells"]]
    for state, kind, cell in [*rows, ("all", "all", scores["all"])]:
        lines.append(
            f"{state:<12}{kind:<13}{100 * cell['rmse']:>7.1f}{100 * cell['bias']:>+7.1f}"
            f"{100 * cell['coverage']:>8.1f}%{100 * cell['width']:>7.1f}{cell['n']:>9}"
        )
    whole = scores["all"]
    lines.append(
        f"total inundated area of the landscape: RMSE {100 * whole['total_rmse_share']:.1f} %, bias {100 * whole['total_bias_share']:+.1f} %"
    )
    lines.append(f"{result['seconds']:.0f} s; open {result['report']}")
    return lines
