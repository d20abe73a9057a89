"""The control channel answers our own command line and nobody else (rules: STORE.md section 4).

Each row of the attack table is a forged request sent over a real socket to a real server.
"""

from __future__ import annotations

import json
import socket
import threading

import pytest

from config.errors import Refusal
from daq.control import Act, Identity, Question, application, loopback_socket, serve_control
from daq.requests import UnmountAsked

TOKEN = "t" * 43
KEY = "k" * 12


def do(asked, peer):
    if asked.who == "refuse":
        raise Refusal("It is refused.", "Ask otherwise.")
    if asked.who == "fail":
        raise ZeroDivisionError
    return {"who": asked.who, "peer": peer}


@pytest.fixture
def port():
    tcp = loopback_socket()
    number = tcp.getsockname()[1]
    hosts = frozenset({f"127.0.0.1:{number}", f"localhost:{number}"})
    acts = (Act("/v1/act", UnmountAsked, do),)
    questions = (Question("/v1/ask", frozenset({"n"}), dict),)
    app = application(Identity("9.9", "0001", "abc"), TOKEN, lambda: hosts, acts, questions)
    stop = threading.Event()
    thread = threading.Thread(target=serve_control, args=(app, [tcp], stop, lambda: None))
    thread.start()
    yield number
    stop.set()
    thread.join(10)
    assert not thread.is_alive()


def send(port, verb="POST", path="/v1/act", body=b"", headers=None, drop=()):
    """Status and JSON of one raw request; ``headers`` override, ``drop`` leaves out."""
    told = {
        "Host": f"127.0.0.1:{port}",
        "Authorization": f"Bearer {TOKEN}",
        "Content-Type": "application/json",
        "Content-Length": str(len(body)),
        "Connection": "close",
    }
    if verb == "GET":
        told = {k: v for k, v in told.items() if not k.startswith("Content")}
    told = {**told, **(headers or {})}
    head = "".join(f"{k}: {v}\r\n" for k, v in told.items() if k not in drop)
    with socket.create_connection(("127.0.0.1", port), 5) as link:
        link.sendall(f"{verb} {path} HTTP/1.1\r\n{head}\r\n".encode() + body)
        answer = b""
        while piece := link.recv(65536):
            answer += piece
    head, _, content = answer.partition(b"\r\n\r\n")
    status = int(head.split()[1])
    return status, (json.loads(content) if content[:1] == b"{" else content), head


GOOD = json.dumps({"key": KEY, "who": "ann"}).encode()


def test_the_right_request_is_answered_with_who_the_daemon_is(port):
    status, told, head = send(port, body=GOOD)
    assert status == 200
    assert told["answer"] == {"who": "ann", "peer": ""}
    assert (told["protocol"], told["version"], told["schema"], told["instance"]) == (
        [1, 1],
        "9.9",
        "0001",
        "abc",
    )
    assert b"access-control" not in head.lower()


@pytest.mark.parametrize(
    ("status", "change"),
    [
        (401, {"drop": ("Authorization",)}),
        (401, {"headers": {"Authorization": "Bearer wrong"}}),
        (401, {"headers": {"Authorization": f"Bearer {TOKEN}x"}}),
        (401, {"headers": {"Authorization": f"Basic {TOKEN}"}}),
        (403, {"headers": {"Origin": "http://127.0.0.1"}}),
        (403, {"headers": {"Origin": "null"}}),
        (421, {"headers": {"Host": "127.evil.example"}}),
        (421, {"headers": {"Host": "127.0.0.1"}}),
        (421, {"headers": {"Host": "evil.example:1"}}),
        (415, {"headers": {"Content-Type": "text/plain"}}),
        (415, {"headers": {"Content-Type": "application/x-www-form-urlencoded"}}),
        (415, {"drop": ("Content-Type",)}),
        (413, {"headers": {"Content-Length": "70000"}}),
        (405, {"path": "/v1/ask"}),
        (404, {"path": "/v2/act"}),
        (404, {"path": "/"}),
        (400, {"path": "/v1/act?x=1"}),
        (422, {"body": b"{}"}),
        (422, {"body": b"[1, 2"}),
        (422, {"body": b'{"key": "short"}'}),
        (422, {"body": json.dumps({"key": KEY, "extra": 1}).encode()}),
        (422, {"body": json.dumps({"key": KEY, "who": "x" * 65}).encode()}),
        (409, {"body": json.dumps({"key": KEY, "who": "refuse"}).encode()}),
        (500, {"body": json.dumps({"key": KEY, "who": "fail"}).encode()}),
    ],
)
def test_every_other_request_is_refused_in_words(port, status, change):
    got, told, _ = send(port, **{"body": GOOD, **change})
    assert got == status
    assert told["error"]["cause"]
    assert "answer" not in told


def test_a_body_without_its_length_is_refused(port):
    got, _, _ = send(port, body=b"", headers={"Transfer-Encoding": "chunked"}, drop=("Content-Length",))
    assert got == 411


def test_a_header_that_comes_twice_is_refused(port):
    with socket.create_connection(("127.0.0.1", port), 5) as link:
        link.sendall(
            f"GET /v1/ask HTTP/1.1\r\nHost: 127.0.0.1:{port}\r\nAuthorization: Bearer no\r\n"
            f"Authorization: Bearer {TOKEN}\r\nConnection: close\r\n\r\n".encode()
        )
        assert link.recv(4096).startswith(b"HTTP/1.1 400")


def test_a_question_knows_its_parameters(port):
    assert send(port, "GET", "/v1/ask?n=3")[1]["answer"] == {"n": "3"}
    assert send(port, "GET", "/v1/ask?m=3")[0] == 400
    assert send(port, "GET", "/v1/ask", headers={"Content-Length": "0"})[0] == 400


def test_a_refusal_carries_cause_and_remedy(port):
    _, told, _ = send(port, body=json.dumps({"key": KEY, "who": "refuse"}).encode())
    assert told["error"] == {"cause": "It is refused.", "remedy": "Ask otherwise."}


def test_only_loopback_is_listened_on():
    with loopback_socket() as link:
        assert link.getsockname()[0] == "127.0.0.1"
