"""One way of reading vector files: every format gives the same records, and what is unfit is refused before loading."""

from __future__ import annotations

import json
import os
import socket
import threading
import zipfile
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyogrio
import pytest
from shapely.geometry import Point

from classify import tables
from classify.errors import DataError
from classify.raster import vectors
from classify.raster.vectors import layers_of, read_places, read_records


def places(n: int = 3) -> geopandas.GeoDataFrame:
    points = [Point(500_000 + 10 * i, 6_500_000 - 7 * i) for i in range(n)]
    return geopandas.GeoDataFrame({"id": np.arange(1, n + 1)}, geometry=points, crs="EPSG:32733")


def write(path: Path, frame: geopandas.GeoDataFrame) -> Path:
    if path.suffix == ".parquet":
        frame.to_parquet(path)
    elif path.suffix == ".csv":
        degrees = frame.geometry.to_crs(4326)
        table = pd.DataFrame(frame.drop(columns="geometry"))
        table.assign(longitude=degrees.x, latitude=degrees.y).to_csv(path, index=False)
    else:
        frame.to_file(path)
    return path


@pytest.mark.parametrize("name", ["p.gpkg", "p.shp", "p.geojson", "p.fgb", "p.parquet", "p.csv", "p.gml"])
def test_every_format_gives_the_same_places(tmp_path: Path, name: str):
    read = read_places(write(tmp_path / name, places()), "points")
    assert read.geometry.name == "geometry"
    there = read.assign(id=read["id"].astype(int)).sort_values("id", ignore_index=True).to_crs(32733)
    assert there["id"].tolist() == [1, 2, 3]
    assert there.distance(places().geometry).max() < 0.01


