"""Product files: tables with fixed columns, CF NetCDF, Cloud-Optimized GeoTIFF maps, the summary layer."""

from inundate.products.layer import write_wetlands_layer
from inundate.products.maps import write_map
from inundate.products.netcdf import write_daily_netcdf, write_draws_netcdf
from inundate.products.tables import COLUMNS, changes, write_product_table

__all__ = [
    "COLUMNS",
    "changes",
    "write_daily_netcdf",
    "write_draws_netcdf",
    "write_map",
    "write_product_table",
    "write_wetlands_layer",
]
