"""How pages and their files are delivered: nothing inline, everything kept by its hash."""

import gzip
import re

import pytest

from tests.serving import LiveServer

PAGES = ["/", "/runs/0123456789abcdef", "/library", "/sessions", "/sessions/0", "/overlay"]


@pytest.mark.parametrize("path", PAGES)
def test_a_page_holds_nothing_that_its_policy_would_refuse(lab: LiveServer, path: str) -> None:
    response = lab.client.get(path)
    assert response.status_code == 200
    assert response.headers["cache-control"] == "no-cache"
    assert "script-src 'self'" in response.headers["content-security-policy"]
    scripts = re.findall(r"<script([^>]*)>", response.text)
    assert scripts
    assert all("src=" in script or "application/json" in script for script in scripts)
    assert not re.search(r"<style|\sstyle=|\son\w+=|https?://", response.text)


@pytest.mark.parametrize("path", PAGES)
def test_every_file_of_a_page_may_be_kept_for_ever(lab: LiveServer, path: str) -> None:
    files = set(
        re.findall(r'(?:src|href|data-plotly)="(/static/[^"]+)"', lab.client.get(path).text)
    )
    assert len(files) > 8
    for file in files:
        response = lab.client.get(file)
        assert response.status_code == 200, file
        assert response.headers["cache-control"] == "public, max-age=31536000, immutable"
        assert re.match(r"/static/(plotly-)?[0-9a-f]{16}[./]", file)


def test_the_plotting_library_travels_compressed_to_who_can_read_that(lab: LiveServer) -> None:
    url = re.search(r'data-plotly="([^"]+)"', lab.client.get("/").text)
    assert url
    bodies = {}
    for coding in ("gzip", "identity"):
        with lab.client.stream("GET", url[1], headers={"Accept-Encoding": coding}) as response:
            assert response.headers.get("content-encoding") == {"gzip": "gzip"}.get(coding)
            assert response.headers["content-type"].startswith("text/javascript")
            bodies[coding] = b"".join(response.iter_raw())
    assert gzip.decompress(bodies["gzip"]) == bodies["identity"]
    assert len(bodies["gzip"]) < len(bodies["identity"]) / 2


def test_a_stale_address_of_a_file_is_not_answered(lab: LiveServer) -> None:
    assert lab.client.get("/static/0000000000000000/css/frame.css").status_code == 404
