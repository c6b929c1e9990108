"""A hostile client: whatever is sent, only documented statuses come back, and every refusal says where and why."""

from __future__ import annotations

import copy
import json
import random

import pytest
import underfoot
from underfoot import build
from underfoot.transport import plain

import scenes
from conftest import SEED

pytestmark = pytest.mark.campaign
DOCUMENTED = {200, 201, 400, 404, 413, 415, 422, 503}
MUTATIONS = 3000
NOISE = 500


@pytest.fixture(scope="module")
def walker(client):
    return scenes.add_walker(client)


def paths(value, here=()):
    """Every place in a document."""
    yield here
    if isinstance(value, dict):
        for key, item in value.items():
            yield from paths(item, (*here, key))
    elif isinstance(value, list):
        for i, item in enumerate(value[:6]):
            yield from paths(item, (*here, i))


def get(document, path):
    for part in path:
        document = document[part]
    return document


class Raw(str):
    """Text that goes into the JSON as it is."""


def dump(value) -> str:
    """JSON with `Raw` parts as they are, and duplicate keys where a list of pairs stands under `Pairs`."""
    if isinstance(value, Raw):
        return str(value)
    if isinstance(value, dict):
        return "{" + ",".join(f"{json.dumps(k)}:{dump(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ",".join(dump(v) for v in value) + "]"
    return json.dumps(value)


ODD = [
    Raw("null"), Raw("true"), Raw("1e999"), Raw("-1e999"), Raw("1e308"), Raw("-1"), Raw("0"), Raw("1e-320"), Raw("0.1"), Raw("[]"), Raw("{}"),
    Raw('""'), Raw('"x"'), Raw('"\\ud800"'), Raw('"\\u0000"'), Raw("[[[[[[[[]]]]]]]]"), Raw("18446744073709551616"), Raw("-9223372036854775809"),
    Raw("4294967296"), Raw("NaN"), Raw("Infinity"), Raw("[" * 200 + "]" * 200), Raw('{"a":' * 200 + "1" + "}" * 200), Raw("[0,0,0]"), Raw("[1,2,3,4,5,6,7]"),
]


def mutate(document, rng: random.Random):
    """One to three changes somewhere in the document."""
    made = copy.deepcopy(document)
    for _ in range(rng.randint(1, 3)):
        path = rng.choice(list(paths(made))[1:])
        try:
            parent = get(made, path[:-1])
        except (KeyError, IndexError, TypeError):
            continue
        if not isinstance(parent, (dict, list)):
            continue
        last = path[-1]
        value = parent[last]
        choice = rng.randrange(9)
        if choice <= 2:
            parent[last] = rng.choice(ODD)
        elif choice == 3:
            del parent[last]
        elif choice == 4 and isinstance(parent, dict):
            parent["unheard_of"] = 1
        elif choice == 5 and isinstance(value, (int, float)) and not isinstance(value, bool):
            parent[last] = value * rng.choice([-1, 0, 1e-12, 1e3, 1e12, 1e200]) if abs(value) < 1e100 else 0
        elif choice == 6 and isinstance(value, list) and value:
            parent[last] = value + [value[0]] if rng.random() < 0.5 else value[:-1]
        elif choice == 7 and isinstance(value, dict):
            parent[last] = [value] if rng.random() < 0.5 else list(value.values())
        elif choice == 8 and isinstance(value, dict) and value:
            key = rng.choice(list(value))
            parent[last] = Raw("{" + ",".join([*(f"{json.dumps(k)}:{dump(v)}" for k, v in value.items()), f"{json.dumps(key)}:{dump(value[key])}"]) + "}")
        else:
            parent[last] = rng.choice(ODD)
    return made


def judge(reply, sent: bytes):
    """A documented status; a refusal is a problem document with usable pointers."""
    about = (reply.status, reply.body[:500], sent[:2000])
    assert reply.status in DOCUMENTED, about
    if reply.status in (200, 201):
        json.loads(reply.body, parse_constant=lambda name: pytest.fail(f"{name} in an answer"))
        return
    assert reply.headers["content-type"].split(";")[0] == "application/problem+json", about
    problem = json.loads(reply.body)
    assert problem["status"] == reply.status and problem["code"] and problem["title"] and problem["detail"], about
    if reply.status == 422:
        assert problem["faults"], about
    for fault in problem.get("faults", []):
        assert fault["pointer"] == "" or fault["pointer"].startswith("/"), about
        assert fault["expected"] and "got" in fault, about


