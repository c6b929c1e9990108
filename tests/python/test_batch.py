"""Batches through curl and through the client: every line answered, in order, without hanging, in flat memory.

The plain run sends a few thousand lines; the campaign (`tests/campaign`, or UNDERFOOT_BATCH=100000) sends 100 000 each way.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import threading
import time

import pytest
import underfoot
from underfoot import build

import conftest
import scenes
from cases import ROOT, walker_stance

pytestmark = pytest.mark.campaign
LINES = int(os.environ.get("UNDERFOOT_BATCH", "100000" if conftest.FACTOR > 1 else "2000"))
SECONDS = max(120.0, LINES * 0.02)
# What the service may grow by over all lines, once the first tenth was answered (bytes). Allocators keep some of what they are
# given back; 100 000 answers of 40 kB held would be 4 GB.
GROWTH = 16 << 20


@pytest.fixture(scope="module")
def walker(client):
    return scenes.add_walker(client)


@pytest.fixture
def template(client, walker, rng):
    return scenes.standing(client, walker, walker_stance(rng), facets=8)


def resident(process) -> int:
    """Resident memory (bytes)."""
    with open(f"/proc/{process}/statm") as file:
        return int(file.read().split()[1]) * os.sysconf("SC_PAGE_SIZE")


def within(seconds, work):
    """Runs `work` and fails instead of hanging."""
    found = []
    thread = threading.Thread(target=lambda: found.append(work()), daemon=True)
    thread.start()
    thread.join(seconds)
    assert found, f"no end after {seconds} s"
    return found[0]


def example():
    """The example request, its state apart."""
    request = json.loads((ROOT / "schemas" / "example-solve.json").read_text())
    return request, request.pop("state")


def moved(state, i):
    """What is new in a state a little elsewhere: the rest comes from the template."""
    return {"base": {"position": [1e-9 * i, *state["base"]["position"][1:]]}}


def test_the_client_takes_lines_as_they_come_in_flat_memory(row):
    """Dynamics lines: short and quick, so that their number is what counts."""
    request, state = example()
    process, address = conftest.start("--log", "warn")
    try:
        taken = 0
        sizes = []

        def lines():
            nonlocal taken
            for i in range(LINES):
                taken = i + 1
                yield {"id": i, "state": moved(state, i)}

        def run():
            ahead = 0
            template = {"model": request["model"], "state": state}
            with underfoot.Client(address) as client, client.batch(template, lines(), operation="dynamics") as batch:
                for n, line in enumerate(batch):
                    assert (line.id, line.number, line.problem) == (n, n + 2, None)
                    assert len(line.answer["dynamics"]["bias"]) == 25 and line.answer["dynamics"]["mass"] > 1
                    ahead = max(ahead, taken - n)
                    if n % max(1, LINES // 100) == 0:
                        sizes.append(resident(process.pid))
                return batch.summary, ahead

        start = time.perf_counter()
        summary, ahead = within(SECONDS, run)
        seconds = time.perf_counter() - start
    finally:
        process.terminate()
        process.wait(15)
    assert summary == {"ended": "complete", "lines": LINES, "answered": LINES, "bad": 0, "statuses": [{"status": "answered", "count": LINES}]}
    assert len(sizes) >= 90
    growth = max(sizes[10:]) - max(sizes[:10])
    row(f"batch of {LINES} dynamics lines through the Python client: lines per second / growth of the service's memory / lines sent ahead", f"{LINES / seconds:.0f} / {growth / 1024:.0f} kB / {ahead}")
    assert growth < GROWTH, sizes


def test_curl_reads_while_it_sends(row, tmp_path):
    """The line for curl in README, with a file larger than all buffers between."""
    curl = shutil.which("curl")
    assert curl, "curl is missing"
    request, state = example()
    file = tmp_path / "lines.ndjson"
    with file.open("w") as out:
        head = {"format": "underfoot/1", "operation": "dynamics", "template": {"format": "underfoot/1", "model": request["model"], "state": state}}
        out.write(json.dumps(head) + "\n")
        for i in range(LINES):
            # One line in a hundred is no JSON; it must not stop the rest.
            out.write("{broken\n" if i % 100 == 50 else json.dumps({"id": i, "state": moved(state, i)}) + "\n")
    process, address = conftest.start("--log", "warn")
    try:
        sizes = []
        command = [curl, "-sSN", "-X", "POST", "-T", str(file), "-H", "Content-Type: application/x-ndjson", f"{address}/v1/batch"]
        with subprocess.Popen(command, stdout=subprocess.PIPE) as sender:
            watchdog = threading.Timer(SECONDS, sender.kill)
            watchdog.start()
            last = {}
            for n, text in enumerate(sender.stdout):
                last = json.loads(text)
                if "line" in last:
                    assert last["line"] == n + 2
                    assert ("problem" in last) == (n % 100 == 50) and (last["id"] == n or n % 100 == 50)
                if n % max(1, LINES // 100) == 0:
                    sizes.append(resident(process.pid))
            watchdog.cancel()
            assert sender.wait() == 0
    finally:
        process.terminate()
        process.wait(15)
    bad = len(range(50, LINES, 100))
    assert last["summary"] == {"ended": "complete", "lines": LINES, "answered": LINES - bad, "bad": bad, "statuses": [{"status": "answered", "count": LINES - bad}]}
    growth = max(sizes[10:]) - max(sizes[:10])
    row(f"batch of {LINES} lines through curl, one in a hundred broken: growth of the service's memory", f"{growth / 1024:.0f} kB")
    assert growth < GROWTH, sizes


def test_lines_are_answered_as_single_requests_are(client, walker, rng, template):
    """And the command line prints the same bytes."""
    stances = [walker_stance(rng, speed=0.05) for _ in range(20)]
    states = [scenes.state_of(stance) for stance in stances]
    head = {k: v for k, v in template.items() if k != "state"}
    lines = [{"id": f"n{i}", "state": state} for i, state in enumerate(states)]
    with client.batch(head, lines) as batch:
        answers = list(batch)
    assert [a.id for a in answers] == [line["id"] for line in lines]
    singles = [client.solve({**template, "state": state}) for state in states]
    assert [a.answer for a in answers] == [s.document for s in singles]
    counts = {c["status"]: c["count"] for c in batch.summary["statuses"]}
    assert counts == {status: [s.status for s in singles].count(status) for status in counts}
    assert counts.get("solved", 0) >= 10, counts


def test_refused_lines_say_where(client, walker, template):
    """Faults come as the client's own type; lines after them are answered."""
    lines = [{"id": 1, "gravity": [0, 0]}, {}, {"contacts": [{"sole": "nowhere", "law": {"kind": "rigid"}}]}, {"tick": {"length": -1}}]
    with client.batch(template, lines, members=["status"]) as batch:
        answers = list(batch)
    assert [[f.pointer for f in a.faults] for a in answers] == [["/gravity"], [], ["/contacts/0/sole"], ["/tick/length"]]
    assert set(answers[1].answer) == {"status"}
    assert batch.summary["bad"] == 3


