"""Foreign hosts and origins are refused; common practice against DNS rebinding, no source."""

from __future__ import annotations

import http.client
from collections.abc import Iterator

import pytest
from tests.browser.server import served

UPGRADE = {
    "Connection": "Upgrade",
    "Upgrade": "websocket",
    "Sec-WebSocket-Version": "13",
    "Sec-WebSocket-Key": "AAAAAAAAAAAAAAAAAAAAAA==",
    "Sec-WebSocket-Protocol": "bokeh, none",
}


@pytest.fixture(scope="module")
def port() -> Iterator[int]:
    """Port of a running server."""
    with served(5571) as address:
        yield int(address.rstrip("/").rsplit(":", 1)[1])


def answer(port: int, path: str, headers: dict[str, str]) -> tuple[int, str]:
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=30)
    try:
        connection.request("GET", path, headers=headers)
        response = connection.getresponse()
        upgraded = response.status == 101
        return response.status, "" if upgraded else response.read().decode("utf-8", "replace")
    finally:
        connection.close()


@pytest.mark.parametrize("name", ["127.0.0.1", "localhost"])
def test_the_servers_own_addresses_are_served(port: int, name: str) -> None:
    status, _ = answer(port, "/static/js/bokeh.min.js", {"Host": f"{name}:{port}"})
    assert status == 200


@pytest.mark.parametrize("path", ["/", "/static/js/bokeh.min.js", "/nowhere"])
@pytest.mark.parametrize("host", ["courts.example", "courts.example:{port}", "127.0.0.1:1", ""])
def test_a_foreign_host_is_refused(port: int, path: str, host: str) -> None:
    status, text = answer(port, path, {"Host": host.format(port=port)})
    assert (status, "another host" in text) == (403, True)


@pytest.mark.parametrize(
    "origin", ["http://courts.example", "null", "http://127.0.0.1:1", "http://127.0.0.1.example"]
)
def test_a_foreign_origin_is_refused(port: int, origin: str) -> None:
    own = {"Host": f"127.0.0.1:{port}", "Origin": origin}
    for path, more in (("/", {}), ("/ws", UPGRADE)):
        status, text = answer(port, path, own | more)
        assert (status, "another origin" in text) == (403, True)


def test_a_socket_without_an_origin_is_refused(port: int) -> None:
    status, text = answer(port, "/ws", {"Host": f"127.0.0.1:{port}", **UPGRADE})
    assert (status, "no origin" in text) == (403, True)


def test_a_socket_of_the_own_page_passes_the_guard(port: int) -> None:
    own = {"Host": f"127.0.0.1:{port}", "Origin": f"http://127.0.0.1:{port}"}
    status, _ = answer(port, "/ws", own | UPGRADE)
    assert status == 101


@pytest.mark.parametrize("path", ["/static/", "/static/js/", "/static/extensions/"])
def test_no_folder_is_listed(port: int, path: str) -> None:
    status, _ = answer(port, path, {"Host": f"127.0.0.1:{port}"})
    assert status in (403, 404)
