"""Catalogs: STAC 1.0 and 1.1, nested, item collections, scenes.csv, refusals, fingerprints."""

from __future__ import annotations

import json
import os

import numpy as np
import pytest
from scenes_files import plane, write_collection, write_item, write_scene, write_tif

from inundate.common.errors import InputError
from inundate.scenes import fingerprint, load_profile, open_catalog
from inundate.scenes.places import gdal_name, resolve_href, with_retries

S2 = load_profile("sentinel-2-l2a")


def test_collection_sorted_by_time(tmp_path):
    write_scene(tmp_path, "B", when="2021-05-02T10:00:00+02:00", **{"view:sun_elevation": 31.5, "proj:epsg": 32633})
    write_scene(tmp_path, "A", when="2021-06-01T10:00:00Z")
    path = write_collection(tmp_path / "collection.json", [("item", "./A/A.json"), ("item", "./B/B.json")])
    catalog = open_catalog(path, S2)
    assert [scene.scene_id for scene in catalog.scenes] == ["B", "A"]
    scene = catalog.scenes[0]
    assert scene.datetime == np.datetime64("2021-05-02T08:00:00", "ns")
    assert scene.sun_elevation_deg == 31.5
    assert np.isnan(scene.sun_azimuth_deg)
    assert scene.crs == "EPSG:32633"
    assert set(scene.bands) == {"blue", "green", "red", "nir", "swir16", "swir22"}
    assert scene.bands["blue"].href == str(tmp_path / "B" / "B02.tif")
    assert catalog.refused == ()


@pytest.mark.parametrize("version", ["1.0.0", "1.1.0"])
def test_nested_catalogs_and_loops(tmp_path, version):
    write_scene(tmp_path / "y" / "m", "A", version=version)
    write_collection(
        tmp_path / "y" / "m" / "c.json", [("item", "A/A.json"), ("child", "../../root.json")], version=version
    )
    write_collection(tmp_path / "y" / "c.json", [("child", "./m/c.json")], version=version)
    root = write_collection(tmp_path / "root.json", [("child", "y/c.json")], version=version, kind="Catalog")
    assert [scene.scene_id for scene in open_catalog(root, S2).scenes] == ["A"]


def test_item_collection_and_single_item(tmp_path):
    one = write_scene(tmp_path, "A")
    both = tmp_path / "A" / "all.json"
    both.write_text(json.dumps({"type": "FeatureCollection", "features": [json.loads(one.read_text())]}))
    for path in (one, both):
        assert [scene.scene_id for scene in open_catalog(path, S2).scenes] == ["A"]


def test_multi_band_asset_in_1_1(tmp_path):
    roles = ["nir", "red", "green", "blue"]
    data = np.stack([np.full((40, 40), 1000 * (k + 1), np.uint16) for k in range(4)])
    write_tif(tmp_path / "i.tif", data, step=3.0)
    write_tif(tmp_path / "m.tif", np.ones((40, 40), np.uint8), step=3.0)
    assets = {
        "visual": {
            "href": "v.tif",
            "roles": ["visual"],
            "bands": [{"eo:common_name": r} for r in ("red", "green", "blue")],
        },
        "data": {"href": "i.tif", "bands": [{"name": f"b{k}", "eo:common_name": r} for k, r in enumerate(roles)]},
        "mask": {"href": "m.tif"},
    }
    path = write_item(tmp_path / "i.json", "V", assets, version="1.1.0")
    scene = open_catalog(path, load_profile("visnir-4band")).scenes[0]
    assert {role: band.band for role, band in scene.bands.items()} == {"nir": 1, "red": 2, "green": 3, "blue": 4}
    assert all(band.href.endswith("i.tif") for band in scene.bands.values())


def test_refusals_name_scene_and_reason(tmp_path):
    write_scene(tmp_path, "good")
    no_band = json.loads(write_scene(tmp_path, "noband").read_text())
    del no_band["assets"]["B11"]
    (tmp_path / "noband" / "noband.json").write_text(json.dumps(no_band))
    no_mask = json.loads(write_scene(tmp_path, "nomask").read_text())
    del no_mask["assets"]["SCL"]
    (tmp_path / "nomask" / "nomask.json").write_text(json.dumps(no_mask))
    write_scene(tmp_path, "gone")
    (tmp_path / "gone" / "B04.tif").unlink()
    (tmp_path / "bad.json").write_text("{")
    wrong_offset = json.loads(write_scene(tmp_path, "offset").read_text())
    wrong_offset["assets"]["B02"]["raster:bands"] = [{"scale": 1e-4, "offset": -1000}]
    (tmp_path / "offset" / "offset.json").write_text(json.dumps(wrong_offset))
    names = ["good", "noband", "nomask", "gone", "offset"]
    links = [("item", f"{n}/{n}.json") for n in names]
    links += [("item", "bad.json"), ("item", "missing.json"), ("child", "nochild.json"), ("item", "again/good.json")]
    write_scene(tmp_path / "again", "good")
    (tmp_path / "again" / "good" / "good.json").rename(tmp_path / "again" / "good.json")
    for file in (tmp_path / "again" / "good").iterdir():
        file.rename(tmp_path / "again" / file.name)
    catalog = open_catalog(write_collection(tmp_path / "c.json", links), S2)
    assert [scene.scene_id for scene in catalog.scenes] == ["good"]
    said = {refusal.name.rsplit("/", 1)[-1]: refusal.reason for refusal in catalog.refused}
    assert "no asset for band swir16 (looked for swir16, B11" in said["noband"]
    assert "no mask asset (looked for scl, SCL" in said["nomask"]
    assert "B04.tif does not exist" in said["gone"]
    assert "offset = -1000.0 is no reflectance" in said["offset"]
    assert "not valid JSON" in said["bad.json"]
    assert "cannot be read" in said["missing.json"]
    assert "cannot be read" in said["nochild.json"]
    assert "stands twice in the catalog" in said["good"]
    assert len(catalog.refused) == 8


