"""STAC items: what they say of a scene, what a hostile one cannot do, and addresses that do not answer.

All items are tiny and made here; servers are on this machine.
"""

from __future__ import annotations

import json
import re
import socket
import ssl
import subprocess
import threading
import time
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rasterio.io import MemoryFile
from test_raster_discover import band, opened
from test_raster_scene import read_all, scene_of, write

from classify.errors import DataError, LandassayError
from classify.raster import remote, sources, stac
from classify.raster.discover import discover, relative_to
from classify.raster.sources import describe
from classify.settings.starter import start_project

# --- STAC items -----------------------------------------------------------------------------------------------------


def item(assets: dict, name: str = "S2B_34HBH_20240611_0_L2A") -> dict:
    return {
        "type": "Feature",
        "stac_version": "1.0.0",
        "id": name,
        "geometry": None,
        "properties": {},
        "links": [],
        "assets": assets,
    }


def asset(href: str, common: str, **raster) -> dict:
    return {
        "href": href, "roles": ["data", "reflectance"], "type": "image/tiff; application=geotiff",
        "eo:bands": [{"name": common, "common_name": common, "center_wavelength": 0.665}], "raster:bands": [raster],
    }  # fmt: skip


def save(folder: Path, content: dict) -> str:
    file = folder / "item.json"
    file.write_text(json.dumps(content), encoding="utf-8")
    return str(file)


def test_a_local_item_names_bands_scale_offset_and_mask(tmp_path):
    for name in ("red", "nir"):
        band(tmp_path / "assets" / f"{name}.tif")
    band(tmp_path / "assets" / "SCL.tif", 20, 4)
    source = save(tmp_path, item({
        "thumbnail": {"href": "t.jpg", "roles": ["thumbnail"], "type": "image/jpeg"},
        "visual": asset("v.tif", "red") | {"roles": ["visual"]},
        "red": asset("./assets/red.tif", "red", scale=0.0002, offset=-0.3, nodata=7),
        "nir": asset("assets/nir.tif", "nir", scale=0.0001, offset=0, nodata=0),
        "scl": {"href": "assets/SCL.tif", "type": "image/tiff", "roles": ["data"]},
    }))  # fmt: skip
    draft = discover(source)
    start_project(tmp_path, relative_to(draft, tmp_path))
    scene = opened(tmp_path)
    assert scene.roles == ("red", "nir")
    assert scene.band("red").nodata == 7
    got = read_all(scene)
    assert got["red"][0, 0] == pytest.approx(0.3, abs=1e-6)
    assert got["nir"][0, 0] == pytest.approx(0.3, abs=1e-6)
    assert scene.masks


def test_an_item_of_version_1_1_with_several_bands_in_an_asset(tmp_path):
    write(tmp_path / "stack.tif", np.full((3, 6, 6), 1000, np.uint16))
    bands = [
        {"name": "1", "eo:common_name": "green", "eo:center_wavelength": 0.56, "raster:scale": 0.0003},
        {"name": "2", "eo:common_name": "rededge", "eo:center_wavelength": 0.74, "raster:scale": 0.0003},
        {"name": "3", "eo:common_name": "swir16", "eo:center_wavelength": 1.6, "raster:scale": 0.0003},
    ]
    source = save(tmp_path, item({"all": {"href": "stack.tif", "type": "image/tiff", "bands": bands}}, "survey-7"))
    draft = discover(source)
    assert [(b.role, b.band, b.wavelength_nm) for b in draft.bands] == [
        ("green", 1, 560), ("red_edge_2", 2, 740), ("swir_1", 3, 1600),
    ]  # fmt: skip
    start_project(tmp_path, draft)
    assert read_all(opened(tmp_path))["swir_1"][0, 0] == pytest.approx(0.3)


def test_of_two_assets_of_one_band_the_finer_is_taken(tmp_path):
    assets = {
        "red_20": asset("red20.tif", "red") | {"gsd": 20}, "red_10": asset("red10.tif", "red", spatial_resolution=10),
        "red_60": asset("red60.tif", "red") | {"gsd": 60},
    }  # fmt: skip
    draft = stac.item_draft(item(assets, "survey"), str(tmp_path / "item.json"))
    assert [Path(b.file).name for b in draft.bands] == ["red10.tif"]


