"""The report page in a real headless browser: it works offline, says what the tables say, and takes any name as text."""

from __future__ import annotations

import dataclasses
import re
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from inundate.products.report import ReportTables, choose_views, paint_view, write_figures, write_methods, write_report
from inundate.products.report.encode import runs, script_json
from inundate.products.report.thumbnails import png
from tests.report_world import make_tables

HOSTILE = [
    "<script>alert(1)</script>",
    "</script><img src=x onerror=alert(2)>",
    "a" * 300,
    "Ü & \"quotes\" 'here'",
    "$x_1^{2$",
]
NAMES = [f"W{i:02d}" for i in range(12)]


def whole_number(value: float) -> str:
    """The table's own writing of a number: no decimals, commas at thousands."""
    return f"{value:,.0f}"


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    """A headless chromium; the tests are left out where there is none."""
    sync = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")
    found = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
    if found is None:
        pytest.skip("no chromium on this machine: the page cannot be opened in a browser")
    with sync.sync_playwright() as play:
        engine = play.chromium.launch(executable_path=found, args=["--no-sandbox"])
        yield engine
        engine.close()


class Opened:
    """A page with all that it complained of and asked for."""

    def __init__(self, browser: Any, file: Path, width: int = 1400) -> None:
        self.page = browser.new_page(viewport={"width": width, "height": 900})
        self.errors: list[str] = []
        self.asked: list[str] = []
        self.dialogs: list[str] = []
        self.page.on("console", lambda m: self.errors.append(m.text) if m.type in ("error", "warning") else None)
        self.page.on("pageerror", lambda e: self.errors.append(str(e)))
        self.page.on("request", lambda r: self.asked.append(r.url))
        self.page.on("dialog", lambda d: (self.dialogs.append(d.message), d.dismiss()))
        self.page.goto(file.as_uri())
        self.settle()

    def settle(self) -> None:
        """Wait until every chart that was asked for is drawn."""
        self.page.evaluate("() => Charts.busy")
        self.page.wait_for_timeout(150)

    def column(self, place: int) -> list[str]:
        """Texts of a column of the wetland table, as shown."""
        return self.page.eval_on_selector_all(
            f"#table tbody tr td:nth-child({place})", "nodes => nodes.map(n => n.textContent)"
        )


@pytest.fixture(scope="module")
def tables() -> ReportTables:
    return make_tables(NAMES, changed=30)


