"""Starts the service for the tests that need it, and keeps the campaign's table."""

from __future__ import annotations

import datetime
import os
import re
import subprocess
import threading
from pathlib import Path

import numpy as np
import pytest
import underfoot

ROOT = Path(__file__).parents[2]
BINARY = Path(os.environ.get("UNDERFOOT_BIN", ROOT / "target" / "release" / "underfoot"))
FACTOR = int(os.environ.get("UNDERFOOT_CAMPAIGN", "1"))
SEED = int(os.environ.get("UNDERFOOT_SEED", "0"))
START_SECONDS = 20.0

_table: list[tuple[str, str]] = []


def pytest_configure(config: pytest.Config) -> None:
    config.addinivalue_line("markers", "seeded: audits of answers with one fault each; scales with UNDERFOOT_STATES and reports rows of the dated table")
    config.addinivalue_line("markers", "campaign: scales with UNDERFOOT_CAMPAIGN and reports a row of the dated table")


def start(*arguments: str) -> tuple[subprocess.Popen[str], str]:
    """Starts the service on a free port and waits for the address it prints."""
    process = subprocess.Popen(
        [str(BINARY), "serve", "--port", "0", *arguments], stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True
    )
    found: list[str] = []
    seen: list[str] = []
    ready = threading.Event()

    def drain() -> None:
        # Read to the end of the process, or a full pipe would stop the service.
        assert process.stdout is not None
        for line in process.stdout:
            seen.append(line)
            match = re.search(r"http://[\w.\-\[\]:]+:\d+", line)
            if match and not found:
                found.append(match.group(0))
                ready.set()
        ready.set()

    threading.Thread(target=drain, daemon=True).start()
    if not ready.wait(START_SECONDS) or not found:
        process.kill()
        pytest.fail(f"{BINARY} serve printed no address: {''.join(seen)}")
    return process, found[0]


@pytest.fixture(scope="session")
def address():
    """Address of the service under test, started for the session and ended with it."""
    if not BINARY.exists():
        pytest.fail(f"{BINARY} is missing: cargo build --release")
    process, found = start()
    yield found
    process.terminate()
    assert process.wait(15) == 0, "the service did not end in good order"


@pytest.fixture(scope="session")
def client(address):
    with underfoot.Client(address) as made:
        yield made


@pytest.fixture
def rng(request) -> np.random.Generator:
    """Seeded by the campaign's seed and the test's name: the same numbers in every run."""
    return np.random.default_rng([SEED, *request.node.name.encode()])


@pytest.fixture(scope="session")
def factor() -> int:
    """How many times more cases than in the plain test run."""
    return FACTOR


@pytest.fixture(scope="session")
def row():
    """Adds a row to the campaign's table: what was checked, and what came out."""

    def add(what: str, outcome: str) -> None:
        _table.append((what, outcome))

    return add


def pytest_terminal_summary(terminalreporter) -> None:
    if not _table:
        return
    today = datetime.date.today().isoformat()
    terminalreporter.write_line("")
    terminalreporter.write_line(f"| {today}, {os.cpu_count()} cores, factor {FACTOR}, seed {SEED} | |")
    terminalreporter.write_line("|---|---|")
    for what, outcome in _table:
        terminalreporter.write_line(f"| {what} | {outcome} |")
