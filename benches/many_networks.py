#!/usr/bin/env python3
"""How the service stands 100,000 networks and as many runs: start-up, readiness, lists, metrics, and what the check of a large
file costs. Standard library only; traffic goes to loopback and ends by itself.

usage: many_networks.py BINARY [NETWORKS]
"""

import http.client
import json
import os
import re
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time

BINARY = os.path.abspath(sys.argv[1])
NETWORKS = int(sys.argv[2]) if len(sys.argv) > 2 else 100_000


def serve(folder):
    """The service on a free port, its port, and the seconds from its start to its first answer."""
    variables = {name: value for name, value in os.environ.items() if not name.startswith("TAILCAST_")}
    variables |= {"TAILCAST_BIND": "127.0.0.1:0", "TAILCAST_LOG_FILTER": "info"}
    begun = time.monotonic()
    log = open(os.path.join(folder, "log"), "w+")
    process = subprocess.Popen([BINARY, "serve"], cwd=folder, env=variables, stderr=log)
    while True:
        found = re.search(r"serving address=127\.0\.0\.1:(\d+)", open(log.name).read())
        if found:
            break
        if process.poll() is not None or time.monotonic() - begun > 60:
            sys.exit(open(log.name).read())
        time.sleep(0.001)
    port = int(found[1])
    get(port, "/readyz")
    return process, port, time.monotonic() - begun


def stop(process):
    process.send_signal(signal.SIGTERM)
    process.wait(60)


def call(port, method, path, body=None):
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=60)
    connection.request(method, path, json.dumps(body) if body else None, {"content-type": "application/json"} if body else {})
    response = connection.getresponse()
    text = response.read().decode()
    assert response.status < 300, f"{method} {path}: {response.status} {text}"
    return text, response.headers


def get(port, path):
    return call(port, "GET", path)


def timed(port, path, rounds=9):
    times = []
    for _ in range(rounds):
        begun = time.monotonic()
        text, headers = get(port, path)
        times.append(time.monotonic() - begun)
    return sorted(times)[rounds // 2], text, headers


def tell(what, seconds, more=""):
    print(f"{what:<52}{seconds * 1e3:10.1f} ms  {more}".rstrip(), flush=True)


with tempfile.TemporaryDirectory() as folder:
    # One network made by the service itself is the pattern of all others.
    process, port, empty = serve(folder)
    network = "/v1/networks/heronsgate"
    call(port, "PUT", network, {"degree_kind": "received"})
    counts = [[degree, 4000 // (degree + 1) ** 2] for degree in range(40)] + [[60, 2], [90, 1]]
    call(port, "PUT", f"{network}/snapshots/2026-06-01", {"degree_counts": [pair for pair in counts if pair[1]]})
    plan = {"thresholds": [5, 10, 20], "horizon": {"ends_after": "P2M", "every": "P1M"}, "arrivals": {"per_day": 50.0}}
    call(port, "PUT", network, {"degree_kind": "received", "forecast_plan": plan})
    for _ in range(300):
        if (json.loads(get(port, network)[0]).get("refresh") or {}).get("state") == "current":
            break
        time.sleep(0.1)
    stop(process)

    path = os.path.join(folder, "tailcast.db")
    database = sqlite3.connect(path)
    database.execute("PRAGMA synchronous = OFF")
    columns = {
        table: [row[1] for row in database.execute(f"PRAGMA table_info({table})")]
        for table in ("networks", "snapshots", "runs", "network_runs", "latest_forecasts")
    }
    rows = {table: database.execute(f"SELECT * FROM {table}").fetchone() for table in columns}
    assert all(rows.values()), "the pattern is made"
    for table, names in columns.items():
        def copies(table=table, names=names):
            for number in range(NETWORKS):
                run = f"0190a0b0-0000-7000-8000-{number:012x}"
                place = {"network": f"n{number:06}", "run_id": run}
                if table == "networks":
                    place["name"] = f"n{number:06}"
                if table == "runs":
                    place["id"] = run
                yield [place.get(name, value) for name, value in zip(names, rows[table])]
        marks = ", ".join("?" * len(names))
        database.executemany(f"INSERT INTO {table} ({', '.join(names)}) VALUES ({marks})", copies())
    database.commit()
    database.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    database.close()

    print(f"{NETWORKS} networks, each with a snapshot, a run and a latest forecast; file of {os.path.getsize(path) >> 20} MiB")
    tell("start to ready, empty database", empty)
    for name in ("first", "second"):
        process, port, seconds = serve(folder)
        if name == "first":
            stop(process)
        tell(f"start to ready, {name} start", seconds)
    tell("readyz", timed(port, "/readyz")[0])
    seconds, text, headers = timed(port, "/v1/networks?limit=100")
    tell("first page of 100 networks", seconds)
    pages, link, begun = 1, headers["link"], time.monotonic()
    while link and pages < 50:
        link = get(port, re.search(r"<([^>]+)>", link)[1])[1]["link"]
        pages += 1
    tell("each of the 50 pages that follow", (time.monotonic() - begun) / (pages - 1))
    tell("first page of 100 forecasts", timed(port, "/v1/forecasts?limit=100")[0])
    tell("first page of 100 forecasts of one network", timed(port, f"/v1/forecasts?limit=100&network=n{NETWORKS // 2:06}")[0])
    tell("latest forecast of one network", timed(port, f"/v1/networks/n{NETWORKS // 2:06}/forecasts/latest")[0])
    begun = time.monotonic()
    get(port, "/metrics")
    tell("first scrape of the metrics", time.monotonic() - begun)
    seconds, text, _ = timed(port, "/metrics")
    tell("later scrapes", seconds, f"{len(text) >> 10} KiB")
    begun = time.monotonic()
    call(port, "POST", "/v1/fits", {"degree_kind": "received", "links_per_arrival": 3.0, "fixed": {"preferential_share": 0.7},
                                    "snapshots": [{"as_of": "2026-06-01", "degree_counts": [[0, 500], [1, 90], [9, 4]]}]})
    tell("a fit kept", time.monotonic() - begun)
    for _ in range(600):
        log = open(os.path.join(folder, "log")).read()
        found = re.search(r"is sound.*elapsed_ms=(\d+)", log) or re.search(r"elapsed_ms=(\d+).*is sound", log)
        if found:
            tell("check of the whole file, while serving", int(found[1]) / 1e3)
            break
        time.sleep(0.1)
    else:
        sys.exit("the file's check has not ended:\n" + log)
    begun = time.monotonic()
    subprocess.run([BINARY, "backup", "copy.db"], cwd=folder, check=True, capture_output=True)
    tell("tailcast backup, checked", time.monotonic() - begun)
    status = open(f"/proc/{process.pid}/status").read()
    peak = int(re.search(r"VmHWM:\s+(\d+)", status)[1]) >> 10
    print(f"peak memory of the service: {peak} MiB")
    stop(process)
