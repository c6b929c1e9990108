"""Runs what README tells a newcomer to type: every block fenced as ```sh test, in order, in one shell."""

from __future__ import annotations

import os
import re
import signal
import subprocess

from cases import ROOT

SECONDS = 300


def test_commands_of_the_readme():
    blocks = re.findall(r"^```sh test\n(.*?)^```", (ROOT / "README.md").read_text(), re.MULTILINE | re.DOTALL)
    assert blocks, "README marks no commands for this test"
    environment = {**os.environ, "PATH": f"{ROOT / '.venv' / 'bin'}:{os.environ['PATH']}"}
    # What the blocks left running in the background is ended, or the pipe would stay open.
    script = "set -x\n" + "\n".join(blocks) + "\nset +x\nfor job in $(jobs -p); do kill $job; done\nexit 0\n"
    process = subprocess.Popen(
        ["bash", "-e", "-u", "-o", "pipefail", "-c", script], cwd=ROOT, env=environment, text=True, start_new_session=True,
        stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
    )
    try:
        output, _ = process.communicate(timeout=SECONDS)
    finally:
        try:
            os.killpg(process.pid, signal.SIGKILL)
        except ProcessLookupError:
            pass
    assert process.returncode == 0, output[-5000:]