def test_an_archive_is_read_and_measured_unpacked(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    inner = write(tmp_path / "p.geojson", places(2000))
    with zipfile.ZipFile(tmp_path / "p.zip", "w", zipfile.ZIP_DEFLATED) as packed:
        packed.write(inner, "p.geojson")
    assert len(read_places(tmp_path / "p.zip", "points")) == 2000
    assert 3 * (tmp_path / "p.zip").stat().st_size < inner.stat().st_size
    monkeypatch.setattr(tables, "MOST_BYTES", inner.stat().st_size // 2)
    monkeypatch.setattr(pyogrio, "read_dataframe", lambda *_, **__: pytest.fail("it was loaded"))
    with pytest.raises(DataError, match="MB or more"):
        read_places(tmp_path / "p.zip", "points")


@pytest.mark.parametrize("name", ["p.gpkg", "p.shp", "p.geojson", "p.fgb", "p.parquet", "p.csv"])
def test_too_many_records_are_refused(tmp_path: Path, name: str, monkeypatch: pytest.MonkeyPatch):
    path = write(tmp_path / name, places(50))
    monkeypatch.setattr(tables, "MOST_RECORDS", 50)
    assert len(read_places(path, "points")) == 50
    monkeypatch.setattr(tables, "MOST_RECORDS", 40)
    with pytest.raises(DataError, match=rf"{name}: the file holds \d+ records or more, and at most 40 are read"):
        read_places(path, "points")


def test_records_that_the_head_does_not_tell_of_are_counted(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    path = write(tmp_path / "p.gpkg", places(50))
    facts = pyogrio.read_info(path)
    monkeypatch.setattr(pyogrio, "read_info", lambda *_, **__: {**facts, "features": -1})
    for module in (tables, vectors):
        monkeypatch.setattr(module, "MOST_RECORDS", 40)
    with pytest.raises(DataError, match="the file holds 41 records or more"):
        read_places(path, "points")


def test_too_many_columns_are_refused(tmp_path: Path):
    more = pd.DataFrame(np.zeros((3, 1100), int), columns=[f"c{i}" for i in range(1100)])
    wide = geopandas.GeoDataFrame(pd.concat([places(), more], axis=1))
    with pytest.raises(DataError, match="the file holds 1,101 columns or more, and at most 1,000"):
        read_places(write(tmp_path / "p.geojson", wide), "points")
    with pytest.raises(DataError, match=r"the file holds 1,103 columns"):
        read_places(write(tmp_path / "p.csv", wide), "points")


UNFIT = {
    "gone.gpkg": (None, "there is no such file"),
    "nothing.gpkg": (b"", "the file is empty"),
    "text.gpkg": (b"not a database", "this cannot be read as points"),
    "cut.geojson": (b'{"type": "FeatureCollection", "features": [{', "this cannot be read as points"),
    "bare.csv": (b"id,observed\n1,Water\n", "does not say where its records lie"),
    "off.csv": (b"id,longitude,latitude\n1,20,30\n2,20,95\n", r"off.csv, row 3: longitude '20' and latitude '95'"),
    "half.csv": (b"id,longitude,latitude\n1,20,30\n2,20,\n", r"half.csv, row 3: .*no place"),
    "p.vrt": (b'<OGRVRTDataSource><OGRVRTLayer name="p"/></OGRVRTDataSource>', "only tells where else to read"),
    "p.gdalg.json": (b'{"type": "gdal_streamed_alg", "command_line": "gdal vector"}', "only tells where else to read"),
}


@pytest.mark.parametrize("name", UNFIT)
def test_unfit_files_are_explained(tmp_path: Path, name: str):
    content, message = UNFIT[name]
    if content is not None:
        (tmp_path / name).write_bytes(content)
    with pytest.raises(DataError, match=message) as caught:
        read_places(tmp_path / name, "points")
    assert name in caught.value.problems[0].where


def test_what_is_no_file_is_not_opened(tmp_path: Path):
    with pytest.raises(DataError, match="not a file"):
        read_places(tmp_path, "points")
    if hasattr(os, "mkfifo"):
        for name in ("pipe.gpkg", "pipe.csv"):
            os.mkfifo(tmp_path / name)
            with pytest.raises(DataError, match="not a file"):
                read_places(tmp_path / name, "points")


def test_records_without_places(tmp_path: Path):
    frame = places()
    with pytest.raises(DataError, match="no record has a geometry"):
        read_places(write(tmp_path / "none.gpkg", frame.set_geometry([None] * 3, crs=frame.crs)), "points")
    some = read_places(write(tmp_path / "some.gpkg", frame.set_geometry([*frame.geometry[:2], None])), "points")
    assert some.geometry.isna().tolist() == [False, False, True]
    with pytest.warns(UserWarning, match="crs"):
        write(tmp_path / "nocrs.gpkg", frame.set_crs(None, allow_override=True))
    with pytest.raises(DataError, match="no coordinate reference system"):
        read_places(tmp_path / "nocrs.gpkg", "points")
    wild = frame.set_geometry([Point(1, 2), Point(float("inf"), 3), Point(3, 4)], crs=frame.crs)
    with pytest.raises(DataError, match="record 2 has a coordinate that is no number"):
        read_places(write(tmp_path / "wild.parquet", wild), "points")
    local = 'LOCAL_CS["a site of its own",LOCAL_DATUM["site",0],UNIT["metre",1],AXIS["x",EAST],AXIS["y",NORTH]]'
    with pytest.raises(DataError, match="its CRS cannot be brought onto the earth"):
        read_places(write(tmp_path / "local.gpkg", frame.set_crs(local, allow_override=True)), "points")
    pd.DataFrame({"id": [1]}).to_parquet(tmp_path / "table.parquet")
    assert list(read_records(tmp_path / "table.parquet", "labels").columns) == ["id"]


def test_layers(tmp_path: Path):
    path = tmp_path / "p.gpkg"
    places().to_file(path, layer="points")
    pyogrio.write_dataframe(pd.DataFrame({"style": ["dots"]}), path, layer="looks", append=True)
    assert layers_of(path, "points") == ["points"] and len(read_places(path, "points")) == 3
    places(2).to_file(path, layer="more", mode="a")
    with pytest.raises(DataError, match=r"several layers\n.*set \[reference\] layer to one of: points, more"):
        read_places(path, "points", setting="[reference] points")
    assert len(read_places(path, "points", layer="more")) == 2
    with pytest.raises(DataError, match="there is no layer 'most'"):
        read_places(path, "points", layer="most")


def test_a_file_cannot_make_the_reader_call_elsewhere(tmp_path: Path):
    """A GML file whose schema, and part of whose data, is said to be at an address: nobody calls there."""
    query = "SERVICE=WFS&amp;VERSION=1.1.0&amp;REQUEST=DescribeFeatureType&amp;TYPENAME=m:p"
    server = socket.create_server(("127.0.0.1", 0))
    called = threading.Event()

    def listen() -> None:
        try:
            server.accept()[0].close()
            called.set()
        except OSError:
            pass

    thread = threading.Thread(target=listen, daemon=True)
    thread.start()
    address = f"http://127.0.0.1:{server.getsockname()[1]}/"
    (tmp_path / "p.gml").write_text(
        f"""<?xml version="1.0"?><wfs:FeatureCollection xmlns:wfs="http://www.opengis.net/wfs"
        xmlns:gml="http://www.opengis.net/gml" xmlns:m="http://m" xmlns:xlink="http://www.w3.org/1999/xlink"
        xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance"
        xsi:schemaLocation="http://m {address}?{query}">
        <gml:featureMember><m:p fid="1"><m:id>1</m:id><m:g><gml:Point srsName="EPSG:32733">
        <gml:coordinates>500000,6500000</gml:coordinates></gml:Point></m:g>
        <m:other xlink:href="{address}more.gml"/></m:p>
        </gml:featureMember>
        </wfs:FeatureCollection>"""
    )
    (tmp_path / "p.geojson").write_text(json.dumps({
        "type": "FeatureCollection", "features": [], "links": [{"rel": "next", "href": f"{address}next"}],
    }))  # fmt: skip
    assert len(read_places(tmp_path / "p.gml", "points")) == 1
    with pytest.raises(DataError, match="empty"):
        read_places(tmp_path / "p.geojson", "points")
    server.close()
    thread.join(timeout=2)
    assert not called.is_set()
