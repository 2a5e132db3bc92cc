"""The page's server against clients that are many, slow, broken or ill-meaning, over raw sockets; after each, what it
says of the labels is what the journal holds, and the rightful client is still answered."""

from __future__ import annotations

import json
import socket
import sqlite3
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack
from pathlib import Path
from urllib.parse import urlsplit

import httpx
import pytest
from interpret_projects import drawn_project, served

from classify.interpret.connections import MOST_CONNECTIONS, REQUEST_S


class Page:
    """A running server, its process, and a client that came in by the token."""

    def __init__(self, folder: Path, process, address: str) -> None:
        self.folder, self.process = folder, process
        parts = urlsplit(address)
        assert parts.hostname and parts.port
        self.place, self.host = (parts.hostname, parts.port), parts.netloc
        self.root = f"http://{parts.netloc}"
        self.client = httpx.Client(base_url=self.root, headers={"Origin": self.root}, follow_redirects=True)
        assert self.client.get(address).status_code == 200
        self.cookie = "; ".join(f"{c.name}={c.value}" for c in self.client.cookies.jar)

    def connect(self) -> socket.socket:
        return socket.create_connection(self.place, timeout=REQUEST_S + 10)

    def head(self, line: str, *more: str) -> bytes:
        """A request as the page itself would send it."""
        fields = [line, f"Host: {self.host}", f"Origin: {self.root}", f"Cookie: {self.cookie}", *more, "", ""]
        return "\r\n".join(fields).encode("latin-1")

    def says(self, sent: bytes) -> bytes:
        """All that comes back, to the end of the connection."""
        with self.connect() as one:
            try:
                one.sendall(sent)
                return drained(one)
            except (ConnectionResetError, BrokenPipeError):
                return b""

    def memory_mib(self) -> float:
        text = Path(f"/proc/{self.process.pid}/status").read_text()
        return int(text.split("VmRSS:")[1].split()[0]) / 1024

    def check_standing(self) -> None:
        """The page answers at once, with what the journal holds."""
        before = time.monotonic()
        points = self.client.get("/api/points").json()["points"]
        assert time.monotonic() - before < 2
        with sqlite3.connect(self.folder / "outputs" / "sample" / "labels.sqlite") as db:
            rows = db.execute("SELECT number, point, undoes, label FROM entry ORDER BY number").fetchall()
        undone = {row[2] for row in rows}
        for point in points:
            mine = [row for row in rows if row[1] == point["id"]]
            kept = [row[3] for row in mine if row[2] is None and row[0] not in undone]
            assert point["label"] == (kept[-1] if kept else None)
            assert point["revision"] == max((row[0] for row in mine), default=0)


def drained(one: socket.socket) -> bytes:
    pieces = []
    try:
        while piece := one.recv(1 << 16):
            pieces.append(piece)
    except ConnectionResetError:
        pass
    return b"".join(pieces)


@pytest.fixture(scope="module")
def page(tmp_path_factory) -> Iterator[Page]:
    folder = drawn_project(tmp_path_factory.mktemp("hostile") / "miniature")
    with served(folder, "--interpreter", "Ada") as (process, address):
        found = Page(folder, process, address)
        yield found
        process.terminate()
        said = process.stderr.read()
        assert "Traceback" not in said and said.count("\n") < 5, said[-2000:]


@pytest.fixture(autouse=True)
def standing(page: Page) -> Iterator[None]:
    yield
    page.check_standing()


