"""Columns of vector layers: names that can stand side by side, values that any format holds."""

from __future__ import annotations

import datetime as dt
import json
import re
from collections.abc import Callable, Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass

import geopandas as gpd
import numpy as np
import pandas as pd
from pandas.api import types

from geoclust.errors import not_allowed

_INT64 = np.iinfo(np.int64)


@dataclass(frozen=True)
class Field:
    """One column, ready to be written.

    `kind` is the name that fiona gives the type; `values` are plain Python objects,
    None where there is nothing.
    """

    name: str
    kind: str
    values: list


def with_our_columns(
    theirs: gpd.GeoDataFrame, ours: Mapping[str, Sequence | np.ndarray | pd.Series]
) -> tuple[gpd.GeoDataFrame, dict[str, str]]:
    """Put our columns beside the columns of an input layer.

    Parameters
    ----------
    theirs
        Input layer with n rows.
    ours
        Columns of n values to add.

    Returns
    -------
    layer : GeoDataFrame
        Their columns, then ours, the geometry last. Where one of theirs has the name of
        one of ours (capitals do not matter), ours keeps it and theirs gets ``_input``.
    renamed : dict
        Old and new name of each column that was renamed.

    Examples
    --------
    >>> layer = gpd.GeoDataFrame({"Cluster": ["x"]}, geometry=gpd.points_from_xy([1.0], [2.0]))
    >>> layer, renamed = with_our_columns(layer, {"cluster": [3]})
    >>> list(layer.columns), renamed
    (['Cluster_input', 'cluster', 'geometry'], {'Cluster': 'Cluster_input'})
    """
    for name, values in ours.items():
        if len(values) != len(theirs):
            raise not_allowed(f"column {name}", f"of {len(theirs)} values, one a row", len(values))
    geometry = theirs.geometry
    attributes = pd.DataFrame(theirs.drop(columns=geometry.name))
    names, renamed = distinct_names(attributes.columns, reserved=[*ours, "geometry"])
    attributes.columns = pd.Index(names)
    # by row, whatever index a column of ours may carry
    added = {name: pd.Series(values).set_axis(attributes.index) for name, values in ours.items()}
    both = pd.concat([attributes, pd.DataFrame(added, index=attributes.index)], axis=1)
    return gpd.GeoDataFrame(both, geometry=geometry.array, crs=theirs.crs), renamed


def distinct_names(
    columns: Iterable[Hashable], reserved: Iterable[str] = ()
) -> tuple[list[str], dict[str, str]]:
    """Names under which columns can be stored side by side.

    Databases do not tell capitals from small letters, and some names are taken.

    Parameters
    ----------
    columns
        Column labels as they are; need be neither text nor distinct.
    reserved
        Names that none of them may have: a column that does gets ``_input``.

    Returns
    -------
    names : list of str
        One for each column, distinct whatever the capitals.
    renamed : dict
        Old and new name of each column whose name changed.

    Examples
    --------
    >>> distinct_names(["id", "ID", "fid", ""], reserved=["fid"])
    (['id', 'ID_2', 'fid_input', 'column'], {'ID': 'ID_2', 'fid': 'fid_input', '': 'column'})
    """
    labels = list(columns)
    taken = {name.casefold() for name in reserved}
    wished = []
    for label in labels:
        name = re.sub(r"[\x00-\x1f]+", " ", str(label)).strip() or "column"
        wished.append(f"{name}_input" if name.casefold() in taken else name)
    # columns that keep their label come first: nobody takes a name that another has by right
    order = sorted(range(len(labels)), key=lambda k: wished[k] != str(labels[k]))
    names = [""] * len(labels)
    rightful = {name.casefold() for name in wished}
    used = set(taken)
    for k in order:
        free, number = wished[k], 1
        while free.casefold() in used or (number > 1 and free.casefold() in rightful):
            number += 1
            free = f"{wished[k]}_{number}"
        used.add(free.casefold())
        names[k] = free
    return names, {str(old): new for old, new in zip(labels, names, strict=True) if str(old) != new}