def test_band_names_of_a_preset_win_over_common_names(tmp_path):
    # Items of Landsat products call their one near-infrared band by the common name of a narrow one.
    product = "LC09_L2SP_174083_20240611_20240612_02_T1"
    assets = {
        key: asset(f"./{product}_SR_B{k}.TIF", common, scale=0.0000275, offset=-0.2)
        for key, k, common in (("red", 4, "red"), ("nir08", 5, "nir08"), ("swir16", 6, "swir16"))
    }
    assets["qa_pixel"] = {"href": f"./{product}_QA_PIXEL.TIF", "type": "image/tiff"}
    draft = stac.item_draft(item(assets, product), str(tmp_path / "item.json"))
    assert draft.sensor == "landsat-8-9-c2-l2"
    assert [b.role for b in draft.bands] == ["red", "nir", "swir_1"]
    assert draft.mask.file.endswith("QA_PIXEL.TIF")
    unknown = stac.item_draft(item({"a": asset("a.tif", "nir08")}, "survey"), str(tmp_path / "item.json"))
    assert [b.role for b in unknown.bands] == ["nir"]


FORBIDDEN = [
    "file:///etc/passwd", "/etc/passwd.tif", "../secret.tif", "a/../../secret.tif", "/vsicurl/https://example.org/a.tif",
    "/vsizip/a.zip/b.tif", "http://example.org/a.tif", "ftp://example.org/a.tif", "https://127.0.0.1/a.tif",
    "https://localhost/a.tif", "https://169.254.169.254/latest/meta-data/a.tif", "https://[::1]/a.tif",
    "https://metadata.google.internal/a.tif", "https://10.1.2.3/a.tif", "https://192.168.1.1/a.tif", "https://intranet/a.tif",
    "https://[fd00::1]/a.tif", "https://0177.0.0.1/a.tif", "https://2130706433/a.tif", "https://[::ffff:127.0.0.1]/a.tif",
    "NETCDF:/etc/a.tif", "vrt://a.tif", "<VRTDataset/>.tif", "a\n.tif", "..\\a.tif", "%2e%2e/a.tif", "\\\\host\\a.tif",
]  # fmt: skip


@pytest.mark.parametrize("href", FORBIDDEN)
def test_an_item_cannot_lead_out_of_its_folder_or_into_the_network(tmp_path, href):
    (tmp_path / "in").mkdir()
    band(tmp_path / "secret.tif")
    source = save(tmp_path / "in", item({"red": asset(href, "red")}))
    with pytest.raises(DataError, match="outside its own folder"):
        discover(source)
    if not href.startswith((".", "a/", "%", "/etc")):  # beside an item on the web, these are on the same host
        with pytest.raises(DataError, match="outside its own folder"):
            remote.resolve(href, "https://example.org/items/item.json")


def test_what_an_item_may_name():
    local = str(Path("/data/in/item.json").absolute())
    assert remote.resolve("b/a.tif", local) == str(Path("/data/in/b/a.tif").absolute())
    assert remote.resolve("s3://bucket/a.tif", local) == "s3://bucket/a.tif"
    assert remote.resolve("https://93.184.215.14/a.tif", local) == "https://93.184.215.14/a.tif"
    assert remote.resolve("../a.tif", "https://example.org/items/x/item.json") == "https://example.org/items/a.tif"
    # The user named this host, so that its own files may be read.
    assert remote.resolve("a.tif", "https://10.0.0.5/item.json") == "https://10.0.0.5/a.tif"


def test_a_document_that_only_pretends_to_be_an_image_cannot_send_the_reader_on(tmp_path):
    secret = band(tmp_path / "secret.tif")
    vrt = (
        '<VRTDataset rasterXSize="5" rasterYSize="5"><SRS>EPSG:32734</SRS><GeoTransform>0,10,0,0,0,-10</GeoTransform>'
        f'<VRTRasterBand dataType="UInt16" band="1"><SimpleSource><SourceFilename>{secret}</SourceFilename>'
        "<SourceBand>1</SourceBand></SimpleSource></VRTRasterBand></VRTDataset>"
    )
    with MemoryFile(vrt.encode(), filename="image.tif") as memory, pytest.raises(DataError):
        describe(memory.name)


