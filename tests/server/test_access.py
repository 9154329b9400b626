"""Access keys: who gets in, who may only look, what is kept."""

import re
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import httpx
import pytest

from server.access import ATTEMPTS, Attempts, establish_keys, look_key_of
from server.errors import SettingsError, TooManyAttempts
from server.settings import Settings
from server.storage import Storage
from tests.serving import LiveServer


@pytest.fixture(scope="module")
def shared(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[LiveServer, str, str]]:
    """A server that the network can reach, with its two keys."""
    server = LiveServer(tmp_path_factory.mktemp("shared"), "--new-access-key", host="0.0.0.0")
    server.start()
    links = [re.search(r"enter\?key=(\S+)", server.read_line()) for _ in range(2)]
    assert links[0]
    assert links[1]
    yield server, links[0][1], links[1][1]
    server.stop()


@contextmanager
def _client(server: LiveServer, key: str = "") -> Iterator[httpx.Client]:
    with httpx.Client(base_url=server.url) as client:
        if key:
            client.get("/enter", params={"key": key})
        yield client


def test_without_a_key_only_the_door_is_open(shared: tuple[LiveServer, str, str]) -> None:
    with _client(shared[0]) as client:
        for path in ("/api/runs", "/api/defaults", "/metrics", "/openapi.json", "/api/access"):
            refused = client.get(path)
            assert refused.status_code == 401
            assert refused.json()["error"]["code"] == "not_signed_in"
        assert client.post("/api/runs", json={}).status_code == 401
        assert client.get("/healthz").status_code == 200
        page = client.get("/", headers={"Accept": "text/html"})
        assert (page.status_code, page.headers["location"]) == (303, "/enter")
        click = {"Accept": "text/html", "Sec-Fetch-Site": "cross-site"}
        again = client.get('/runs/x"><b>', headers=click)
        assert again.status_code == 200
        assert 'url=/runs/x%22%3E%3Cb%3E"' in again.text


def test_the_full_key_gives_a_cookie_that_may_write(shared: tuple[LiveServer, str, str]) -> None:
    server, key, _ = shared
    with httpx.Client(base_url=server.url) as client:
        answer = client.get("/enter", params={"key": key})
        cookie = answer.headers["set-cookie"]
        assert "HttpOnly" in cookie
        assert "SameSite=strict" in cookie
        assert key not in cookie
        assert 'http-equiv="refresh"' in answer.text
        assert client.get("/api/access").json() == {"may": "write"}
        assert client.post("/api/sessions", json={"name": "ours"}).status_code == 201
        refused = client.post(
            "/api/sessions", json={"name": "x"}, headers={"Origin": "http://evil.example"}
        )
        assert refused.status_code == 403


def test_the_look_key_may_look_and_nothing_else(shared: tuple[LiveServer, str, str]) -> None:
    server, _, look = shared
    with _client(server, look) as client:
        assert client.get("/api/access").json() == {"may": "look"}
        assert client.get("/api/runs").status_code == 200
        run = f"/api/runs/{'0' * 16}"
        for method, path in (
            ("POST", "/api/runs"), ("PATCH", run), ("DELETE", run), ("POST", f"{run}/cancel"),
            ("POST", f"{run}/resume"), ("POST", f"{run}/restore"), ("POST", "/api/sessions"),
            ("PUT", f"/api/sessions/s/runs/{'0' * 16}"), ("DELETE", "/api/sessions/s"),
        ):  # fmt: skip
            refused = client.request(method, path, json={})
            assert refused.status_code == 403
            assert "may only look" in refused.json()["error"]["message"]


def test_the_form_of_the_door_takes_a_key_too(shared: tuple[LiveServer, str, str]) -> None:
    server, key, _ = shared
    with httpx.Client(base_url=server.url) as client:
        client.post("/enter", data={"key": f" {key} "}, headers={"Origin": server.url})
        assert client.get("/api/access").json() == {"may": "write"}


def test_no_key_and_no_cookie_is_kept_in_clear(shared: tuple[LiveServer, str, str]) -> None:
    server, key, look = shared
    with _client(server, key) as client:
        cookie = client.cookies["crossdip"]
    stored = b"".join(path.read_bytes() for path in server.data.glob("crossdip.sqlite3*"))
    assert stored
    for secret in (key, look, cookie):
        assert secret.encode() not in stored


def test_wrong_keys_are_refused_and_soon_made_to_wait(tmp_path: Path) -> None:
    server = LiveServer(tmp_path, "--access-key", "a key of many letters", host="0.0.0.0")
    server.start()
    try:
        with _client(server) as client:
            places = [
                client.get("/enter", params={"key": f"guess {number}"}).headers["location"]
                for number in range(ATTEMPTS + 2)
            ]
            assert places == ["/enter?refused=key"] * ATTEMPTS + ["/enter?refused=wait"] * 2
            right = client.get("/enter", params={"key": "a key of many letters"})
            assert right.headers["location"] == "/enter?refused=wait"
            assert client.get("/api/runs").status_code == 401
    finally:
        server.stop()


def test_attempts_are_counted_by_address_and_forgotten(monkeypatch: pytest.MonkeyPatch) -> None:
    moment_s = 0.0
    monkeypatch.setattr("server.access.time.monotonic", lambda: moment_s)
    attempts = Attempts()
    for _ in range(ATTEMPTS):
        attempts.check("a")
        attempts.failed("a")
    with pytest.raises(TooManyAttempts):
        attempts.check("a")
    attempts.check("b")
    moment_s = 61.0
    attempts.check("a")


def test_keys_are_asked_for_kept_and_replaced(tmp_path: Path) -> None:
    storage = Storage(tmp_path / "keys.sqlite3")
    try:
        open_host = Settings(data=tmp_path, host="0.0.0.0")
        with pytest.raises(SettingsError, match="--new-access-key"):
            establish_keys(open_host, storage)
        assert establish_keys(Settings(data=tmp_path), storage) == {}
        given = Settings(data=tmp_path, host="0.0.0.0", access_key="sixteen letters!!")
        keys = establish_keys(given, storage)
        assert keys == {"write": "sixteen letters!!", "look": look_key_of("sixteen letters!!")}
        stored = storage.access_keys()
        assert establish_keys(given, storage) == keys
        assert storage.access_keys() == stored
        assert establish_keys(open_host, storage) == {}
        fresh = establish_keys(
            Settings(data=tmp_path, host="0.0.0.0", new_access_key=True), storage
        )
        assert fresh["write"] != keys["write"]
        assert storage.access_keys() != stored
    finally:
        storage.close()
