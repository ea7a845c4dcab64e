"""The raster library's own settings: bounded memory, and data files that fit it."""

from __future__ import annotations

import os

from saltrise.errors import InputError

# GDAL's default cache is 5 % of all memory for each process; it is read at first use.
os.environ.setdefault("GDAL_CACHEMAX", "256")

# Read late, the offsets of a TIFF's blocks can fail to arrive (a server that stumbles, a torn file)
# without an error: GDAL then takes the blocks for empty and fills them with nodata.
os.environ.setdefault("GTIFF_USE_DEFER_STRILE_LOADING", "NO")

# A server that stumbles is asked again before a run gives up.
os.environ.setdefault("GDAL_HTTP_MAX_RETRY", "5")
os.environ.setdefault("GDAL_HTTP_RETRY_DELAY", "0.5")
os.environ.setdefault("GDAL_HTTP_CONNECTTIMEOUT", "20")
os.environ.setdefault("GDAL_HTTP_LOW_SPEED_TIME", "60")
os.environ.setdefault("GDAL_HTTP_LOW_SPEED_LIMIT", "1")

_DATA_VARIABLES = ("PROJ_DATA", "PROJ_LIB", "GDAL_DATA")


def require_working_libraries() -> None:
    """Find out before any work whether GDAL and PROJ find their own data files.

    Raises
    ------
    InputError
        They do not, most often because another program left its folders in the environment.
    """
    import pyproj
    import rasterio.crs
    from pyproj.exceptions import CRSError as ProjError
    from rasterio.errors import CRSError

    try:
        rasterio.crs.CRS.from_epsg(4326)
        pyproj.CRS.from_epsg(4326)
    except (CRSError, ProjError) as error:
        left = [f"{name}={os.environ[name]}" for name in _DATA_VARIABLES if name in os.environ]
        hint = (
            f"; unset {', '.join(left)} and try again" if left else "; reinstall rasterio, pyproj"
        )
        raise InputError(f"GDAL and PROJ cannot find their data files ({error}){hint}") from error