@pytest.mark.parametrize(
    ("content", "text"),
    [("[1, 2]", "other JSON"), ('{"type": "Collection"}', "STAC Collection"), ("{", "not valid JSON"),
     (json.dumps(item({})), "no asset"), (json.dumps(item({"red": 5, "b": {"href": 3}, "c": None})), "no asset"),
     ('{"type": "Feature", "assets": [1]}', "other JSON")],
)  # fmt: skip
def test_a_document_that_is_no_item_is_refused(tmp_path, content, text):
    (tmp_path / "item.json").write_text(content, encoding="utf-8")
    with pytest.raises(DataError, match=text):
        discover(str(tmp_path / "item.json"))


json_values = st.recursive(
    st.none() | st.booleans() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(
        st.sampled_from(["href", "type", "roles", "bands", "eo:bands", "raster:bands", "name", "common_name", "scale",
                         "nodata", "eo:center_wavelength", "title", "gsd"]), inner, max_size=5),
    max_leaves=12,
)  # fmt: skip


@given(assets=st.dictionaries(st.sampled_from(["red", "B04", "scl", "x"]), json_values, max_size=3))
def test_whatever_an_item_holds_only_our_error_comes_out(assets):
    try:
        draft = stac.item_draft(item(assets), "/nowhere/item.json")
    except LandassayError:
        return
    assert draft.bands


# --- https ----------------------------------------------------------------------------------------------------------


class _Server(BaseHTTPRequestHandler):
    answer = b"{}"
    to: str | None = None
    wait_s = 0.0

    def do_GET(self):
        time.sleep(self.wait_s)
        self.send_response(302 if self.to else 200)
        if self.to:
            self.send_header("Location", self.to)
        self.end_headers()
        self.wfile.write(self.answer)

    def log_message(self, *args):
        """Keep the test's output clean."""


@pytest.fixture
def https(tmp_path, monkeypatch):
    """A server on this machine that an item's address can name, with a certificate made for the test."""
    made = subprocess.run(
        ["openssl", "req", "-x509", "-newkey", "rsa:2048", "-nodes", "-days", "2", "-subj", "/CN=localhost", "-addext",
         "subjectAltName=DNS:localhost", "-keyout", "key.pem", "-out", "cert.pem"],
        cwd=tmp_path, capture_output=True, check=False,
    )  # fmt: skip
    if made.returncode:
        pytest.skip("needs openssl with -addext")
    server = HTTPServer(("localhost", 0), _Server)
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(tmp_path / "cert.pem", tmp_path / "key.pem")
    server.socket = context.wrap_socket(server.socket, server_side=True)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    monkeypatch.setenv("SSL_CERT_FILE", str(tmp_path / "cert.pem"))
    monkeypatch.setattr(_Server, "to", None)
    monkeypatch.setattr(_Server, "wait_s", 0.0)
    yield f"https://localhost:{server.server_port}/items/item.json"
    server.shutdown()
    server.server_close()


def test_an_item_over_https(https, monkeypatch):
    content = item({"red": asset("red.tif", "red", scale=1e-4), "nir": asset("/b/nir.tif", "nir", scale=1e-4)})
    monkeypatch.setattr(_Server, "answer", json.dumps(content).encode())
    draft = stac.item_draft(stac.read_item(https), https)
    host = https.removesuffix("/items/item.json")
    assert [b.file for b in draft.bands] == [f"{host}/items/red.tif", f"{host}/b/nir.tif"]


@pytest.mark.parametrize("to", ["http://localhost/a.json", "file:///etc/passwd", "https://127.0.0.1/a.json"])
def test_redirects_stay_on_https_and_out_of_the_network(https, monkeypatch, to):
    monkeypatch.setattr(_Server, "to", to)
    with pytest.raises(DataError, match=r"outside|not allowed"):
        stac.read_item(https)


def test_an_address_that_does_not_answer_is_given_up(https, monkeypatch):
    monkeypatch.setattr(_Server, "wait_s", 3.0)
    monkeypatch.setattr(remote, "_TIMEOUT_S", 0.3)
    start = time.monotonic()
    with pytest.raises(DataError, match=r"no answer within|did not answer"):
        stac.read_item(https)
    assert time.monotonic() - start < 2.5


