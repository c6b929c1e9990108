"""The client against a scripted server: what it does when connections and answers go wrong."""

from __future__ import annotations

import json
import socket
import threading

import numpy as np
import pytest
import underfoot
from underfoot.transport import Transport, plain


class Scripted:
    """A server that plays one list of actions per connection: bytes to send after a request, or `close`."""

    def __init__(self, *connections):
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.address = f"http://127.0.0.1:{self.listener.getsockname()[1]}"
        self.requests: list[bytes] = []
        self.accepted = 0
        self.thread = threading.Thread(target=self._play, args=(connections,), daemon=True)
        self.thread.start()

    def _play(self, connections):
        for actions in connections:
            connection, _ = self.listener.accept()
            self.accepted += 1
            with connection:
                for action in actions:
                    if action == "close":
                        break
                    request = self._read(connection)
                    if request is None:
                        break
                    self.requests.append(request)
                    connection.sendall(action)
        self.listener.close()

    @staticmethod
    def _read(connection):
        data = b""
        while b"\r\n\r\n" not in data:
            part = connection.recv(65536)
            if not part:
                return None
            data += part
        head, _, body = data.partition(b"\r\n\r\n")
        length = 0
        for line in head.split(b"\r\n"):
            if line.lower().startswith(b"content-length:"):
                length = int(line.split(b":")[1])
        while len(body) < length:
            body += connection.recv(65536)
        return head + b"\r\n\r\n" + body


def reply(document, status=200, **headers):
    body = json.dumps(document).encode()
    lines = [f"HTTP/1.1 {status} X", f"content-length: {len(body)}", *(f"{k.replace('_', '-')}: {v}" for k, v in headers.items())]
    return ("\r\n".join(lines) + "\r\n\r\n").encode() + body


def test_one_connection_serves_many_requests():
    server = Scripted([reply({"n": i}) for i in range(3)])
    client = underfoot.Client(server.address)
    assert [client.health()["n"] for _ in range(3)] == [0, 1, 2]
    assert server.accepted == 1


def test_a_stale_connection_is_replaced_once():
    server = Scripted([reply({"n": 0}), "close"], [reply({"n": 1})])
    client = underfoot.Client(server.address)
    assert client.health()["n"] == 0
    assert client.health()["n"] == 1
    assert server.accepted == 2


def test_a_fresh_connection_that_breaks_is_not_tried_again():
    server = Scripted([b""], [reply({"n": 1})])
    with pytest.raises(underfoot.Unreachable):
        # The scripted server reads the request, sends nothing and closes.
        underfoot.Client(server.address, timeout=5).health()
    assert server.accepted == 1 and len(server.requests) == 1


def test_an_answer_that_breaks_off_is_not_tried_again():
    half = b"HTTP/1.1 200 X\r\ncontent-length: 100\r\n\r\n{"
    server = Scripted([reply({"n": 0}), half], [reply({"n": 1})])
    client = underfoot.Client(server.address)
    client.health()
    with pytest.raises(underfoot.Unreachable, match="broke off"):
        client.health()
    assert server.accepted == 1 and len(server.requests) == 2


def test_nobody_there():
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with pytest.raises(underfoot.Unreachable):
        underfoot.Client(f"http://127.0.0.1:{port}").health()


def test_a_silent_server_runs_into_the_timeout():
    with socket.create_server(("127.0.0.1", 0)) as listener:
        with pytest.raises(underfoot.Unreachable):
            underfoot.Client(f"http://127.0.0.1:{listener.getsockname()[1]}", timeout=0.2).health()


def test_refusals_carry_every_fault():
    problem = {
        "code": "unusable-request",
        "title": "The request cannot be used",
        "detail": "2 members cannot be used; see faults",
        "faults": [
            {"pointer": "/tick/length", "expected": "a positive number", "got": "-1"},
            {"pointer": "/model/urdf", "expected": "a known joint type", "got": "planar", "line": 7},
        ],
    }
    server = Scripted([reply(problem, 422, content_type="application/problem+json")])
    with pytest.raises(underfoot.Refused) as caught:
        underfoot.Client(server.address).solve({"model": "m"})
    refused = caught.value
    assert (refused.status, refused.code) == (422, "unusable-request")
    assert [f.pointer for f in refused.faults] == ["/tick/length", "/model/urdf"]
    assert refused.faults[1].line == 7
    assert "/tick/length: expected a positive number, got -1" in str(refused)


def test_busy_says_when_to_come_back():
    server = Scripted([reply({"code": "busy", "title": "t", "detail": "d"}, 503, retry_after="2")])
    with pytest.raises(underfoot.Busy) as caught:
        underfoot.Client(server.address).health()
    assert caught.value.retry_after == 2.0


def test_a_forgotten_model_is_sent_again_once():
    model = {"id": "m1", "name": "r", "joints": [], "soles": [], "mass": 1.0, "remarks": []}
    unknown = reply({"code": "unknown-model", "title": "t", "detail": "d", "faults": []}, 404)
    server = Scripted([reply(model, 201), unknown, reply(model, 201), unknown])
    client = underfoot.Client(server.address)
    made = client.add_model("<robot/>")
    with pytest.raises(underfoot.Refused) as caught:
        client.solve(model=made)
    assert caught.value.status == 404
    paths = [r.split(b" ")[1] for r in server.requests]
    assert paths == [b"/v1/models", b"/v1/solve", b"/v1/models", b"/v1/solve"]


def test_another_program_on_the_port():
    server = Scripted([b"HTTP/1.1 500 X\r\ncontent-length: 5\r\n\r\nhello"], [reply([1, 2])])
    with pytest.raises(underfoot.Garbled):
        underfoot.Client(server.address).health()


@pytest.mark.parametrize(
    ("value", "pointer"),
    [
        ({"a": {"b/c": [0.0, float("nan")]}}, "/a/b~1c/1"),
        ({"state": np.array([[1.0, 2.0], [np.inf, 0.0]])}, "/state/1/0"),
        ([np.float64("-inf")], "/0"),
    ],
)
def test_not_finite_is_refused_before_sending(value, pointer):
    with pytest.raises(underfoot.NotFinite) as caught:
        Transport("http://127.0.0.1:9", 0.1).post("/", value)
    assert caught.value.pointer == pointer


def test_numpy_becomes_plain_numbers():
    made = plain({"i": np.int64(3), "f": np.float32(0.5), "b": np.bool_(True), "a": np.arange(3), "n": None, "t": (1, "x")})
    assert made == {"i": 3, "f": 0.5, "b": True, "a": [0, 1, 2], "n": None, "t": [1, "x"]}
    assert json.loads(json.dumps(plain(np.array([0.1, 1 / 3])))) == [0.1, 1 / 3]
