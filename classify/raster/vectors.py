"""Vector files of the user's, in any format, read in one guarded way.

A file is looked at before it is loaded: its kind, size, layers and number of records. What is not plain data, holds
more than this program has a use for, or does not say where its places lie is refused with one message.
"""

from __future__ import annotations

import zipfile
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyarrow.parquet
import pyogrio
import pyproj
import shapely

from classify.errors import DataError, LandassayError
from classify.tables import MOST_RECORDS, read_table, refuse_large

_PARQUET = {".parquet", ".geoparquet"}
_DEGREES = ("longitude", "latitude")
# What files begin with that describe where else to read: other files, addresses, steps to be run.
_POINTERS = (b"<OGR", b"gdal_streamed_alg")
_HEAD_BYTES = 16_384
# GDAL would fetch a GML schema from wherever the file says.
_OFFLINE = {"GML_DOWNLOAD_SCHEMA": "NO"}


def read_places(path: str | Path, what: str, *, layer: str | None = None, setting: str = "") -> geopandas.GeoDataFrame:
    """The records of a vector file, or of a CSV file with columns longitude and latitude; geometry in 'geometry'.

    what: what the file should hold, for messages. layer: which layer, where there are several. setting: the key of the
    project file that names the file, to be corrected. Single records may have no geometry. Raises DataError.
    """
    table = read_records(path, what, layer=layer, setting=setting)
    if not isinstance(table, geopandas.GeoDataFrame):
        fix = "give it columns 'longitude' and 'latitude'" if _is_csv(path) else "save it as a layer with geometries"
        raise DataError("the file does not say where its records lie", where=str(path), fix=fix)
    if shapely.is_missing(table.geometry.to_numpy()).all():
        raise DataError(f"no record has a geometry: there are no {what} in it", where=str(path))
    return table


def read_records(path: str | Path, what: str, *, layer: str | None = None, setting: str = "") -> pd.DataFrame:
    """As `read_places`; a plain table where the file does not say where its records lie."""
    name = str(path)
    fix = f"correct {setting}" if setting else "check the name"
    if not _is_remote(name):
        _refuse_unfit(Path(name), what, fix)
    if _is_csv(name):
        return _placed(read_table(Path(name)), name)
    try:
        if Path(name).suffix.lower() in _PARQUET:
            table = _read_parquet(name)
        else:
            table = _read_layer(name, what, layer, setting)
    except LandassayError:
        raise
    except Exception as error:  # pyogrio, pyarrow, pyproj and GDAL raise many kinds; for the user they are one
        raise _unreadable(error, name, what) from error
    if not len(table):
        raise DataError(f"the layer is empty: there are no {what} in it", where=name, fix="name one that has them")
    if isinstance(table, geopandas.GeoDataFrame):
        table = _with_sound_places(table, name)
    return table


def layers_of(path: str | Path, what: str) -> list[str]:
    """Names of the layers with geometries, in the order of the file; of all where none has any. Raises DataError."""
    pyogrio.set_gdal_config_options(_OFFLINE)
    try:
        layers = [(str(layer), geometry) for layer, geometry in pyogrio.list_layers(path)]
    except Exception as error:  # as above
        raise _unreadable(error, str(path), what) from error
    # Programs keep tables of their own beside the layer that a user knows of.
    return [layer for layer, geometry in layers if geometry is not None] or [layer for layer, _ in layers]


def _unreadable(error: Exception, where: str, what: str) -> DataError:
    # After a semicolon follows advice for those who write programs.
    return DataError(f"this cannot be read as {what}: {str(error).split(';')[0]}", where=where)


def _is_remote(name: str) -> bool:
    return name.startswith("/vsi") or "://" in name


def _is_csv(path: str | Path) -> bool:
    return Path(path).suffix.lower() == ".csv"


def _refuse_unfit(path: Path, what: str, fix: str) -> None:
    """Refuse what is no file of data, or too much of it, by what the file system and its first bytes tell."""
    where = str(path)
    try:
        if not path.exists():
            raise DataError("there is no such file", where=where, fix=fix)
        if not (path.is_file() or (path.is_dir() and path.suffix.lower() == ".gdb")):
            raise DataError("this is not a file", where=where, fix=fix)
        size = _size_bytes(path)
        head = b""
        if path.is_file():
            with path.open("rb") as stream:
                head = stream.read(_HEAD_BYTES)
    except (OSError, zipfile.BadZipFile) as error:
        raise _unreadable(error, where, what) from error
    if not size:
        raise DataError("the file is empty", where=where, fix=fix)
    refuse_large(where, size_bytes=size)
    if any(sign in head for sign in _POINTERS):
        raise DataError("this file only tells where else to read, and is not followed", where=where,
                        fix="name the file that holds the data")  # fmt: skip