class _Files(BaseHTTPRequestHandler):
    """A web server of a folder that answers ranges, as those that hold imagery do."""

    folder = Path()

    def do_HEAD(self):
        self._answer(b"")

    def do_GET(self):
        self._answer(None)

    def _answer(self, content: bytes | None) -> None:
        file = self.folder / self.path.lstrip("/").partition("?")[0]
        if not file.is_file():
            self.send_error(404)
            return
        whole = file.read_bytes()
        wanted = re.fullmatch(r"bytes=(\d+)-(\d*)", self.headers.get("Range", ""))
        first, last = (int(wanted[1]), int(wanted[2] or len(whole) - 1)) if wanted else (0, len(whole) - 1)
        part = whole[first : last + 1]
        self.send_response(206 if wanted else 200)
        self.send_header("Accept-Ranges", "bytes")
        self.send_header("Content-Length", str(len(part)))
        if wanted:
            self.send_header("Content-Range", f"bytes {first}-{first + len(part) - 1}/{len(whole)}")
        self.end_headers()
        if content is None:
            self.wfile.write(part)

    def log_message(self, *args):
        """Keep the test's output clean."""


def test_a_scene_is_read_over_http_as_from_disk(tmp_path, monkeypatch):
    stored = np.random.default_rng(3).integers(1, 9000, (2, 300, 300), dtype=np.uint16)
    write(tmp_path / "stack.tif", stored, tiled=True, blockxsize=64, blockysize=64, compress="deflate")
    monkeypatch.setattr(_Files, "folder", tmp_path)
    server = HTTPServer(("localhost", 0), _Files)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    address = f"http://localhost:{server.server_port}"
    try:
        bands = {role: {"file": f"{address}/stack.tif?token=1", "band": k} for k, role in enumerate(("red", "nir"), 1)}
        scene = scene_of(tmp_path, bands, scale=1e-4)
        got = read_all(scene)
        with pytest.raises(DataError, match="cannot be opened"):
            describe(f"{address}/lost.tif")
    finally:
        server.shutdown()
        server.server_close()
    assert np.allclose(got["nir"], stored[1] * 1e-4, rtol=1e-5)


def test_a_raster_address_that_does_not_answer_is_given_up(tmp_path, monkeypatch):
    monkeypatch.setattr(_Server, "wait_s", 4.0)
    monkeypatch.setattr(
        sources, "REMOTE_OPTIONS", {"GDAL_HTTP_LOW_SPEED_TIME": "1", "GDAL_HTTP_LOW_SPEED_LIMIT": "100"}
    )
    server = HTTPServer(("localhost", 0), _Server)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    start = time.monotonic()
    with pytest.raises(DataError, match=r"(?s)scene\.bands\.red.*cannot be opened.*network"):
        scene_of(tmp_path, {"red": f"http://localhost:{server.server_port}/slow.tif"})
    assert time.monotonic() - start < 3.5
    server.shutdown()
    server.server_close()


def test_addresses_that_cannot_be_reached_say_so(monkeypatch):
    with socket.socket() as free:
        free.bind(("localhost", 0))
        closed = free.getsockname()[1]
    with pytest.raises(DataError, match="cannot be reached"):
        discover(f"https://localhost:{closed}/item.json")
    with pytest.raises(DataError, match="https only"):
        discover("http://localhost/item.json")
    with pytest.raises(DataError, match="cannot be opened"):
        discover(f"https://localhost:{closed}/scene.tif")


class Trickle:
    """An answer that gives a byte at a time, for ever."""

    def __init__(self, clock):
        self.clock = clock

    def read1(self, size):
        self.clock.now += 1
        return b"."


class Clock:
    now = 0.0

    def monotonic(self):
        return self.now


def test_a_server_that_sends_a_byte_at_a_time_is_not_waited_for(monkeypatch):
    clock = Clock()
    monkeypatch.setattr(remote, "time", clock)
    with pytest.raises(TimeoutError):
        remote._read_in_time(Trickle(clock), deadline=30)
    assert clock.now == 31
