"""Solves per second and core in a batch, beside the solve alone, in one run, against a service started here with one worker.

    .venv/bin/python tests/bench/batch.py

Every line is the state of the example request. The solve alone is what the Server-Timing header of single requests says
(question to certified answer, neither reading nor writing); a line of the batch takes from one answer to the next, read from curl. Rounds
take turns; first deciles, so that what else the machine does counts little.
"""

import http.client
import json
import pathlib
import statistics
import subprocess
import tempfile
import time

ROOT = pathlib.Path(__file__).parents[2]
ROUNDS, LINES = 9, 150


def main():
    request = json.loads((ROOT / "schemas/example-solve.json").read_text())
    state = request.pop("state")
    lines = [json.dumps({"template": request, "format": "underfoot/1"})] + [json.dumps({"id": i, "state": state}) for i in range(LINES)]
    service = subprocess.Popen([ROOT / "target/release/underfoot", "serve", "--port", "0", "--workers", "1", "--log", "warn"], stdout=subprocess.PIPE, text=True)
    try:
        address = service.stdout.readline().split("http://")[1].split()[0].strip("/,;.")
        connection = http.client.HTTPConnection(address)
        body = json.dumps({**request, "state": state}).encode()
        solve, single, batch = [], [], []  # seconds
        with tempfile.NamedTemporaryFile("w", suffix=".ndjson") as file:
            file.write("\n".join(lines) + "\n")
            file.flush()
            for _ in range(ROUNDS):
                for _ in range(LINES // 5):
                    start = time.perf_counter()
                    connection.request("POST", "/v1/solve", body, {"Content-Type": "application/json"})
                    response = connection.getresponse()
                    response.read()
                    single.append(time.perf_counter() - start)
                    parts = dict(entry.strip().split(";dur=") for entry in response.headers["Server-Timing"].split(","))
                    solve.append(float(parts["solve"]) * 1e-3)
                command = ["curl", "-sSN", "-X", "POST", "-T", file.name, "-H", "Content-Type: application/x-ndjson", f"http://{address}/v1/batch"]
                with subprocess.Popen(command, stdout=subprocess.PIPE) as sender:
                    last = None
                    for _ in sender.stdout:
                        now = time.perf_counter()
                        if last is not None:
                            batch.append(now - last)
                        last = now
    finally:
        service.terminate()
    bare, alone, line = (statistics.quantiles(values, n=10)[0] for values in (solve, single, batch))
    print(f"solve alone {1 / bare:.0f} per second and core ({1e3 * bare:.2f} ms)")
    print(f"in a batch  {1 / line:.0f} per second and core ({1e3 * line:.2f} ms): {bare / line:.2f} of the solve alone")
    print(f"one by one  {1 / alone:.0f} per second ({1e3 * alone:.2f} ms): {bare / alone:.2f} of the solve alone")


if __name__ == "__main__":
    main()
