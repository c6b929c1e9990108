"""A solve request over HTTP beside its parts, in one run, against a service started here.

    .venv/bin/python tests/bench/request.py [FILE]

Floor: the same number of bytes each way through the same client to a bare socket server in this process would need another
language's server; instead `GET /health` gives the cost of an empty exchange. Parts come from the Server-Timing header. What is left is
what transport and bytes cost. Medians over interleaved calls.
"""

import http.client
import pathlib
import statistics
import subprocess
import sys
import time

ROOT = pathlib.Path(__file__).parents[2]
ROUNDS = 300


def main():
    file = pathlib.Path(sys.argv[1]) if len(sys.argv) > 1 else ROOT / "schemas/example-solve.json"
    body = file.read_bytes()
    service = subprocess.Popen([ROOT / "target/release/underfoot", "serve", "--port", "0"], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    try:
        address = service.stdout.readline().split("http://")[1].split()[0].strip("/,;.")
        connection = http.client.HTTPConnection(address)
        floor, total, parts = [], [], {}
        for _ in range(ROUNDS):
            start = time.perf_counter()
            connection.request("GET", "/health")
            connection.getresponse().read()
            floor.append(time.perf_counter() - start)
            start = time.perf_counter()
            connection.request("POST", "/v1/solve", body, {"Content-Type": "application/json"})
            response = connection.getresponse()
            size = len(response.read())
            total.append(time.perf_counter() - start)
            for entry in response.headers["Server-Timing"].split(","):
                name, duration = entry.strip().split(";dur=")
                parts.setdefault(name, []).append(float(duration) * 1e3)
    finally:
        service.terminate()
    micro = lambda values: 1e6 * statistics.median(values)  # noqa: E731
    print(f"{len(body)} bytes in, {size} bytes out: {micro(total):.0f} us")
    print(f"  empty exchange {micro(floor):.0f} us")
    spent = sum(statistics.median(v) for v in parts.values())
    for name, values in parts.items():
        print(f"  {name} {statistics.median(values):.0f} us")
    print(f"  left for transport of the bytes: {micro(total) - micro(floor) - spent:.0f} us")


if __name__ == "__main__":
    main()
