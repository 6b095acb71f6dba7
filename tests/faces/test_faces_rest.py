"""What only a real connection shows: bodies of unknown length, cut connections, many at once."""

from __future__ import annotations

import socket
from concurrent.futures import ThreadPoolExecutor
from typing import Any
from urllib.parse import urlsplit


def test_a_body_that_does_not_say_its_length_is_limited_while_it_comes_in(server: Any) -> None:
    chunks = (b" " * 1024 * 1024 for _ in range(40))
    answer = server.post(chunks, "application/json")
    assert "content-length" not in answer.request.headers
    assert answer.status_code == 413
    assert answer.json()["issue"][0]["details"]["coding"][0]["code"] == "http-body-too-large"


def test_a_connection_that_is_cut_leaves_nothing_and_breaks_nothing(server: Any, sound: Any) -> None:
    where = urlsplit(server.base)
    for part in (b'{"pid": "P-1"', b""):
        with socket.create_connection((where.hostname, where.port), timeout=10) as line:
            line.sendall(
                b"POST /exams?map=bedside HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\n"
                b"Content-Length: 1000\r\n\r\n" + part
            )
    assert server.post(sound("json"), "application/json").status_code == 200
    assert not [line for line in server.log if "unexpected" in line]


def test_many_at_once_all_come_out(server: Any, sound: Any) -> None:
    bodies = [sound("json", {"no": f"E-{number}"}) for number in range(24)]
    with ThreadPoolExecutor(8) as pool:
        answers = list(pool.map(lambda body: server.post(body, "application/json"), bodies))
    assert [answer.status_code for answer in answers] == [200] * 24
    assert len({answer.content for answer in answers}) == 24


def test_nothing_half_read_is_taken_for_http(server: Any) -> None:
    where = urlsplit(server.base)
    with socket.create_connection((where.hostname, where.port), timeout=10) as line:
        line.sendall(b"MSH|^~\\&|FORM\r\n\r\n")
        assert line.recv(100).startswith(b"HTTP/1.1 400")