def test_a_refused_batch_is_an_exception_and_takes_no_lines(client, walker, template):
    taken = []
    with pytest.raises(underfoot.Refused) as refused:
        client.batch({**template, "tick": {"length": "long"}}, (taken.append(i) or {} for i in range(3)))
    assert refused.value.faults[0].pointer == "/template/tick/length"
    assert not taken


def test_what_the_lines_raise_is_raised_to_the_reader(client, walker, template):
    def lines():
        yield {}
        yield {}
        raise KeyError("the caller's own mistake")

    def run():
        try:
            with client.batch(template, lines(), members=["status"]) as batch:
                list(batch)
        except KeyError as error:
            return error
        return None

    assert isinstance(within(60, run), KeyError)


def test_stopping_early_calls_off_the_rest(client, walker, template):
    """An endless batch, left after three answers: the service goes on, and so does the sending thread's owner."""

    def run():
        def endless():
            while True:
                yield {}

        with client.batch(template, endless(), members=["status"]) as batch:
            for n, _ in enumerate(batch):
                if n == 2:
                    break
        batch._sender.join(20)
        assert not batch._sender.is_alive()
        return client.solve(template).status

    assert within(60, run) == "solved"


def test_a_lost_model_is_sent_again(template):
    """The service keeps 64 models; an earlier one is registered again when the batch needs it."""
    process, address = conftest.start("--log", "warn")
    try:
        with underfoot.Client(address) as client:
            model = scenes.add_walker(client)
            for i in range(70):
                urdf = f'<robot name="r{i}"><link name="a"><inertial><mass value="1"/><inertia ixx="1" iyy="1" izz="1" ixy="0" ixz="0" iyz="0"/></inertial></link></robot>'
                client.add_model(urdf)
            with pytest.raises(underfoot.Refused):
                client.model(model.id)
            with client.batch({**template, "model": model}, [{}], members=["status"]) as batch:
                assert [a.answer["status"] for a in batch] == ["solved"]
    finally:
        process.terminate()
        process.wait(15)


def test_the_client_can_be_typed_line_by_line(address, walker, template):
    """`underfoot batch -` answers each line before the next is written, with the same bytes as the service."""
    head = {"format": "underfoot/1", "template": json.loads(json.dumps(underfoot.transport.plain({**template, "model": walker.source}))), "members": ["status"]}
    head["template"]["model"].pop("format")
    with subprocess.Popen([conftest.BINARY, "batch", "-"], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as process:
        watchdog = threading.Timer(60, process.kill)
        watchdog.start()
        process.stdin.write(json.dumps(head) + "\n")
        for i in range(3):
            process.stdin.write(json.dumps({"id": i}) + "\n")
            process.stdin.flush()
            assert json.loads(process.stdout.readline()) == {"line": i + 2, "id": i, "answer": {"status": "solved"}}
        process.stdin.close()
        assert json.loads(process.stdout.readline())["summary"]["answered"] == 3
        watchdog.cancel()
    assert process.returncode == 0