@pytest.fixture(scope="module")
def folder(tables: ReportTables, tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("delivery")
    write_report(out, tables)
    write_methods(out, tables)
    return out


@pytest.fixture
def opened(browser: Any, folder: Path) -> Iterator[Opened]:
    one = Opened(browser, folder / "report.html")
    yield one
    one.page.close()


@pytest.mark.parametrize("width", [1400, 420])
def test_page_opens_without_errors_network_or_sideways_scrolling(browser: Any, folder: Path, width: int) -> None:
    one = Opened(browser, folder / "report.html", width)
    assert one.errors == []
    assert [u for u in one.asked if not u.startswith(("file:", "data:", "blob:"))] == []
    assert [u for u in one.asked if u.startswith("file:")] == [(folder / "report.html").as_uri()]
    assert one.page.evaluate("document.documentElement.scrollWidth") <= width
    assert one.page.locator("canvas").count() >= 6, "total, series, stage, relation, logger, reliability, coverage"
    one.page.close()


def test_table_says_what_the_product_tables_say(opened: Opened, tables: ReportTables) -> None:
    month = tables.daily[tables.daily["date"].dt.strftime("%Y-%m") == "2031-12"]
    by = month.groupby("wetland_id")
    width = (month["area_hi_m2"] - month["area_lo_m2"]).groupby(month["wetland_id"]).mean()
    used = tables.observed[tables.observed["used"]].groupby("wetland_id")
    assert opened.column(1) == NAMES
    assert opened.column(4) == [whole_number(v) for v in tables.shapes["area_max_m2"]]
    assert opened.column(5) == [whole_number(v) for v in by["area_m2"].mean()]
    assert opened.column(6) == [whole_number(v) for v in by["area_m2"].min()]
    assert opened.column(7) == [whole_number(v) for v in by["area_m2"].max()]
    assert opened.column(8) == [whole_number(v) for v in width]
    assert opened.column(10) == [str(v) for v in used.size()]
    assert opened.column(11) == [f"{v:%Y-%m-%d}" for v in used["datetime"].max()]
    assert opened.column(17) == [
        str(v) for v in tables.changes.groupby("wetland_id").size().reindex(NAMES, fill_value=0)
    ]


def test_slider_sets_day_of_map_total_and_series(opened: Opened, tables: ReportTables) -> None:
    page = opened.page
    days = tables.daily["date"].drop_duplicates().sort_values().reset_index(drop=True)
    before = page.eval_on_selector_all("#map path[data-i]", "n => n.map(p => p.getAttribute('fill'))")
    page.focus("#day")
    page.keyboard.press("Home")
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    day = days[3]
    assert page.text_content("#day-text") == f"{day:%Y-%m-%d}"
    total = tables.daily.loc[tables.daily["date"] == day, "area_m2"].sum() / 1e4
    said = re.search(r": ([\d,.]+) ha in all", page.text_content("#total-text"))
    assert said is not None
    assert float(said.group(1)) == pytest.approx(total, abs=0.0051)
    row = tables.daily[(tables.daily["date"] == day) & (tables.daily["wetland_id"] == "W00")].iloc[0]
    text = page.text_content("#d-day")
    assert text.startswith(
        f"{day:%Y-%m-%d}: {whole_number(row.area_m2)} m² (90 % interval {whole_number(row.area_lo_m2)} to {whole_number(row.area_hi_m2)} m²)"
    )
    stage = tables.stage[(tables.stage["date"] == day) & (tables.stage["wetland_id"] == "W00")]["stage_m"].iloc[0]
    assert f"Stage {stage:.3f} m" in text
    page.keyboard.press("End")
    after = page.eval_on_selector_all("#map path[data-i]", "n => n.map(p => p.getAttribute('fill'))")
    assert after == before
    page.evaluate(
        "document.getElementById('day').value = 180; document.getElementById('day').dispatchEvent(new Event('input'))"
    )
    assert page.eval_on_selector_all("#map path[data-i]", "n => n.map(p => p.getAttribute('fill'))") != before
    assert opened.errors == []


def test_map_colours_by_extent_uncertainty_and_skill(opened: Opened, tables: ReportTables) -> None:
    page = opened.page
    seen = {}
    for kind in ("extent", "width", "skill"):
        page.check(f"input[name=colour][value={kind}]")
        seen[kind] = page.eval_on_selector_all("#map path[data-i]", "n => n.map(p => p.getAttribute('fill'))")
    assert len({tuple(v) for v in seen.values()}) == 3
    page.focus("#map")
    page.keyboard.press("ArrowRight")
    share = tables.skill["by_wetland"]["W00"]["filled_rmse_share"]
    assert (
        page.text_content("#map-text")
        == f"W00: held-out error {100 * share:.0f} % of its largest extent (hidden views)"
    )


def test_headings_sort_both_ways(opened: Opened, tables: ReportTables) -> None:
    order = tables.shapes.sort_values("area_max_m2")["wetland_id"].tolist()
    head = opened.page.locator("#table th[data-key=areaMax]")
    head.locator("button").click()
    assert opened.column(1) == order
    assert head.get_attribute("aria-sort") == "ascending"
    head.locator("button").press("Enter")
    assert opened.column(1) == order[::-1]
    assert head.get_attribute("aria-sort") == "descending"


def test_filters_keep_what_they_say(opened: Opened, tables: ReportTables) -> None:
    page, shapes = opened.page, tables.shapes
    page.fill("#f-name", "w1")
    assert opened.column(1) == ["W10", "W11"]
    page.fill("#f-name", "")
    page.select_option("#f-cover", "open")
    assert opened.column(1) == shapes.loc[shapes["cover"] == "open", "wetland_id"].tolist()
    page.select_option("#f-cover", "")
    page.select_option("#f-size", "3000,10000")
    assert (
        opened.column(1)
        == shapes.loc[shapes["area_max_m2"].between(3000, 10000, inclusive="left"), "wetland_id"].tolist()
    )
    page.select_option("#f-size", "")
    page.check("#f-logger")
    assert opened.column(1) == NAMES[:2]
    assert page.text_content("#f-count") == "2 of 12 wetlands"


def test_choosing_a_wetland_shows_it_from_table_map_and_list(opened: Opened, tables: ReportTables) -> None:
    page = opened.page
    page.click("#table tbody tr:nth-child(4) button")
    opened.settle()
    assert page.text_content("#one-name") == "W03"
    assert "No logger record" in page.text_content("#details")
    assert page.locator("#d-relation canvas").count() >= 1
    assert page.locator(".shot img").count() == 4, "two views, two pictures each"
    before = page.locator(".shot img").first.get_attribute("src")
    page.check("input[name=bands][value=false]")
    assert page.locator(".shot img").first.get_attribute("src") != before
    page.select_option("#pick", label="W01")
    opened.settle()
    assert page.text_content("#one-name") == "W01"
    assert page.locator("#d-stage canvas").count() >= 1
    assert page.locator("#d-logger0 canvas").count() >= 1
    page.focus("#map")
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    page.keyboard.press("Enter")
    opened.settle()
    assert page.text_content("#one-name") == "W02"
    assert opened.errors == []


def test_scores_on_the_page_equal_the_scores(opened: Opened, tables: ReportTables) -> None:
    rows = opened.page.eval_on_selector_all(
        "#confusion tbody tr", "n => n.map(r => [...r.children].map(c => c.textContent))"
    )
    for name, both_wet, both_dry, only_seen, only_known, agreement, *_ in rows:
        found = (
            tables.skill["wet_dry"]["all"]
            if name == "all"
            else tables.skill["wet_dry"]["by_leaf_state"][name.replace("-", "_")]
        )
        assert [int(v) for v in (both_wet, both_dry, only_seen, only_known)] == [
            found[k] for k in ("both_wet", "both_dry", "only_seen", "only_known")
        ]
        assert agreement == f"{100 * found['accuracy']:.1f} %"
    assert len(rows) == 5
    cell = opened.page.locator("[data-score='hidden views, coverage of the 90 % interval']")
    assert cell.text_content() == f"{tables.skill['filled']['views']['all']['coverage']:.3f}"


def test_hostile_names_show_as_text(browser: Any, tmp_path: Path) -> None:
    tables = make_tables(HOSTILE, days=60, n_logged=3)
    tables = dataclasses.replace(
        tables, run={**tables.run, "area": "<b>Area</b>", "notes": ["<i>note</i>"]}, warnings=["<u>odd</u>"]
    )
    write_report(tmp_path, tables)
    one = Opened(browser, tmp_path / "report.html")
    assert one.column(1) == sorted(HOSTILE)
    for k, name in enumerate(sorted(HOSTILE)):
        one.page.select_option("#pick", str(k))
        one.settle()
        assert one.page.text_content("#one-name") == name
    assert one.page.text_content("h1") == "<b>Area</b>"
    assert "<u>odd</u>" in one.page.text_content("#month")
    assert one.page.evaluate("document.documentElement.scrollWidth") <= 1400
    assert (one.errors, one.dialogs) == ([], [])
    write_figures(tmp_path / "figures", tables)
    one.page.close()


def poor(kind: str) -> ReportTables:
    """Deliveries that lack something."""
    if kind == "one wetland":
        return make_tables(["only"], days=40, n_logged=0, pictures=0)
    tables = make_tables(NAMES[:3], days=60, n_logged=0, pictures=0)
    if kind == "nothing but days":
        none = dict.fromkeys(("heldout", "pairs", "reasons", "loggers", "checks"))
        empty = {
            k: getattr(tables, k).iloc[:0]
            for k in ("observed", "stage", "relations", "relation_table", "hydroperiod", "size_classes", "changes")
        }
        return dataclasses.replace(tables, skill={}, trend=[], **none, **empty)
    daily, observed = tables.daily.copy(), tables.observed.copy()
    daily[["area_m2", "area_lo_m2", "area_hi_m2"]] = np.nan
    observed[["area_m2", "area_sd_m2", "clear_fraction"]] = np.nan
    return dataclasses.replace(
        tables, daily=daily, observed=observed, relation_table=tables.relation_table.assign(area_m2=np.nan)
    )


@pytest.mark.parametrize("kind", ["one wetland", "nothing but days", "no number known"])
def test_page_stands_with_little(browser: Any, tmp_path: Path, kind: str) -> None:
    tables = poor(kind)
    write_report(tmp_path, tables)
    write_methods(tmp_path, tables)
    write_figures(tmp_path / "figures", tables)
    one = Opened(browser, tmp_path / "report.html")
    assert one.errors == []
    assert len(one.column(1)) == len(tables.shapes)
    text = one.page.inner_text("body")
    assert "NaN" not in text
    assert "undefined" not in text
    assert "null" not in text
    one.page.close()


def test_more_than_200_wetlands_have_a_page_each(browser: Any, tmp_path: Path) -> None:
    tables = make_tables([f"W{i:03d}" for i in range(201)], days=40, n_logged=1, pictures=1)
    written = write_report(tmp_path, tables)
    assert [p.name for p in written] == ["report.html", "report_wetlands"]
    assert len(list((tmp_path / "report_wetlands").glob("*.html"))) == 201
    one = Opened(browser, tmp_path / "report.html")
    one.page.click("#table tbody tr:nth-child(200) a")
    one.page.wait_for_load_state()
    one.settle()
    assert one.page.text_content("h1") == "W199"
    assert one.page.locator("#d-series canvas").count() >= 1
    assert one.errors == []
    assert all(u.startswith(("file:", "data:")) for u in one.asked)
    one.page.close()


def test_what_to_look_at_names_the_right_wetlands(browser: Any, tmp_path: Path, tables: ReportTables) -> None:
    observed, daily, relations = tables.observed.copy(), tables.daily.copy(), tables.relations.copy()
    gone = observed["wetland_id"] == "W05"
    observed = observed[~(gone & (observed["datetime"] > pd.Timestamp("2031-09-15", tz="UTC")))]
    observed.loc[observed["wetland_id"] == "W07", "used"] = False
    largest = daily["wetland_id"].map(tables.shapes.set_index("wetland_id")["area_max_m2"])
    wide = daily["wetland_id"] == "W02"
    daily.loc[wide, "area_lo_m2"], daily.loc[wide, "area_hi_m2"] = 0.0, largest[wide]
    relations.loc[relations["wetland_id"] == "W01", "rmse_m2"] = 1e6
    loud = ["agreement is 0.500 this month; it was 0.900 in the middle of 8 earlier months"]
    odd = dataclasses.replace(tables, observed=observed, daily=daily, relations=relations, warnings=loud)
    write_report(tmp_path, odd)
    one = Opened(browser, tmp_path / "report.html")
    items = one.page.eval_on_selector_all(
        ".look li",
        "n => n.map(i => [i.firstChild.textContent, [...i.querySelectorAll('button')].map(b => b.textContent)])",
    )
    starts = ("agreement is", "No usable view at all", "No usable view for", "The month's", "The stage-area")
    assert [text.startswith(s) for (text, _), s in zip(items, starts, strict=True)] == [True] * 5
    assert [names for _, names in items] == [[], ["W07"], ["W05"], ["W02"], ["W01"]]
    one.page.check("#f-look")
    assert one.column(1) == ["W01", "W02", "W05", "W07"]
    one.page.click(".look button:text('W02')")
    one.settle()
    assert one.page.text_content("#one-name") == "W02"
    assert one.errors == []
    one.page.close()


def test_page_prints_and_every_chart_names_its_axes(opened: Opened) -> None:
    labels = opened.page.evaluate(
        "() => Bokeh.documents.flatMap(d => d.roots()).flatMap(f => [...(f.below ?? []), ...(f.left ?? [])]).map(a => a.axis_label)"
    )
    assert len(labels) >= 14
    named = [t for t in labels if t]
    assert len(labels) - len(named) <= 1, "only the list of groups of the coverage chart goes without"
    assert all(re.search(r"\(.+\)", t) for t in named), named
    opened.page.emulate_media(media="print")
    assert opened.page.evaluate("getComputedStyle(document.querySelector('.tablebox')).overflow") == "visible"
    assert opened.page.evaluate("getComputedStyle(document.querySelector('nav')).display") == "none"


def test_same_tables_give_the_same_bytes(tables: ReportTables, folder: Path, tmp_path: Path) -> None:
    shuffled = dataclasses.replace(tables, thumbnails=dict(reversed(tables.thumbnails.items())))
    write_report(tmp_path, shuffled)
    write_methods(tmp_path, shuffled)
    assert (tmp_path / "report.html").read_bytes() == (folder / "report.html").read_bytes()
    assert (tmp_path / "methods.html").read_bytes() == (folder / "methods.html").read_bytes()
    few = dataclasses.replace(tables, shapes=tables.shapes.iloc[:2])
    one, two = (write_figures(tmp_path / n, few) for n in ("one", "two"))
    assert [p.name for p in one] == [p.name for p in two]
    assert all(a.read_bytes() == b.read_bytes() for a, b in zip(one, two, strict=True))
    assert {p.suffix for p in one} == {".png", ".svg"}
    assert {p.stem for p in one} >= {"total", "relations", "loggers", "skill", "series_01"}


def test_methods_sheet_tells_settings_and_counts(folder: Path, tables: ReportTables) -> None:
    text = (folder / "methods.html").read_text(encoding="utf-8")
    assert f"{int(tables.observed['used'].sum())} were used" in text
    assert "too few pixels seen" in text
    assert "<td>shift_limit_px</td><td>2.0</td>" in text
    assert not re.search(r"(src|href)=.http", text)


def test_json_cannot_end_its_element() -> None:
    text = script_json({"a": "</script><!-- &\u2028", "b": np.nan})
    assert not set("<>&\u2028") & set(text)


def test_runs_tell_codes_and_lengths() -> None:
    assert runs(np.array([3, 3, 1, 3])) == [3, 2, 1, 1, 3, 1]
    assert runs(np.array([])) == []


def test_png_reads_back_and_unseen_ground_is_grey() -> None:
    image = pytest.importorskip("PIL.Image")
    import io

    pixels = np.random.default_rng(1).integers(0, 256, (5, 7, 3)).astype(np.uint8)
    assert (np.asarray(image.open(io.BytesIO(png(pixels)))) == pixels).all()
    band = np.full((4, 4), 0.1, np.float32)
    band[0, 0] = np.nan
    shot = paint_view(
        "S", {"blue": band, "green": band, "red": band, "nir": band}, np.full((4, 4), 255, np.uint8), (0, 0, 40, 40)
    )
    true = np.asarray(image.open(io.BytesIO(shot.true_colour)))
    assert tuple(true[0, 0]) == (118, 118, 118)
    assert tuple(true[1, 1]) != (118, 118, 118)
    assert (np.asarray(image.open(io.BytesIO(shot.probability))) == 118).all()


def test_views_are_chosen_across_leaf_states() -> None:
    states = ["leaf_off"] * 6 + ["green_up", "leaf_on", "leaf_fall", "leaf_off"]
    seen = pd.DataFrame(
        {
            "scene_id": [f"S{i}" for i in range(10)],
            "datetime": pd.date_range("2031-01-01", periods=10),
            "leaf_state": states,
            "area_m2": [1, 9, 5, 0, 8, 5, 5, 5, 5, 5.0],
            "clear_fraction": 1.0,
            "used": True,
        }
    )
    seen.loc[1, "clear_fraction"] = 0.2
    assert choose_views(seen, 6) == ["S3", "S4", "S6", "S7", "S8", "S9"]
    assert choose_views(seen.assign(used=False)) == []
