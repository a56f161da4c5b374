"""The one door to vector formats: attributes of GeoPackage and GeoParquet layers (geopandas and pyogrio)."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pandas as pd

from change_assess.errors import FileError, InputError


def read_attributes(path: str | Path) -> pd.DataFrame:
    """Attribute table of the first layer of a GeoPackage, or of a (Geo)Parquet file, without geometry.

    Raises
    ------
    FileError
        If the file does not exist.
    InputError
        If it cannot be read as what its suffix says.
    """
    path = Path(path)
    if not path.is_file():
        raise FileError(f"{path} {'is a folder, not a file' if path.exists() else 'does not exist'}.")
    try:
        if path.suffix.lower() == ".gpkg":
            import pyogrio

            frame: pd.DataFrame = pyogrio.read_dataframe(path, read_geometry=False)
            return frame
        frame = pd.read_parquet(path)
    except Exception as error:
        raise InputError(
            f"the file cannot be read ({str(error).splitlines()[0]})",
            file=path.name,
            mend="Open it in a GIS and save it again as GeoPackage, GeoParquet or CSV.",
        ) from error
    return frame.drop(columns=[c for c in frame.columns if c == "geometry"])


def write_points(path: str | Path, frame: pd.DataFrame, *, x: str, y: str, crs: Any) -> Path:
    """Write a table as points to a GeoPackage, safely; `x` and `y` name the coordinate columns."""
    import geopandas

    from change_assess.files import replacing

    points = geopandas.GeoDataFrame(frame, geometry=geopandas.points_from_xy(frame[x], frame[y]), crs=crs)
    with replacing(path) as temporary:
        temporary.unlink()
        points.to_file(temporary, driver="GPKG", layer=Path(path).stem)
    return Path(path)