def fields_of(layer: gpd.GeoDataFrame, reserved: Iterable[str] = ()) -> tuple[list[Field], dict[str, str]]:
    """All columns of a layer but its geometry, ready to be written; also which were renamed."""
    positions = [k for k, label in enumerate(layer.columns) if label != layer.geometry.name]
    names, renamed = distinct_names([layer.columns[k] for k in positions], reserved)
    # by position: labels may occur twice
    columns = [pd.Series(layer.iloc[:, k]) for k in positions]
    return [Field(name, *_plain(column)) for name, column in zip(names, columns, strict=True)], renamed


def _plain(column: pd.Series) -> tuple[str, list]:
    """Type and plain values of a column."""
    kind = column.dtype
    if isinstance(kind, pd.CategoricalDtype):
        return _plain(pd.Series(column.astype(kind.categories.dtype if not column.isna().any() else object)))
    if types.is_bool_dtype(kind):
        return "bool", _values(column, bool)
    if types.is_integer_dtype(kind):
        return _integers(column)
    if types.is_float_dtype(kind):
        return "float", _values(column, float)
    if types.is_datetime64_any_dtype(kind):
        return _moments(_values(column, lambda moment: moment.to_pydatetime(warn=False)))
    if kind.name == "geometry":
        return "str", _values(column, lambda geometry: geometry.wkt)
    if types.is_object_dtype(kind):
        return _objects(column)
    return "str", _values(column, _text)


def _objects(column: pd.Series) -> tuple[str, list]:
    """Type and plain values of a column of Python objects, by what they have in common."""
    common = types.infer_dtype(column, skipna=True)
    if common == "boolean":
        return "bool", _values(column, bool)
    if common == "integer":
        return _integers(column)
    if common in ("floating", "mixed-integer-float", "decimal"):
        return "float", _values(column, float)
    if common == "date":
        return "date", _values(column, lambda day: day)
    if common in ("datetime", "datetime64"):
        return _moments(_values(column, lambda moment: moment))
    if common == "bytes":
        return "bytes", _values(column, bytes)
    return "str", _values(column, _text)


def _integers(column: pd.Series) -> tuple[str, list]:
    """Whole numbers; as text where they are too large for 64 bits."""
    values = _values(column, int)
    held = [value for value in values if value is not None]
    if held and not (_INT64.min <= min(held) and max(held) <= _INT64.max):
        return "str", [None if value is None else str(value) for value in values]
    return "int64", values


def _moments(moments: list) -> tuple[str, list]:
    """Dates and times, in UTC if any says how far from it it is.

    Times that are all midnight, and of no stated time zone, are dates: readers hand
    over a column of dates like that.
    """
    held = [moment for moment in moments if moment is not None]
    if any(moment.tzinfo is not None for moment in held):
        return "datetime", [None if moment is None else _in_utc(moment) for moment in moments]
    if held and all(moment.time() == dt.time() for moment in held):
        return "date", [None if moment is None else moment.date() for moment in moments]
    return "datetime", moments


def _in_utc(moment: dt.datetime) -> dt.datetime:
    """The same moment in UTC; one without a time zone is taken to be in UTC already."""
    return moment.replace(tzinfo=dt.UTC) if moment.tzinfo is None else moment.astimezone(dt.UTC)


def _values(column: pd.Series, convert: Callable) -> list:
    """Each value converted, None where it is missing."""
    missing = np.asarray(column.isna(), dtype=bool)
    return [None if gone else convert(value) for value, gone in zip(column, missing, strict=True)]


def _text(value: object) -> str:
    """Anything as text that a database takes."""
    if isinstance(value, (list, tuple, dict, np.ndarray)):
        plain = value.tolist() if isinstance(value, np.ndarray) else value
        text = json.dumps(plain, default=str, ensure_ascii=False)
    else:
        text = str(value)
    return text.replace("\0", "").encode("utf-8", "replace").decode("utf-8")