def test_fifty_clients_at_once(page: Page) -> None:
    """Each labels, looks and takes back; every answer that said "stored" is in the journal, once."""
    stored: list[int] = []

    def work(who: int) -> None:
        with httpx.Client(base_url=page.root, cookies=page.client.cookies, headers={"Origin": page.root},
                          timeout=60) as client:  # fmt: skip
            for turn in range(6):
                point = 1 + (who * 7 + turn) % 40
                seen = client.get(f"/api/point/{point}").json()["revision"]
                body = {"label": ["Water", "Pasture", None][turn % 3], "note": f"{who} {turn}", "seen": seen}
                answer = client.post(f"/api/label/{point}", json=body)
                assert answer.status_code in (200, 409), answer.text
                if answer.status_code == 200:
                    stored.append(answer.json()["revision"])
                if who % 10 == 0 and turn == 5:
                    assert client.post("/api/undo").status_code == 200
                assert client.get(f"/api/picture/{point}/v0?side=63").status_code == 200

    before = page.memory_mib()
    with ThreadPoolExecutor(50) as pool:
        list(pool.map(work, range(50)))
    assert len(stored) == len(set(stored)) > 50
    with sqlite3.connect(page.folder / "outputs" / "sample" / "labels.sqlite") as db:
        numbers = [row[0] for row in db.execute("SELECT number FROM entry WHERE undoes IS NULL ORDER BY number")]
    assert sorted(stored) == numbers
    assert page.memory_mib() - before < 200


def test_who_sends_a_byte_at_a_time_is_given_up(page: Page) -> None:
    head = page.head("POST /api/label/1 HTTP/1.1", "Content-Length: 100")
    begun = time.monotonic()
    with page.connect() as in_head, page.connect() as in_body, page.connect() as silent:
        in_body.sendall(head)
        lost = 0
        while lost < 2 and time.monotonic() - begun < REQUEST_S + 5:
            for one in (in_head, in_body):
                try:
                    one.sendall(b"x")
                except OSError:
                    lost += 1
            time.sleep(0.3)
        assert REQUEST_S - 1 < time.monotonic() - begun < REQUEST_S + 5
        assert drained(silent) == b""


def test_held_connections_lock_no_one_out(page: Page) -> None:
    with ExitStack() as held:
        for number in range(3 * MOST_CONNECTIONS):
            one = held.enter_context(page.connect())
            one.sendall(b"GET / HTTP/1.1\r\n" if number % 2 else b"")
        answer = httpx.get(page.root + "/api/points", headers={"Cookie": page.cookie}, timeout=2)
        assert answer.status_code == 200
        descriptors = len(list(Path(f"/proc/{page.process.pid}/fd").iterdir()))
        assert descriptors < MOST_CONNECTIONS + 100


def test_who_guesses_waits_and_no_one_else_does(page: Page) -> None:
    def guess(number: int) -> float:
        before = time.monotonic()
        assert httpx.get(f"{page.root}/?token={number}", timeout=30).status_code == 403
        return time.monotonic() - before

    with ThreadPoolExecutor(20) as pool:
        guesses = [pool.submit(guess, number) for number in range(15)]
        time.sleep(0.2)
        before = time.monotonic()
        assert page.client.get("/api/points").status_code == 200
        assert time.monotonic() - before < 0.4
        assert min(one.result() for one in guesses) >= 0.5


BROKEN = [
    b"\r\n\r\n",
    b"GET\r\n\r\n",
    b"GET / HTTP/9.9\r\n\r\n",
    b"\x16\x03\x01\x02\x00\x01\x00",
    b"\x00" * 5000,
    b"GET / HTTP/1.1\r\nHost : x\r\n\r\n",
    b"GET / HTTP/1.1\r\n" + b"a" * 70_000,
    b"GET /" + b"a" * 70_000 + b" HTTP/1.1\r\n\r\n",
    b"GET / HTTP/1.1\r\n" + b"A: b\r\n" * 20_000 + b"\r\n",
    b"PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n",
    b"GET / HTTP/1.1\r\nHost: {host}\r\nHost: example.org\r\n\r\n",
    b"GET http://example.org/ HTTP/1.1\r\nHost: {host}\r\n\r\n",
    b"POST / HTTP/1.1\r\nHost: {host}\r\nContent-Length: 5\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
    b"POST / HTTP/1.1\r\nHost: {host}\r\nContent-Length: -1\r\n\r\n",
    b"POST / HTTP/1.1\r\nHost: {host}\r\nContent-Length: 1, 2\r\n\r\n",
    b"POST / HTTP/1.1\r\nHost: {host}\r\nTransfer-Encoding: chunked\r\n\r\nffffffffffffffff\r\n",
    b"GET / HTTP/1.1\r\nHost: {host}\r\nOrigin: http://[::\r\n\r\n",
    b"GET / HTTP/1.1\r\nHost: \xff\xfe\r\n\r\n",
    b"GET /?token=\xff%ff%ed%a0%80 HTTP/1.1\r\nHost: {host}\r\n\r\n",
    b"GET / HTTP/1.1\r\nHost: {host}\r\nCookie: landassay=\xff;;;=\r\n\r\n",
    b"GET / HTTP/1.1\r\nHost: {host}\r\nConnection: Upgrade\r\nUpgrade: websocket\r\nSec-WebSocket-Version: 13\r\n\r\n",
]


