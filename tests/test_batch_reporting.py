"""Report and skill of standing deliveries: what the archive keeps for them, and what is said when something is missing."""

from __future__ import annotations

import io
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
from shapely.geometry import box

from inundate.batch.archive import Archive, write_score, write_view
from inundate.batch.progress import Progress
from inundate.batch.report_sources import load_extras, load_site, paint_wetlands, thin_record, until
from inundate.batch.reporting import show_skill, skill_lines, write_report_again
from inundate.common.errors import InputError
from inundate.common.grid import Grid
from inundate.common.site import make_site
from inundate.common.writing import write_json, write_table

QUIET = Progress(quiet=True)


@pytest.fixture
def pipeline(tmp_path: Path) -> Path:
    """The least pipeline file whose named inputs exist."""
    for name in ("wetlands.gpkg", "scenes.csv"):
        (tmp_path / name).touch()
    file = tmp_path / "pipeline.toml"
    file.write_text(
        '[area]\nname = "A"\ncrs = "EPSG:32633"\nwetlands = "wetlands.gpkg"\n[scenes]\ncatalog = "scenes.csv"\n'
    )
    return file


def test_without_a_delivery_one_sentence_says_what_to_do(pipeline: Path) -> None:
    for call in (lambda: show_skill(pipeline, None, QUIET), lambda: write_report_again(pipeline, None, False, QUIET)):
        with pytest.raises(InputError, match="no delivery yet; run `inundate run`"):
            call()


def test_unknown_month_and_missing_files_are_named(pipeline: Path) -> None:
    folder = pipeline.parent / "out" / "products" / "2033-01"
    write_json(folder / "run.json", {"month": "2033-01"})
    with pytest.raises(InputError, match=r"--month is '2033-02'.*choose one of 2033-01"):
        show_skill(pipeline, "2033-02", QUIET)
    with pytest.raises(InputError, match=r"holds no skill.json; run `inundate run` again"):
        show_skill(pipeline, None, QUIET)
    with pytest.raises(InputError, match=r"extent_daily.parquet is gone; run `inundate run --month 2033-01`"):
        write_report_again(pipeline, None, False, QUIET)


def test_skill_is_shown_from_the_delivery(pipeline: Path) -> None:
    folder = pipeline.parent / "out" / "products" / "2033-01"
    (pipeline.parent / "out" / "archive").mkdir(parents=True)
    write_json(folder / "run.json", {"month": "2033-01"})
    wet = {"n": 4, "accuracy": 0.75, "omission": 0.5, "commission": None}
    skill = {
        "classifier": {},
        "wet_dry": {"all": wet, "by_leaf_state": {"leaf_off": wet}},
        "rank": None,
        "relation": {"median_rmse_share": None},
        "filled": {"views": {"all": {"n": 0}}, "logger": {"all": {"n": 0}}},
    }
    write_json(folder / "skill.json", skill)
    found = show_skill(pipeline, None, QUIET)
    assert found["headline"] == {"wet/dry agreement with stage": 0.75}
    lines = skill_lines(found)
    assert lines[0] == "delivery 2033-01"
    assert any(line.split() == ["leaf-off", "4", "75.0%", "50.0%", "-"] for line in lines)


def test_thinned_record_keeps_extremes_and_what_was_left_out() -> None:
    n = 40_000
    rng = np.random.default_rng(2)
    depth = np.sin(np.arange(n) / 900.0) + rng.normal(0, 0.01, n)
    flag = np.full(n, "good", object)
    flag[1000] = "spike"
    depth[1000], depth[20_000] = 9.0, 3.0
    frame = pd.DataFrame(
        {
            "time": pd.date_range("2033-01-01", periods=n, freq="h"),
            "depth_m": depth,
            "stage_m": depth + 0.3,
            "flag": flag,
        }
    )
    thin = thin_record(frame, 0.25)
    assert len(thin) <= 1501
    assert thin["time"].is_monotonic_increasing
    good = thin[thin["flag"] == "good"]
    assert good["level_m"].max() == pytest.approx(3.25)
    assert good["level_m"].min() == pytest.approx(depth[flag == "good"].min() + 0.25)
    assert thin.loc[thin["flag"] == "spike", "level_m"].tolist() == pytest.approx([9.25])


def test_extra_tables_end_with_the_delivery(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    assert set(load_extras(archive).values()) == {None}
    table = pd.DataFrame({"wetland_id": "A", "date": pd.date_range("2033-01-30", periods=4)})
    write_table(archive.table("pairs"), table)
    kept = until(load_extras(archive), pd.Timestamp("2033-01-31"))
    assert kept["pairs"]["date"].dt.day.tolist() == [30, 31]


def test_pictures_come_from_the_right_pixels(tmp_path: Path) -> None:
    image = pytest.importorskip("PIL.Image")
    grid = Grid("EPSG:32633", 1000.0, 2000.0, 10.0, 30, 40)
    rows, cols = np.meshgrid(np.arange(10, 16), np.arange(20, 25), indexing="ij")
    site = make_site(grid, rows.ravel(), cols.ravel(), margin=2)
    archive = Archive(tmp_path)
    write_table(archive.table("site"), pd.DataFrame({"row": site.rows, "col": site.cols}))
    write_json(
        archive.folder / "grid.json", {k: getattr(grid, k) for k in ("crs", "west", "north", "step", "height", "width")}
    )
    percent = ((site.rows * 7 + site.cols * 3) % 101).astype(np.uint8)
    bands = np.stack(
        [(site.rows - 8) / 100.0, (site.cols - 18) / 100.0, np.full(site.size, 0.1), np.full(site.size, 0.4)]
    ).astype(np.float32)
    write_view(archive.view("S1"), ("blue", "green", "red", "nir"), bands, np.zeros(site.size, np.uint8))
    write_score(archive.score("S1"), {"probability": percent})
    x, y = 1000.0 + 200.0, 2000.0 - 160.0
    shapes = gpd.GeoDataFrame({"wetland_id": ["A"]}, geometry=[box(x + 1, y + 1, x + 49, y + 59)], crs=grid.crs)
    seen = pd.DataFrame(
        {
            "wetland_id": "A",
            "scene_id": ["S1", "gone"],
            "datetime": pd.date_range("2033-01-01", periods=2),
            "leaf_state": "leaf_off",
            "area_m2": 1.0,
            "clear_fraction": 1.0,
            "used": True,
        }
    )
    loaded = load_site(archive)
    assert loaded is not None
    shots = paint_wetlands(archive, loaded, shapes, seen)["A"]
    assert [s.scene_id for s in shots] == ["S1"], "a view that left the archive is left out"
    assert shots[0].size == (9, 10)
    assert shots[0].bounds == (1180.0, 1820.0, 1270.0, 1920.0)
    true = np.asarray(image.open(io.BytesIO(shots[0].true_colour)))
    r, c = np.meshgrid(np.arange(8, 18), np.arange(18, 27), indexing="ij")
    expected = np.sqrt(np.clip((r - 8) / 100.0 / 0.25, 0, 1)) * 255
    assert np.abs(true[..., 2].astype(float) - expected).max() < 1.5, "blue rises to the south"
    expected = np.sqrt(np.clip((c - 18) / 100.0 / 0.25, 0, 1)) * 255
    assert np.abs(true[..., 1].astype(float) - expected).max() < 1.5, "green rises to the east"
