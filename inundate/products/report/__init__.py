"""The report of a delivery: a page that works offline, static figures for papers, and the methods sheet.

Everything is made from :class:`ReportTables` (the delivery's tables, its scores, and what the archive keeps beside them).
The same tables give the same bytes.
"""

from inundate.products.report.figures import write_figures
from inundate.products.report.methods import write_methods
from inundate.products.report.page import write_report
from inundate.products.report.tables import ReportTables
from inundate.products.report.thumbnails import Thumbnail, choose_views, paint_view

__all__ = [
    "ReportTables",
    "Thumbnail",
    "choose_views",
    "paint_view",
    "write_figures",
    "write_methods",
    "write_report",
]