@pytest.mark.parametrize("sent", BROKEN)
def test_a_broken_request_gets_nothing(page: Page, sent: bytes) -> None:
    for closing in (b"", b"\r\n\r\n"):
        with page.connect() as one:
            try:
                one.sendall(sent.replace(b"{host}", page.host.encode()) + closing)
                one.shutdown(socket.SHUT_WR)
            except OSError:
                continue
            said = drained(one)
        assert not said or said.split(b" ", 2)[1] in (b"400", b"403", b"421", b"404", b"405", b"431"), said[:200]
        assert b"<html" not in said


METHODS = ["HEAD", "PUT", "DELETE", "PATCH", "OPTIONS", "TRACE", "CONNECT", "GETT"]


@pytest.mark.parametrize("method", METHODS)
def test_methods_that_the_page_does_not_use(page: Page, method: str) -> None:
    for path in ("/", "/api/points", "/api/undo", "/api/label/1"):
        said = page.says(page.head(f"{method} {path} HTTP/1.1", "Connection: close"))
        assert said.split(b" ", 2)[1] in ((b"200", b"405") if method == "HEAD" else (b"405",))


ADDRESSES = [
    "/%2e%2e/%2e%2e/project.toml",
    "//etc/passwd",
    "/./page.js/..",
    "/page.js%00.html",
    "/..\\..\\project.toml",
    "/assets/page.js",
    "/api/picture/1/..%2f..%2fproject.toml",
    "/api/picture/1/v0%00",
    "/api/picture/-1/v0",
    "/api/picture/1/v0?side=31&side=9999999",
    "/api/picture/1/v0?side=" + "9" * 5000,
    "/api/picture/1/v0?low=1e400",
    "/api/picture/1/v0?down=-9223372036854775809",
    "/api/point/" + "9" * 5000,
    "/api/point/1e3",
    "/api/point/0x1",
    "/api/point/１",
    "/api/point/1%0a",
    "/api/point/%31%2f",
    "/api/label/" + "9" * 5000,
    "/api/point/9223372036854775808",
]


@pytest.mark.parametrize("address", ADDRESSES)
def test_addresses_that_are_no_point_picture_or_asset(page: Page, address: str) -> None:
    sent = page.head(f"GET {address} HTTP/1.1".encode().decode("latin-1"), "Connection: close")
    status = page.says(sent).split(b" ", 2)[1]
    assert status in (b"404", b"400") or (status == b"405" and address.startswith("/api/label"))


BODIES = {
    "deep": b"[" * 8000,
    "deep object": b'{"a":' * 1600,
    "long number": b'{"label": "Water", "seen": ' + b"9" * 6000 + b"}",
    "yes for a number": b'{"label": "Water", "seen": false}',
    "fraction": b'{"label": "Water", "seen": 0.0}',
    "half a character": b'{"label": "Water", "seen": 0, "note": "\\ud800"}',
    "no text": b'{"label": "\\udfff", "seen": 0}',
    "NUL": b'{"label": "Water", "seen": 0, "note": "a\\u0000b"}',
    "escape": b'{"label": "Water", "seen": 0, "note": "\\u001b[2J"}',
    "wrong bytes": b'{"label": "Water\xff", "seen": 0}',
    "form": b"label=Water&seen=0",
    "NaN": b'{"label": NaN, "seen": 0}',
    "list": b'[{"label": "Water", "seen": 0}]',
    "large": b'{"label": "Water", "seen": 0, "note": "' + b" " * 9000 + b'"}',
}


