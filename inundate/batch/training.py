"""Training of the pixel models from archived label samples."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from inundate.batch.archive import read_view
from inundate.batch.imagery import LabelPixels, Settled, array_mark
from inundate.batch.layout import Layout
from inundate.batch.seasons import ScenePlace
from inundate.batch.work import Work, code_mark, settings_mark, table_mark
from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.writing import replacing_folder, write_json, write_table

if TYPE_CHECKING:
    from inundate.leaves import LeafCalendar
    from inundate.pixels import ExampleSet, PixelModels


@dataclass(frozen=True, slots=True)
class Trained:
    """The fingerprint of the models that stand in ``out/models``, and what the user should know of them."""

    mark: str
    notes: list[str]
    lasting: tuple[float, float] = (0.0, 0.0)


def train(
    work: Work,
    layout: Layout,
    labels: LabelPixels | None,
    places: list[ScenePlace],
    leaves: tuple[LeafCalendar, Settled],
) -> Trained:
    """Train the classifier and the fraction model where labels, samples, settings or code changed."""
    from inundate.pixels import train_models

    archive, ledger, settings = work.archive, work.ledger, work.pipeline.classifier
    with work.progress.step("classifier"):
        examples = _examples(work, layout, labels, places, leaves)
        if examples.refused:
            rows = ", ".join(r.name for r in examples.refused[:5])
            work.notes.append(
                f"{len(examples.refused)} labels are not clear in their scenes and were left out (rows {rows}, ...)"
            )
        parts = {
            "examples": table_mark(examples.table) + array_mark(examples.reflectance),
            "code": code_mark("pixels"),
            **settings_mark(work.pipeline, "classifier"),
        }
        if ledger.why("models", "pixels", parts, archive.models / "water.txt") is not None:
            strata = _strata(examples.table, layout)
            # one thread: the tables are small, and threads that wait for each other cost more than they give
            models = train_models(examples, seed=settings.seed, num_threads=1, strata=strata)
            with replacing_folder(archive.models) as scratch:
                models.classifier.save(scratch)
                models.fraction.save(scratch)
                write_table(scratch / "doubtful_labels.parquet", models.doubtful)
                write_json(scratch / "notes.json", list(models.notes))
            ledger.put(
                "models", "pixels", parts, detail={"notes": list(models.notes), "lasting": _lasting(models, examples)}
            )
        unit = ledger.get("models", "pixels")
    notes = [] if unit is None else list(unit.detail.get("notes", []))
    for note in notes:
        work.progress.say(f"classifier: {note}")
    missed, added = (0.0, 0.0) if unit is None else unit.detail.get("lasting", (0.0, 0.0))
    return Trained("" if unit is None else unit.fingerprint, notes, (float(missed), float(added)))


def _lasting(models: PixelModels, examples: ExampleSet) -> tuple[float, float]:
    """Errors of leaf-off views that last in a wetland, from own labels out of fold."""
    from inundate.pixels import lasting_errors

    table = examples.table
    own = (table["source"] != "starter").to_numpy() & (table["leaf_state"] == 0).to_numpy()
    oof = models.classifier.oof_probability_
    return lasting_errors(oof, (table["label"] == 1).to_numpy(), table["wetland_id"].to_numpy(), own)


def _strata(table: pd.DataFrame, layout: Layout) -> pd.DataFrame:
    """Size class of each example's wetland, for scores told apart."""
    area = layout.wetlands.set_index("wetland_id")["area_max_m2"]
    largest = table["wetland_id"].map(area)
    size = np.where(largest.isna(), "outside", np.where(largest < 3000, "under 0.3 ha", "0.3 ha and more"))
    return pd.DataFrame({"size": size.astype(str)})


def _examples(
    work: Work,
    layout: Layout,
    labels: LabelPixels | None,
    places: list[ScenePlace],
    leaves: tuple[LeafCalendar, Settled],
) -> ExampleSet:
    from inundate.pixels import ViewState, make_examples, starter_examples

    settings = work.pipeline.classifier
    if labels is None:
        return starter_examples()
    standing = {p.scene_id: p for p in places}
    table = labels.table[labels.table["scene_id"].isin(standing)].reset_index(drop=True)
    values = np.full((len(BAND_ROLES), len(table)), np.nan, np.float32)
    clear = np.zeros(len(table), bool)
    for scene_id, rows in table.groupby("scene_id"):
        site = labels.site(str(scene_id))
        path = work.archive.sample(str(scene_id))
        if site is None or not path.exists():
            continue
        bands, reflectance, code = read_view(path)
        at = site.positions(rows["grid_row"].to_numpy(), rows["grid_col"].to_numpy())
        where = rows.index.to_numpy()
        for i, band in enumerate(bands):
            values[BAND_ROLES.index(band), where] = reflectance[i, at]
        clear[where] = code[at] == ViewCode.CLEAR
    owner = _nearest(table, labels, layout)
    calendar, settled = leaves
    share = settled.tenths[table["scene_id"].map(settled.row).to_numpy(np.int64), owner] / 10.0
    state, _ = calendar.states(layout.wetlands["wetland_id"].to_numpy()[owner], table["date"].to_numpy())
    sun = table["scene_id"].map({p.scene_id: p.sun_elevation_deg for p in places}).to_numpy(float)
    return make_examples(
        table,
        values,
        BAND_ROLES,
        ViewState(share.astype(np.float32), state, sun.astype(np.float32), _grounds(table, places)),
        clear=clear,
        min_own=settings.minimum_examples,
        starter=settings.starter_examples,
    )


def _grounds(table: pd.DataFrame, places: list[ScenePlace]) -> np.ndarray:
    """Return the dry ground of each label's scene, (band role, row)."""
    unknown = (np.nan,) * len(BAND_ROLES)
    known = {p.scene_id: p.ground or unknown for p in places}
    rows = [known[s] for s in table["scene_id"]]
    return np.array(rows, np.float32).reshape(-1, len(BAND_ROLES)).T


def _nearest(table: pd.DataFrame, labels: LabelPixels, layout: Layout) -> np.ndarray:
    """Return the row of the wetland whose leaf state serves each label: its own, else the nearest."""
    from scipy.spatial import cKDTree

    own = pd.Index(layout.wetlands["wetland_id"]).get_indexer(list(table["wetland_id"]))
    x, y = labels.grid.centres(table["grid_row"].to_numpy(), table["grid_col"].to_numpy())
    _, near = cKDTree(layout.wetlands[["x", "y"]].to_numpy()).query(np.column_stack([x, y]))
    return np.where(own >= 0, own, near)
