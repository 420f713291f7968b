"""Peak memory of one forecast on the command line by its distinct degrees.

usage: python3 benches/memory.py BINARY
"""

import json
import os
import subprocess
import sys
import tempfile
import time

BINARY = os.path.abspath(sys.argv[1])


def request(distinct):
    """Counts that fall as k^−2.25 over the degrees from 0 on, one node at least."""
    counts = [[degree, max(1, round(1e6 / (degree + 1) ** 2.25))] for degree in range(distinct)]
    nodes = sum(pair[1] for pair in counts)
    return {
        "degree_kind": "received",
        "snapshots": [{"as_of": "2026-06-01", "degree_counts": counts}],
        "arrivals": {"per_day": nodes / 1_000},
        "thresholds": [10, 100, 1_000, 10_000, 100_000],
        "horizon": {"ends_after": "P1Y", "every": "P1M"},
    }


def main():
    print(f"{'distinct degrees':>16} {'request':>10} {'seconds':>8} {'peak':>8}")
    with tempfile.TemporaryDirectory() as folder:
        for distinct in (100, 10_000, 100_000, 1_000_000):
            path = os.path.join(folder, "request.json")
            with open(path, "w", encoding="ascii") as out:
                json.dump(request(distinct), out, separators=(",", ":"))
            begun = time.perf_counter()
            process = subprocess.Popen([BINARY, "forecast", path], stdout=subprocess.DEVNULL, cwd=folder)
            _, status, used = os.wait4(process.pid, 0)
            assert status == 0, f"the forecast of {distinct} degrees ended with {status}"
            took = time.perf_counter() - begun
            print(f"{distinct:>16} {os.path.getsize(path) / 1e6:>7.1f} MB {took:>8.2f} {used.ru_maxrss / 1024:>5.0f} MiB", flush=True)


if __name__ == "__main__":
    main()
