"""The report page: templates, styles and scripts put together with the data."""

from __future__ import annotations

from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from jinja2 import Environment

from inundate.common.codes import LEAF_STATES
from inundate.common.writing import replacing_folder, write_text
from inundate.products.report import summary
from inundate.products.report.details import Split, wetland_details
from inundate.products.report.encode import script_json
from inundate.products.report.index import index_data
from inundate.products.report.palettes import SOURCE, page_palettes
from inundate.products.report.tables import ReportTables

MOST_IN_PAGE = 200
DETAIL_FOLDER = "report_wetlands"
_SCRIPTS = ("data.js", "charts.js", "map.js", "table.js", "detail.js", "skill.js", "start.js")
CAUTIONS = (
    "Not for flood safety or warning: extents are estimates of past days, with errors that this page shows.",
    "Not for legal boundaries of wetlands or of property: the outlines are those that were given.",
    "Not for deciding whether it is safe to work on water or ice: stand at the place and follow field safety rules.",
)


def _resource(name: str) -> str:
    return files("inundate.products.report").joinpath(name).read_text(encoding="utf-8")


@lru_cache(maxsize=1)
def plot_library() -> str:
    """Return the script of the plotting library (Bokeh, BSD-3-Clause) as it may stand inside a page."""
    import bokeh

    folder = Path(bokeh.__file__).parent / "server" / "static" / "js"
    text = "\n".join((folder / name).read_text(encoding="utf-8") for name in ("bokeh.min.js", "bokeh-api.min.js"))
    return text.replace("</script", "<\\/script").replace("<!--", "<\\!--")


def page_script() -> str:
    """Return the page's own script."""
    return "\n".join(_resource(name) for name in _SCRIPTS)


def _environment() -> Environment:
    env = Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True)
    env.filters["share"] = lambda v: summary.percent_text(np.nan if v is None else float(v))
    env.filters["number"] = lambda v, digits=2: "–" if v is None else f"{v:,.{digits}f}"
    env.filters["words"] = lambda v: str(v).replace("_", "-")
    return env


def _confusion(skill: dict[str, Any]) -> list[tuple[str, dict[str, Any]]]:
    """Return wet / dry counts by leaf state, in the order of the year, the whole last."""
    found = skill.get("wet_dry")
    if not found:
        return []
    by = found.get("by_leaf_state") or {}
    rows = [(s.replace("_", "-"), by[s]) for s in LEAF_STATES if (by.get(s) or {}).get("n")]
    return [*rows, ("all", found["all"])] if (found.get("all") or {}).get("n") else rows


def _error_rates(skill: dict[str, Any]) -> list[dict[str, Any]]:
    rows = (skill.get("classifier") or {}).get("error_rates") or []
    order = {name: i for i, name in enumerate((*LEAF_STATES, "all"))}
    kept = [r for r in rows if r.get("stratum") == "all" and r.get("leaf_state") in order]
    return sorted(kept, key=lambda r: order[r["leaf_state"]])


def _context(tables: ReportTables, rows: pd.DataFrame, items: list[dict[str, Any]]) -> dict[str, Any]:
    from inundate.skill import headline

    skill = tables.skill
    scores = headline(skill) if skill else {}
    filled = skill.get("filled") or {}
    return {
        "run": tables.run,
        "delivered": summary.delivered(tables, rows),
        "look": items,
        "refused": summary.refused(tables),
        "changed": summary.changed(tables),
        "scores": scores,
        "confusion": _confusion(skill),
        "unsure": (skill.get("wet_dry") or {}).get("unsure_days", 0),
        "errors": _error_rates(skill),
        "hidden": {k: (filled.get(k) or {}).get("all") or {} for k in ("views", "logger")},
        "walked": skill.get("walked"),
        "rank": skill.get("rank"),
        "covers": sorted({c for c in rows["cover"] if c}),
        "cautions": CAUTIONS,
        "colour_source": SOURCE,
    }


def write_report(folder: Path, tables: ReportTables) -> list[Path]:
    """Write ``report.html`` (and, for more than 200 wetlands, a page each in ``report_wetlands/``) into ``folder``.

    Parameters
    ----------
    folder : Path
        The delivery's folder.
    tables : ReportTables

    Returns
    -------
    list of Path
        ``report.html``, then the folder of wetland pages where there is one.

    Notes
    -----
    The page holds all it needs and asks no network for anything. The same tables give the same bytes.
    """
    rows = summary.wetland_rows(tables)
    items = summary.look_at(tables, rows)
    flags = summary.look_flags(items, rows, tables)
    paged = len(rows) > MOST_IN_PAGE
    split = Split(tables)
    shapes = dict(zip(tables.shapes["wetland_id"].astype(str), tables.shapes.geometry, strict=True))
    details = ((i, wetland_details(tables, split, row, shapes.get(row["wetland_id"]))) for i, row in rows.iterrows())
    env, written = _environment(), [folder / "report.html"]
    inside: list[tuple[int, str]] = []
    if paged:
        _write_pages(folder / DETAIL_FOLDER, env, tables, details)
        written.append(folder / DETAIL_FOLDER)
    else:
        inside = [(int(str(i)), script_json(one)) for i, one in details]
    text = env.from_string(_resource("page.html.j2")).render(
        **_context(tables, rows, items),
        paged=paged,
        style=_resource("page.css"),
        library=plot_library(),
        script=page_script(),
        data=script_json(index_data(tables, rows, flags, paged=paged)),
        details=inside,
    )
    write_text(folder / "report.html", text)
    return written


def page_name(position: int) -> str:
    """Return the file name of a wetland's page by its row in the table."""
    return f"{position + 1:05d}.html"


def _write_pages(folder: Path, env: Environment, tables: ReportTables, details: Any) -> None:
    """Write one small page a wetland; library, script and style lie once in the same folder."""
    template = env.from_string(_resource("detail.html.j2"))
    common = script_json({"area": tables.run.get("area", ""), "month": tables.run["month"], "palette": page_palettes()})
    with replacing_folder(folder) as scratch:
        (scratch / "plots.js").write_text(plot_library(), encoding="utf-8")
        (scratch / "page.js").write_text(page_script(), encoding="utf-8")
        (scratch / "page.css").write_text(_resource("page.css"), encoding="utf-8")
        for i, one in details:
            text = template.render(
                run=tables.run, name=one["id"], data=common, details=script_json(one), cautions=CAUTIONS
            )
            (scratch / page_name(int(str(i)))).write_text(text, encoding="utf-8")
