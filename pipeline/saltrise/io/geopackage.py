"""Write the zone table with its polygons as a GeoPackage."""

from __future__ import annotations

import os
import sqlite3
from contextlib import closing
from datetime import datetime
from pathlib import Path
from typing import Any

from shapely.geometry import MultiPolygon

from saltrise.errors import RunError
from saltrise.io import durable
from saltrise.io.vectors import Zones
from saltrise.zone_table import MEANINGS


def write_zones_gpkg(path: Path, zones: Zones, table: dict[str, list[Any]], date: datetime) -> None:
    """Write the zone table with its polygons as layer `zones` of a GeoPackage.

    Equal inputs and dates give equal bytes: the date is the run's, not the clock's.

    Raises
    ------
    RunError
        The file cannot be written.
    """
    # Taken in here, with all they bring, for runs with zones alone.
    import geopandas
    import pandas as pd
    import pyogrio
    from pyogrio.errors import DataSourceError

    columns = {
        name: pd.array(values, dtype="Int64") if name == "rank" else values
        for name, values in table.items()
    }
    shapes = [g if g.geom_type == "MultiPolygon" else MultiPolygon([g]) for g in zones.geometries]
    frame = geopandas.GeoDataFrame(columns, geometry=shapes, crs=zones.crs_wkt)
    for name in frame.columns:
        if name not in ("zone_id", "name", "rank", "geometry"):
            frame[name] = frame[name].astype("float64")
    # GDAL insists on the extension.
    temporary = path.with_name(f"{path.stem}.partial.gpkg")
    temporary.unlink(missing_ok=True)
    before = os.environ.get("OGR_CURRENT_DATE")
    os.environ["OGR_CURRENT_DATE"] = date.strftime("%Y-%m-%dT%H:%M:%S.000Z")
    try:
        pyogrio.write_dataframe(
            frame, temporary, layer="zones", driver="GPKG", geometry_type="MultiPolygon"
        )
        _describe_fields(temporary, [name for name in table if name in MEANINGS])
        durable.sync_file(temporary)
        temporary.replace(path)
    except OSError as error:
        raise RunError(durable.explain(path, error)) from error
    except (DataSourceError, RuntimeError, sqlite3.Error) as error:
        raise RunError(f"{path}: cannot be written: {error}") from error
    finally:
        if before is None:
            del os.environ["OGR_CURRENT_DATE"]
        else:
            os.environ["OGR_CURRENT_DATE"] = before
    durable.step(path.name)


def _describe_fields(path: Path, columns: list[str]) -> None:
    """Units and meanings of the columns, as the GeoPackage schema extension keeps them."""
    with closing(sqlite3.connect(path)) as database, database:
        database.execute(
            "CREATE TABLE gpkg_data_columns (table_name TEXT NOT NULL, column_name TEXT NOT NULL, "
            "name TEXT, title TEXT, description TEXT, mime_type TEXT, constraint_name TEXT, "
            "CONSTRAINT pk_gdc PRIMARY KEY (table_name, column_name))"
        )
        database.execute(
            "CREATE TABLE gpkg_data_column_constraints (constraint_name TEXT NOT NULL, "
            "constraint_type TEXT NOT NULL, value TEXT, min NUMERIC, min_is_inclusive BOOLEAN, "
            "max NUMERIC, max_is_inclusive BOOLEAN, description TEXT)"
        )
        database.execute(
            "CREATE TABLE IF NOT EXISTS gpkg_extensions (table_name TEXT, column_name TEXT, "
            "extension_name TEXT NOT NULL, definition TEXT NOT NULL, scope TEXT NOT NULL)"
        )
        for table in ("gpkg_data_columns", "gpkg_data_column_constraints"):
            database.execute(
                "INSERT INTO gpkg_extensions VALUES (?, NULL, 'gpkg_schema', "
                "'http://www.geopackage.org/spec121/#extension_schema', 'read-write')",
                (table,),
            )
        for column in columns:
            unit, meaning = MEANINGS[column]
            text = f"{meaning} [{unit}]" if unit else meaning
            database.execute(
                "INSERT INTO gpkg_data_columns VALUES ('zones', ?, NULL, NULL, ?, NULL, NULL)",
                (column, text),
            )
