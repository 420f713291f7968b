"""Draws the table of `cargo bench --bench curves` as `benches/curves.svg`, and adds what a store of up to 10⁶ runs costs.

usage: python3 benches/curves.py BINARY [TABLE]      (needs matplotlib; TABLE is made anew when left out)

Runs are copied within the database file, by its own SQL; then the service starts on it. Start-up is from the process's start to its
first `/readyz`; each other time is the least of nine.
"""

import csv
import http.client
import io
import json
import math
import os
import pathlib
import re
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time

HERE = pathlib.Path(__file__).resolve().parent
BINARY = os.path.abspath(sys.argv[1])
SIZES = [1, 1_000, 10_000, 100_000, 1_000_000]
ASKED = {
    "degree_kind": "received",
    "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[0, 9_000], [1, 3_000], [2, 900], [5, 90], [20, 9]]}],
    "arrivals": {"per_day": 20.0},
    "thresholds": [50],
    "horizon": {"ends_after": "P1M", "every": "P1M"},
}
COPIES = """
WITH RECURSIVE number(i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM number WHERE i < {count})
INSERT INTO runs ({columns}) SELECT {values} FROM runs, number WHERE runs.id = '{id}'
"""


class Service:
    def __init__(self, folder):
        variables = {name: value for name, value in os.environ.items() if not name.startswith("TAILCAST_")}
        variables |= {"TAILCAST_BIND": "127.0.0.1:0", "TAILCAST_LOG_FILTER": "info"}
        begun = time.perf_counter()
        log = pathlib.Path(folder, "log")
        self.process = subprocess.Popen([BINARY, "serve"], cwd=folder, env=variables, stderr=log.open("w"))
        while not (found := re.search(r"serving address=127\.0\.0\.1:(\d+)", log.read_text())):
            assert self.process.poll() is None, log.read_text()
            time.sleep(0.0005)
        self.port = int(found[1])
        self.call("GET", "/readyz")
        self.started = time.perf_counter() - begun

    def call(self, method, path, body=None):
        connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=60)
        sent = json.dumps(body) if body else None
        connection.request(method, path, sent, {"content-type": "application/json"} if body else {})
        answer = connection.getresponse()
        text = answer.read().decode()
        assert answer.status < 300, f"{method} {path}: {answer.status} {text}"
        return json.loads(text) if text.startswith("{") else text

    def least(self, method, path, body=None):
        def once():
            begun = time.perf_counter()
            self.call(method, path, body)
            return time.perf_counter() - begun

        return min(once() for _ in range(9))

    def stop(self):
        self.process.send_signal(signal.SIGTERM)
        self.process.wait(60)


def stored_runs():
    """Rows of the table: part, law, size, seconds."""
    with tempfile.TemporaryDirectory() as folder:
        service = Service(folder)
        run = service.call("POST", "/v1/forecasts", ASKED)["id"]
        service.stop()
        have = 1
        for size in SIZES:
            with sqlite3.connect(pathlib.Path(folder, "tailcast.db")) as database:
                columns = [row[1] for row in database.execute("PRAGMA table_info(runs)") if row[1] != "seq"]
                # Ids that sort by time as the run's own does, each in the form of an id.
                told = {"id": f"substr(id, 1, 24) || printf('%012x', {have} + i)"}
                if size > have:
                    values = ", ".join(told.get(column, column) for column in columns)
                    database.execute(COPIES.format(count=size - have, columns=", ".join(columns), values=values, id=run))
            database.close()
            have = max(have, size)
            starts = []
            for _ in range(5):
                service = Service(folder)
                starts.append(service.started)
                service.stop()
            service = Service(folder)
            yield "stored runs", "start", size, min(starts)
            yield "stored runs", "list", size, service.least("GET", "/v1/forecasts?limit=20")
            yield "stored runs", "one run", size, service.least("GET", f"/v1/forecasts/{run}")
            yield "stored runs", "a forecast made and kept", size, service.least("POST", "/v1/forecasts", ASKED)
            service.stop()


def exponents(rows):
    before = {}
    for part, law, size, seconds in rows:
        sooner = before.get((part, law))
        told = f"{math.log(seconds / sooner[1]) / math.log(size / sooner[0]):.2f}" if sooner else ""
        before[part, law] = (size, seconds)
        yield part, law, size, f"{seconds:.6f}", told


def draw(rows):
    import matplotlib

    matplotlib.use("svg")
    import matplotlib.pyplot as plt

    plt.rcParams |= {"svg.hashsalt": "curves", "font.size": 9}
    parts = list(dict.fromkeys(row["part"] for row in rows))
    figure, panels = plt.subplots(2, 3, figsize=(11, 6.4), layout="constrained")
    marks = ["o", "s", "^", "D"]
    for panel, part in zip(panels.flat, parts):
        laws = list(dict.fromkeys(row["law"] for row in rows if row["part"] == part))
        for law, mark in zip(laws, marks):
            points = [(int(row["size"]), 1e3 * float(row["seconds"])) for row in rows if (row["part"], row["law"]) == (part, law)]
            panel.loglog(*zip(*points), marker=mark, markersize=4, label=law)
        panel.set(title=part, ylabel="ms")
        panel.grid(alpha=0.3)
        panel.legend(fontsize=8, frameon=False)
    figure.savefig(HERE / "curves.svg", metadata={"Date": None})


def main():
    table = pathlib.Path(sys.argv[2]).read_text() if len(sys.argv) > 2 else None
    if table is None:
        command = ["cargo", "bench", "--locked", "--bench", "curves", "--no-default-features"]
        table = subprocess.run(command, cwd=HERE.parent, check=True, stdout=subprocess.PIPE, text=True).stdout
    table = table[table.index("part\t") :]
    if "stored runs" not in table:
        table += "".join("\t".join(map(str, row)) + "\n" for row in exponents(stored_runs()))
    (HERE / "curves.txt").write_text("$ python3 benches/curves.py target/release/tailcast\n" + table, encoding="utf-8")
    print(table)
    draw(list(csv.DictReader(io.StringIO(table), delimiter="\t")))


if __name__ == "__main__":
    main()