def test_catalog_without_scenes(tmp_path):
    empty = write_collection(tmp_path / "c.json", [])
    with pytest.raises(InputError, match=r"no scene can be used \(0 refused\), it has no items"):
        open_catalog(empty, S2)
    with pytest.raises(InputError, match="no such file"):
        open_catalog(tmp_path / "none.json", S2)
    (tmp_path / "x.json").write_text('{"type": "Thing"}')
    with pytest.raises(InputError, match="type 'Thing' is no STAC catalog"):
        open_catalog(tmp_path / "x.json", S2)


def test_baseline_from_property_id_or_date(tmp_path):
    def red(scene_id, **more):
        return open_catalog(write_scene(tmp_path, scene_id, **more), S2).scenes[0]

    assert red("p", **{"s2:processing_baseline": "05.09"}).bands["red"].offset == -0.1
    assert red("q", **{"processing:version": "03.01"}).bands["red"].offset == 0.0
    assert red("S2A_X_20180101T100000_N0500_R1").bands["red"].offset == -0.1
    assert red("S2A_X_20180101T100000_N0500_R1").baseline == "05.00"
    assert red("old").bands["red"].offset == 0.0
    assert red("new", when="2024-01-01T00:00:00Z").bands["red"].offset == -0.1


def test_table_of_scenes(tmp_path):
    for key, step in {"b": 10, "g": 10, "r": 10, "n": 10, "s": 20, "t": 20}.items():
        write_tif(
            tmp_path / f"{key}.tif", plane(5e5, 56e5, step, (600 // step,) * 2).astype(np.uint16), step=float(step)
        )
    write_tif(tmp_path / "m.tif", np.full((30, 30), 4, np.uint8), step=20.0)
    image = np.stack([np.full((90, 90), k, np.uint16) for k in (1, 2, 3, 4)])
    write_tif(tmp_path / "v.tif", image, step=3.0)
    write_tif(tmp_path / "w.tif", image, step=3.0, descriptions=("nir", "red", "green", "blue"))
    write_tif(tmp_path / "x.tif", image[:3], step=3.0)
    write_tif(tmp_path / "vm.tif", np.ones((90, 90), np.uint8), step=3.0)
    (tmp_path / "scenes.csv").write_text(
        "scene_id,datetime,sensor,image,blue,green,red,nir,swir16,swir22,mask,baseline\n"
        "A,2021-01-05T10:00:00Z,,,b.tif,g.tif,r.tif,n.tif,s.tif,t.tif,m.tif,05.00\n"
        "V,2021-01-04,visnir-4band,v.tif,,,,,,,vm.tif,\n"
        "W,2021-01-03,visnir-4band,w.tif,,,,,,,vm.tif,\n"
        "X,2021-01-02,visnir-4band,x.tif,,,,,,,vm.tif,\n"
        "T,yesterday,,,b.tif,g.tif,r.tif,n.tif,s.tif,t.tif,m.tif,\n"
        "N,2021-01-01,,,b.tif,g.tif,r.tif,n.tif,s.tif,,m.tif,\n"
        "V,2021-02-04,visnir-4band,v.tif,,,,,,,vm.tif,\n"
        "Q,2021-02-04,own.toml,v.tif,,,,,,,vm.tif,\n"
    )
    catalog = open_catalog(tmp_path / "scenes.csv", S2)
    assert [scene.scene_id for scene in catalog.scenes] == ["W", "V", "A"]
    w, v, a = catalog.scenes
    assert a.bands["red"].offset == -0.1
    assert (v.sensor, v.bands["nir"].band, w.bands["nir"].band) == ("visnir-4band", 4, 1)
    said = [(refusal.name, refusal.reason) for refusal in catalog.refused]
    assert any(n == "X" and "row 5: image" in r and "3 bands without descriptions" in r for n, r in said)
    assert any(n == "T" and "row 6: datetime 'yesterday' is no ISO 8601 time" in r for n, r in said)
    assert any(n == "N" and "row 7: no band swir22" in r for n, r in said)
    assert any(n == "V" and "stands twice" in r for n, r in said)
    assert any(n == "Q" and "neither a file nor a shipped profile" in r for n, r in said)


@pytest.mark.parametrize(
    ("head", "message"),
    [
        ("scene_id,datetime,mask,colour", "unknown column 'colour'"),
        ("scene_id,mask,image", "column 'datetime' is missing"),
    ],
)
def test_table_columns(tmp_path, head, message):
    path = tmp_path / "scenes.csv"
    path.write_text(head + "\n" + ",".join("x" for _ in head.split(",")) + "\n")
    with pytest.raises(InputError, match=message):
        open_catalog(path, S2)


def test_fingerprint_follows_files_and_scaling(tmp_path):
    path = write_scene(tmp_path, "A")
    scene = open_catalog(path, S2).scenes[0]
    first = fingerprint(scene)
    assert fingerprint(open_catalog(path, S2).scenes[0]) == first
    band = tmp_path / "A" / "B03.tif"
    state = band.stat()
    os.utime(band, ns=(state.st_atime_ns, state.st_mtime_ns + 1))
    assert fingerprint(scene) != first
    os.utime(band, ns=(state.st_atime_ns, state.st_mtime_ns))
    assert fingerprint(scene) == first
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "A").rename(tmp_path / "elsewhere" / "A")  # an archive that was moved is the same
    assert fingerprint(open_catalog(tmp_path / "elsewhere" / "A" / "A.json", S2).scenes[0]) == first
    (tmp_path / "elsewhere" / "A").rename(tmp_path / "A")
    write_item_again = json.loads(path.read_text())
    write_item_again["properties"]["s2:processing_baseline"] = "05.00"
    path.write_text(json.dumps(write_item_again))
    assert fingerprint(open_catalog(path, S2).scenes[0]) != first


def test_remote_addresses(tmp_path):
    assert resolve_href("./a/b.tif", "https://h.example/x/y.json") == "https://h.example/x/a/b.tif"
    assert resolve_href("../b.tif", "s3://bucket/x/y.json") == "s3://bucket/b.tif"
    assert resolve_href("s3://k/b.tif", "/d/c.json") == "s3://k/b.tif"
    assert resolve_href("file:///d/a%20b.tif", "/x/c.json") == "/d/a b.tif"
    assert gdal_name("https://h.example/b.tif?sig=1") == "/vsicurl/https://h.example/b.tif?sig=1"
    assert gdal_name("s3://bucket/b.tif") == "/vsis3/bucket/b.tif"
    assert gdal_name("/d/b.tif") == "/d/b.tif"


def test_remote_reads_are_tried_again_local_ones_are_not():
    calls = []

    def fail_twice():
        calls.append(1)
        if len(calls) < 3:
            message = "down"
            raise OSError(message)
        return "up"

    assert with_retries(fail_twice, "https://h.example/x", wait_s=0.001) == "up"
    calls.clear()
    with pytest.raises(OSError, match="down"):
        with_retries(fail_twice, "/d/x", wait_s=0.001)
    assert len(calls) == 1
    calls.clear()
    with pytest.raises(OSError, match="down"):
        with_retries(fail_twice, "s3://b/x", tries=2, wait_s=0.001)
    assert len(calls) == 2


def test_catalog_over_http(tmp_path):
    """A static catalog served over HTTP: links, relative assets and reading of windows."""
    import http.server
    import threading
    from functools import partial

    from inundate.common.grid import Grid, Window
    from inundate.scenes import read_view

    write_scene(tmp_path, "A", updated="2021-05-02T00:00:00Z")
    write_collection(tmp_path / "c.json", [("item", "./A/A.json")])

    class Quiet(http.server.SimpleHTTPRequestHandler):
        def log_message(self, *args):
            pass

    server = http.server.ThreadingHTTPServer(("127.0.0.1", 0), partial(Quiet, directory=str(tmp_path)))
    threading.Thread(target=server.serve_forever, daemon=True).start()
    try:
        catalog = open_catalog(f"http://127.0.0.1:{server.server_port}/c.json", S2)
        scene = catalog.scenes[0]
        assert scene.bands["red"].href.startswith("http://127.0.0.1")
        assert "2021-05-02" in scene.stamp
        view = read_view(scene, S2, Grid("EPSG:32633", 5e5, 56e5, 10.0, 120, 120), [Window(0, 20, 0, 20)])
        want = plane(5e5, 56e5, 10.0, (20, 20)).astype(np.uint16) * 1e-4
        np.testing.assert_allclose(view.blocks[0].reflectance[2], want, atol=1e-6)
    finally:
        server.shutdown()
        server.server_close()
