"""Who may talk to the page's server, and what its answers never hold; over real sockets."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path
from urllib.parse import urlsplit

import httpx
import pytest
from interpret_projects import drawn_project, served


@pytest.fixture(scope="module")
def page(tmp_path_factory) -> Iterator[tuple[Path, str]]:
    """A running server and its address, of which the token is not used yet."""
    folder = drawn_project(tmp_path_factory.mktemp("served") / "miniature")
    with served(folder, "--interpreter", "Ada") as (_, address):
        yield folder, address


@pytest.fixture(scope="module")
def inside(page: tuple[Path, str]) -> Iterator[httpx.Client]:
    """A client that came in by the token."""
    _, address = page
    root = "http://" + urlsplit(address).netloc
    with httpx.Client(base_url=root, follow_redirects=True, headers={"Origin": root}) as client:
        assert client.get(address.replace("token=", "token=x")).status_code == 403
        answer = client.get(address)
        assert answer.status_code == 200 and "token" not in str(answer.url)
        yield client


def test_a_token_works_once(page: tuple[Path, str], inside: httpx.Client):
    assert httpx.get(page[1]).status_code == 403
    assert inside.get("/api/points").status_code == 200


def test_nothing_without_a_cookie(page: tuple[Path, str], inside: httpx.Client):
    root = str(inside.base_url).rstrip("/")
    paths = ["/", "/page.js", "/api/start", "/api/points", "/api/point/1", "/api/picture/1/v0"]
    for path in paths:
        assert httpx.get(root + path).status_code == 403, path
        assert inside.get(path).status_code == 200, path
    forged = {inside.cookies.jar.__iter__().__next__().name: "x" * 43}
    assert httpx.get(root + "/api/points", cookies=forged).status_code == 403
    assert httpx.post(root + "/api/undo", headers={"Origin": root}).status_code == 403


@pytest.mark.parametrize("host", ["example.org", "127.0.0.1", "127.0.0.1:1", "localhost.example.org:80"])
def test_another_host_is_refused(inside: httpx.Client, host: str):
    assert inside.get("/api/points", headers={"Host": host}).status_code == 421


@pytest.mark.parametrize("origin", ["http://example.org", "null", "https://127.0.0.1", "http://127.0.0.1:1"])
def test_another_origin_is_refused(inside: httpx.Client, origin: str):
    body = {"label": "Water", "alternate": None, "confidence": "high", "note": "", "seen": 0}
    assert inside.post("/api/label/1", json=body, headers={"Origin": origin}).status_code == 403
    assert inside.get("/api/points", headers={"Origin": origin}).status_code == 403
    assert inside.get("/api/points", headers={"Sec-Fetch-Site": "cross-site"}).status_code == 403


def test_writing_needs_an_origin(page: tuple[Path, str], inside: httpx.Client):
    with httpx.Client(base_url=inside.base_url, cookies=inside.cookies) as client:
        assert client.post("/api/undo").status_code == 403


def test_answers_carry_a_strict_policy(inside: httpx.Client):
    for path in ("/", "/page.css", "/api/points", "/nowhere"):
        headers = inside.get(path).headers
        policy = dict(part.strip().split(" ", 1) for part in headers["content-security-policy"].split(";"))
        assert policy["default-src"] == "'none'" and policy["script-src"] == "'self'"
        assert policy["frame-ancestors"] == "'none'"
        assert headers["x-content-type-options"] == "nosniff"
    text = inside.get("/").text + inside.get("/page.js").text + inside.get("/page.css").text
    assert not re.search(r"https?://(?!www\.w3\.org/2000/svg)", text)
    assert "<script>" not in text and "style=" not in text


@pytest.mark.parametrize(
    "path",
    ["/../design.json",
     "/..%2f..%2fsample%2fdesign.json", "/design.json", "/page.html/../../journal.py", "/api/point/0",
     "/api/point/99999", "/api/point/1;ls", "/api/picture/1/..%2f..", "/api/picture/1/v99",
     "/api/picture/1/v0?side=4000", "/api/picture/1/v0?side=31&down=99999999", "/api/picture/1/v0?low=nan",
     "/api/picture/1/v0?low=90&high=3", "/api/picture/1/v0?side=../../x"],
)  # fmt: skip
def test_no_path_opens_a_file(inside: httpx.Client, path: str):
    assert inside.get(path).status_code == 404


@pytest.mark.parametrize(
    "body",
    [b"", b"[]", b"{}", b'{"label": "Water"}', b'{"label": "Swamp", "seen": 0}', b'{"label": 3, "seen": 0}',
     b'{"label": "Water", "alternate": "Water", "seen": 0}', b'{"label": "Water", "seen": 0, "confidence": "sure"}',
     b'{"label": "Water", "seen": 0, "note": "' + b"x" * 501 + b'"}', b'{"label": "' + b"x" * 9000 + b'", "seen": 0}'],
)  # fmt: skip
def test_labels_that_no_page_could_send_are_refused(inside: httpx.Client, body: bytes):
    assert inside.post("/api/label/1", content=body).status_code == 400
    assert inside.get("/api/point/1").json()["revision"] == 0


def test_a_label_is_told_with_its_revision_and_a_stale_one_refused(inside: httpx.Client):
    body = {"label": "Water", "alternate": "Pasture", "confidence": "low", "note": "  by the bank ", "seen": 0}
    first = inside.post("/api/label/2", json=body)
    assert first.status_code == 200
    stale = inside.post("/api/label/2", json={**body, "label": "Pasture", "alternate": None})
    assert stale.status_code == 409
    kept = {"label": "Water", "alternate": "Pasture", "confidence": "low", "note": "by the bank"}
    assert stale.json() == {"revision": first.json()["revision"], "said": kept}
    assert inside.post("/api/undo").json() == {"point": 2}
    assert inside.get("/api/point/2").json()["said"] is None


def test_no_answer_tells_the_map_class_of_a_point(page: tuple[Path, str], inside: httpx.Client):
    """Answers for two points of different strata differ only in what the scene shows there; no answer names a class
    but the list of classes and what was said; picture bytes hold no text."""
    folder, _ = page
    design = json.loads((folder / "outputs" / "sample" / "design.json").read_text())
    names = ["Pasture", "Bare soil", "Water"]
    for i in design["points"]:
        answer = inside.get(f"/api/point/{i}")
        assert set(answer.json()) == {"id", "longitude", "latitude", "spectrum", "revision", "said"}
        picture = inside.get(f"/api/picture/{i}/v0?side=15")
        for content in (answer.content, picture.content, str(picture.headers).encode()):
            assert not any(secret in content for secret in [*(n.encode() for n in names), b"stratum", b"cover"])
    points = inside.get("/api/points").json()["points"]
    assert {tuple(p) for p in points} == {("id", "state", "label", "revision")}
    order = [p["id"] for p in points]
    assert order != sorted(order)
    strata = [design["points"][str(i)]["stratum"] for i in order]
    # Runs of one stratum are no longer than chance makes them: of 40 points in three strata about 25 changes.
    assert sum(a != b for a, b in pairwise(strata)) > 12
    sent = b"".join(inside.get(p).content for p in ("/", "/page.js", "/views.js", "/api/start", "/api/points"))
    assert b"mapped" not in sent and b"stratum" not in sent