def _size_bytes(path: Path) -> int:
    """Bytes of a file, unpacked where it is an archive, or of all files that make up one."""
    if path.is_dir():
        return sum(part.stat().st_size for part in path.rglob("*") if part.is_file())
    if path.suffix.lower() == ".shp":
        return sum(part.stat().st_size for part in path.parent.iterdir() if part.stem == path.stem)
    if zipfile.is_zipfile(path):
        with zipfile.ZipFile(path) as packed:
            return sum(entry.file_size for entry in packed.infolist())
    return path.stat().st_size


def _read_layer(name: str, what: str, wanted: str | None, setting: str) -> pd.DataFrame:
    layers = layers_of(name, what)
    if wanted is None and len(layers) == 1:
        wanted = layers[0]
    if wanted not in layers:
        said = f"there is no layer {wanted!r}" if wanted else "the file has several layers"
        there = ", ".join(layers) or "none"
        fix = f"set {setting.split(maxsplit=1)[0]} layer to one of" if setting else "keep only one of"
        raise DataError(said, where=name, fix=f"{fix}: {there}")
    facts = pyogrio.read_info(name, layer=wanted)
    refuse_large(name, records=facts["features"], columns=len(facts["fields"]))
    # Where the head does not tell how many there are, or lies, no more are read than to know.
    table: pd.DataFrame = pyogrio.read_dataframe(name, layer=wanted, max_features=MOST_RECORDS + 1)
    refuse_large(name, records=len(table))
    return table


def _read_parquet(name: str) -> pd.DataFrame:
    facts = pyarrow.parquet.read_metadata(name)
    loaded = sum(facts.row_group(i).total_byte_size for i in range(facts.num_row_groups))
    refuse_large(name, size_bytes=loaded, records=facts.num_rows, columns=facts.num_columns)
    return geopandas.read_parquet(name) if b"geo" in (facts.metadata or {}) else pd.read_parquet(name)


def _placed(table: pd.DataFrame, name: str) -> pd.DataFrame:
    """A table with the places that its columns of degrees tell, if it has them."""
    if not set(_DEGREES) <= set(table.columns):
        return table
    degrees = [pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=np.float64) for column in _DEGREES]
    given = [(table[column].str.strip() != "").to_numpy() for column in _DEGREES]
    with np.errstate(invalid="ignore"):
        fit = [np.abs(values) <= most for values, most in zip(degrees, (360.0, 90.0), strict=True)]
    faulty = np.flatnonzero((given[0] | given[1]) & ~(fit[0] & fit[1]))
    if len(faulty):
        row = table.iloc[faulty[0]]
        raise DataError(
            f"longitude {row[_DEGREES[0]]!r} and latitude {row[_DEGREES[1]]!r} are no place"
            f" ({len(faulty)} such rows)", where=f"{name}, row {faulty[0] + 2}", fix="give both in decimal degrees",
        )  # fmt: skip
    places = geopandas.GeoSeries.from_xy(*degrees, crs=4326).where(given[0])
    placed: pd.DataFrame = geopandas.GeoDataFrame(table, geometry=places)
    return placed


def _with_sound_places(table: geopandas.GeoDataFrame, name: str) -> geopandas.GeoDataFrame:
    """The same with its geometry called 'geometry'. Raises DataError where places mean nothing."""
    if table.crs is None:
        raise DataError("there is no coordinate reference system (CRS) in the file", where=name,
                        fix="save it with the CRS that its coordinates are in")  # fmt: skip
    try:
        pyproj.Transformer.from_crs(table.crs, 4326)
    except pyproj.exceptions.ProjError as error:
        raise DataError(f"its CRS cannot be brought onto the earth: {error}", where=name,
                        fix="save it in a CRS of the earth, such as a UTM zone") from error  # fmt: skip
    coordinates, record = shapely.get_coordinates(table.geometry.to_numpy(), return_index=True)
    wild = record[~np.isfinite(coordinates).all(axis=1)]
    if len(wild):
        said = f"record {wild[0] + 1} has a coordinate that is no number ({len(np.unique(wild))} such records)"
        raise DataError(said, where=name, fix="mend or delete it")
    return table.rename_geometry("geometry") if table.geometry.name != "geometry" else table