@pytest.mark.parametrize("kind", BODIES)
def test_a_body_that_is_no_label_stores_nothing(page: Page, kind: str) -> None:
    before = page.client.get("/api/point/40").json()["revision"]
    body = BODIES[kind].replace(b'"seen": 0', b'"seen": ' + str(before).encode())
    answer = page.client.post("/api/label/40", content=body)
    assert answer.status_code == 400 and set(answer.json()) == {"problem"}
    assert page.client.get("/api/point/40").json()["revision"] == before


def test_an_endless_body_is_not_taken_in(page: Page) -> None:
    before = page.memory_mib()
    with page.connect() as one, pytest.raises(OSError):
        one.sendall(page.head("POST /api/label/1 HTTP/1.1", "Transfer-Encoding: chunked"))
        for _ in range(10 * int(REQUEST_S + 3)):
            one.sendall(b"10000\r\n" + bytes(65536) + b"\r\n")
            time.sleep(0.1)
    assert page.memory_mib() - before < 30


def test_a_request_sent_again_stores_nothing(page: Page) -> None:
    seen = page.client.get("/api/point/30").json()["revision"]
    body = json.dumps({"label": "Water", "seen": seen}).encode()
    sent = page.head("POST /api/label/30 HTTP/1.1", f"Content-Length: {len(body)}", "Connection: close") + body
    assert [page.says(sent).split(b" ", 2)[1] for _ in range(3)] == [b"200", b"409", b"409"]


def test_a_client_that_leaves_half_way_does_no_harm(page: Page) -> None:
    for part in (0.3, 0.6, 0.95):
        body = b'{"label": "Water", "seen": 0, "note": "gone"}'
        sent = page.head("POST /api/label/20 HTTP/1.1", f"Content-Length: {len(body)}") + body
        with page.connect() as one:
            one.sendall(sent[: int(part * len(sent))])
    for _ in range(50):
        with page.connect() as one:
            one.sendall(page.head("GET /api/picture/1/v0?side=255 HTTP/1.1"))


def test_a_journal_that_is_held_elsewhere_is_said_and_nothing_is_lost(page: Page) -> None:
    path = page.folder / "outputs" / "sample" / "labels.sqlite"
    seen = page.client.get("/api/point/35").json()["revision"]
    with sqlite3.connect(path, isolation_level=None) as other:
        other.execute("BEGIN IMMEDIATE")
        answer = page.client.post("/api/label/35", json={"label": "Water", "seen": seen}, timeout=30)
        assert answer.status_code == 500 and "labels cannot be read or written" in answer.json()["problem"]
        other.execute("ROLLBACK")
    assert page.client.post("/api/label/35", json={"label": "Water", "seen": seen}).status_code == 200


@pytest.mark.parametrize(
    "fields",
    [{"Host": "attacker.example"}, {"Host": "localhost.attacker.example"}, {"Host": "127.0.0.1"}, {"Host": "0.0.0.0"},
     {"Origin": "http://attacker.example"}, {"Origin": "null"}, {"Origin": "http://127.0.0.1.attacker.example"},
     {"Origin": "HTTP://[::"}, {"Sec-Fetch-Site": "same-site"}, {"Sec-Fetch-Site": "cross-site"}],
)  # fmt: skip
def test_another_site_reads_and_writes_nothing(page: Page, fields: dict[str, str]) -> None:
    for kind in ("text/plain", "application/x-www-form-urlencoded", "application/json"):
        body = b'{"label": "Water", "seen": 0}'
        headers = {**fields, "Content-Type": kind}
        assert page.client.post("/api/label/39", content=body, headers=headers).status_code in (403, 421)
        assert page.client.get("/api/points", headers=headers).status_code in (403, 421)
