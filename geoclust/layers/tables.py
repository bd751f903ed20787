"""Points from a text table with coordinate columns."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely

from geoclust.errors import InputError, UsageError

SUFFIXES = (".csv", ".tsv", ".txt")
_SEPARATORS = (",", ";", "\t", "|")


def is_table(name: str) -> bool:
    """True if a file name is that of a text table."""
    return name.lower().endswith(SUFFIXES)


def read_table(name: str, x_column: str | None, y_column: str | None) -> gpd.GeoDataFrame:
    """Read points from a table with a header line.

    Parameters
    ----------
    name
        File of comma, semicolon, tab or bar separated values, UTF-8, decimal points.
    x_column, y_column
        Columns of easting (longitude) and northing (latitude). Never guessed.

    Returns
    -------
    GeoDataFrame
        All columns, with points, without a CRS; geometry None where a coordinate is missing.

    Raises
    ------
    UsageError, InputError
    """
    frame = _parse(name)
    columns = [str(column) for column in frame.columns]
    shown = ", ".join(columns)
    if x_column is None or y_column is None:
        raise UsageError(
            f"{name} is a table: state which columns hold the coordinates with x_column (easting or "
            f"longitude) and y_column (northing or latitude); its columns are {shown}"
        )
    if x_column == y_column:
        raise UsageError(f"x_column and y_column must be two columns; got '{x_column}' for both")
    for option, column in (("x_column", x_column), ("y_column", y_column)):
        if column not in columns:
            raise UsageError(f"{option} must be a column of {name} ({shown}); got '{column}'")
    x, y = _numbers(frame, x_column, name), _numbers(frame, y_column, name)
    points = np.full(len(frame), None, dtype=object)
    given = ~(np.isnan(x) | np.isnan(y))
    points[given] = shapely.points(x[given], y[given])
    column = "geometry" if "geometry" not in columns else "point_geometry"
    frame[column] = gpd.GeoSeries(points, index=frame.index)
    return gpd.GeoDataFrame(frame, geometry=column)


def _parse(name: str) -> pd.DataFrame:
    try:
        with Path(name).open(encoding="utf-8-sig") as stream:
            header = stream.readline()
        separator = max(_SEPARATORS, key=header.count)
        return pd.read_csv(
            name,
            sep=separator,
            encoding="utf-8-sig",
            skipinitialspace=True,
            index_col=False,
        )
    except UnicodeDecodeError as error:
        raise InputError(f"{name} is not in UTF-8: save the table in that encoding") from error
    except ValueError as error:
        raise InputError(f"{name} cannot be read as a table with a header line and equal columns") from error
    except OSError as error:
        raise InputError(f"{name} cannot be read: {error.strerror}") from error


def _numbers(frame: pd.DataFrame, column: str, name: str) -> np.ndarray:
    values = pd.to_numeric(frame[column], errors="coerce")
    text = frame[column].notna() & values.isna()
    if text.any():
        row = int(np.flatnonzero(text.to_numpy())[0])
        raise InputError(
            f"line {row + 2} of {name} has '{frame[column].iloc[row]}' in column {column}, which is not a "
            "number: write coordinates as numbers with a decimal point"
        )
    return values.to_numpy(dtype=float)