def documents(client, walker):
    solve = plain(scenes.standing(client, walker, levels=True, include=("problem", "dynamics")))
    solve["model"] = walker.id
    wrench = plain(scenes.standing(client, walker, facets="wrench"))
    wrench["model"] = walker.id
    dynamics = {"model": walker.id, "state": solve["state"]}
    torques = [(joint, 0.0) for joint in walker.joints]
    answer = build.controller_answer(torques, wrenches={"left_sole": [0, 0, 190, 0, 0, 0]}, targets={"balance": [0.0] * 6})
    audit = {"format": build.FORMAT, "request": wrench, "answer": plain(answer), "tolerances": {"relative": 1e-3}}
    return [("/v1/solve", solve), ("/v1/solve", wrench), ("/v1/audit", audit), ("/v1/dynamics", dynamics), ("/v1/models", plain(dict(walker.source)))]


def test_mutated_requests(client, walker, factor, row):
    known = documents(client, walker)
    generator = random.Random(f"mutations {SEED}")
    statuses: dict[int, int] = {}
    for _ in range(MUTATIONS * factor):
        path, document = generator.choice(known)
        body = dump(mutate(document, generator)).encode("utf-8", "surrogatepass")
        reply = client.raw("POST", path, body)
        judge(reply, body)
        statuses[reply.status] = statuses.get(reply.status, 0) + 1
    row(f"{MUTATIONS * factor} mutated requests: statuses", ", ".join(f"{s}: {n}" for s, n in sorted(statuses.items())))
    assert statuses.get(422, 0) > MUTATIONS // 10, statuses
    assert client.health()


def test_random_bytes(client, walker, factor, row):
    generator = random.Random(f"noise {SEED}")
    known = [(path, json.dumps(document).encode()) for path, document in documents(client, walker)]
    statuses: dict[int, int] = {}
    for i in range(NOISE * factor):
        path, body = generator.choice(known)
        if i % 3 == 0:
            body = generator.randbytes(generator.randint(0, 3000))
        elif i % 3 == 1:
            body = body[: generator.randint(0, len(body) - 1)]
        else:
            changed = bytearray(body)
            for _ in range(generator.randint(1, 4)):
                changed[generator.randrange(len(changed))] = generator.randrange(256)
            body = bytes(changed)
        reply = client.raw("POST", path, body)
        judge(reply, body)
        statuses[reply.status] = statuses.get(reply.status, 0) + 1
    row(f"{NOISE * factor} noisy bodies: statuses", ", ".join(f"{s}: {n}" for s, n in sorted(statuses.items())))
    assert statuses.get(400, 0) > NOISE // 5, statuses


def pointers(client, request):
    with pytest.raises(underfoot.Refused) as caught:
        client.solve(request)
    return caught.value


def spoiled(client, walker, path, value):
    document = plain(scenes.standing(client, walker) | {"model": walker.id})
    parent = get(document, path[:-1])
    parent[path[-1]] = value
    return document


@pytest.mark.parametrize(
    ("path", "value", "pointer"),
    [
        (("tick", "length"), -1.0, "/tick/length"),
        (("tick", "length"), "x", "/tick/length"),
        (("gravity",), [0, 0], "/gravity"),
        (("unheard_of",), 1, "/unheard_of"),
        (("contacts", 1, "sole"), "third_sole", "/contacts/1/sole"),
        (("tasks", 0, "priority"), 0, "/tasks/0/priority"),
    ],
)
def test_faults_point_at_the_culprit(client, walker, path, value, pointer):
    refused = pointers(client, spoiled(client, walker, path, value))
    assert refused.status == 422
    assert any(f.pointer.startswith(pointer) for f in refused.faults), refused


def test_several_faults_come_together(client, walker):
    document = spoiled(client, walker, ("tick", "length"), "x")
    document["gravity"] = {"z": -9.81}
    found = {f.pointer for f in pointers(client, document).faults}
    assert {"/tick/length", "/gravity"} <= found


def test_not_json(client, address):
    assert client.raw("POST", "/v1/solve", b"{}", {"Content-Type": "text/plain"}).status == 415
    assert client.raw("POST", "/v1/solve", b"{}", {"Origin": "http://elsewhere.example"}).status == 403
    assert client.raw("GET", "/health", None, {"Host": "elsewhere.example"}).status == 421
    assert client.raw("GET", "/v1/nowhere").status == 404
    assert client.raw("GET", "/v1/solve").status == 405


def test_unknown_model(client):
    with pytest.raises(underfoot.Refused) as caught:
        client.model("0" * 64)
    assert (caught.value.status, caught.value.code) == (404, "unknown-model")


def test_enormous_body(address):
    with underfoot.Client(address) as own:
        try:
            reply = own.raw("POST", "/v1/solve", b" " * 100_000_000)
        except underfoot.Unreachable:
            return  # The service hung up on a body it will not read, which is its right.
        assert reply.status == 413
