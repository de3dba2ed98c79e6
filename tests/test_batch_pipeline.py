"""The pipeline file: what is valid, and one clear sentence for everything that is not."""

import re
from pathlib import Path

import pytest

from inundate.batch.pipeline import Pipeline, load_pipeline
from inundate.common.errors import InputError

LEAST = """
[area]
name = "Sallow Reserve"
crs = "EPSG:32633"
wetlands = "wetlands.gpkg"
[scenes]
catalog = "scenes.csv"
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "wetlands.gpkg").write_text("x")
    (tmp_path / "scenes.csv").write_text("x")
    return tmp_path


def write(folder: Path, text: str) -> Path:
    file = folder / "pipeline.toml"
    file.write_text(text)
    return file


def test_least_pipeline_has_sane_defaults(folder):
    """Paths are relative to the file; sections that are left out take their defaults."""
    pipeline = load_pipeline(write(folder, LEAST))
    assert pipeline.out == folder / "out"
    assert pipeline.series.water_year_start_month == 10
    assert pipeline.input_files() == {
        "area.wetlands": str(folder / "wetlands.gpkg"),
        "scenes.catalog": str(folder / "scenes.csv"),
    }


def test_remote_catalog_keeps_its_address(folder):
    """An https catalog is not turned into a local path and need not exist as a file."""
    text = LEAST.replace('"scenes.csv"', '"https://example.org/collection.json"')
    assert load_pipeline(write(folder, text)).input_files()["scenes.catalog"] == "https://example.org/collection.json"


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (
            ("[scenes]", "[scenes]\ncatalogue = 'x'"),
            r"unknown key 'scenes\.catalogue'; valid keys here are catalog, sensor",
        ),
        (("[scenes]", "[secenes]\n[scenes]"), r"unknown key 'secenes'; valid keys here are area, "),
        (('name = "Sallow Reserve"\n', ""), r"key 'area\.name' is missing"),
        (("EPSG:32633", "EPSG:4326"), r"key 'area\.crs' is 'EPSG:4326': .*not projected in metres"),
        (("EPSG:32633", "EPSG:nope"), r"'EPSG:nope' is not a known coordinate reference system"),
        (("wetlands.gpkg", "none.gpkg"), r"key 'area\.wetlands' names .*none\.gpkg, which does not exist"),
        (("[area]", "[area"), r"not valid TOML"),
    ],
)
def test_bad_pipeline_says_what_is_wrong(folder, change, words):
    """Each fault names the file, the key, the value and the rule."""
    with pytest.raises(InputError, match=words) as err:
        load_pipeline(write(folder, LEAST.replace(*change)))
    assert "pipeline.toml" in str(err.value)
    assert "\n" not in str(err.value)


@pytest.mark.parametrize(
    ("section", "words"),
    [
        ("[series]\nwater_year_start_month = 13", "less than or equal to 12"),
        ("[series]\nsize_class_edges_ha = [1.0, 0.3]", "rising"),
        ("[compute]\nscheduler = 'slurm'", "not a scheduler"),
        ("[leaves]\ngreen_up = 'April'", "pattern"),
        ("[classifier]\ntrees = 'many'", "integer"),
    ],
)
def test_bad_settings_say_what_is_wrong(folder, section, words):
    """A setting out of range names its key."""
    with pytest.raises(InputError, match=words):
        load_pipeline(write(folder, LEAST + section))


def test_missing_pipeline_file(tmp_path):
    """A path that does not exist is said so."""
    with pytest.raises(InputError, match="no such pipeline file"):
        load_pipeline(tmp_path / "no.toml")


@pytest.mark.parametrize("name", ["monthly", "demo", "distributed"])
def test_shipped_pipelines_are_valid(name):
    """Every key of the shipped pipeline files is known, and monthly.toml shows every key there is."""
    import tomllib

    text = (Path(__file__).parent.parent / "pipelines" / f"{name}.toml").read_text()
    Pipeline(**tomllib.loads(text))
    if name == "monthly":
        for section, info in Pipeline.model_fields.items():
            if section == "file":
                continue
            for key in info.annotation.model_fields:
                assert re.search(rf"^(# )?{key} = ", text, re.M), f"{section}.{key}"
