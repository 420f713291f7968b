#!/usr/bin/env python3
"""What polled reads of the latest forecast cost one and two processes on one PostgreSQL, and what that says of N with cores of their own.

usage: replicas.py BINARY [POLLS]

Processor time of the service and of PostgreSQL from /proc, PostgreSQL's transactions from its own count. Standard library and psql;
traffic goes to loopback and ends by itself.
"""

import glob
import json
import os
import re
import socket
import statistics
import subprocess
import sys
import tempfile
import threading
import time

ROOT = os.path.dirname(os.path.dirname(os.path.abspath(__file__)))
sys.path.insert(0, os.path.join(ROOT, "tests"))
from kills_writer import DATES, GROWN, Replicas

BINARY = os.path.abspath(sys.argv[1])
POLLS = int(sys.argv[2]) if len(sys.argv) > 2 else 20_000
CONNECTIONS, ROUNDS, IDLE_SECONDS = 4, 5, 10
TICK = os.sysconf("SC_CLK_TCK")
LATEST = "/v1/networks/heronsgate/forecasts/latest"


def serve(folder, url):
    variables = {name: value for name, value in os.environ.items() if not name.startswith(("TAILCAST_", "OTEL_"))}
    variables |= {"TAILCAST_BIND": "127.0.0.1:0", "TAILCAST_DATABASE_URL": url, "TAILCAST_LOG_FILTER": "warn,tailcast::app=info"}
    log = tempfile.NamedTemporaryFile("w+", dir=folder, delete=False)
    child = subprocess.Popen([BINARY, "serve"], cwd=folder, env=variables, stderr=log)
    while not (found := re.search(r"serving address=127\.0\.0\.1:(\d+)", open(log.name).read())):
        if child.poll() is not None:
            sys.exit(open(log.name).read())
        time.sleep(0.05)
    return child, int(found[1])


def processor_seconds(pid, ended_children=False):
    fields = open(f"/proc/{pid}/stat").read().rsplit(")", 1)[1].split()
    return sum(int(field) for field in fields[11 : 15 if ended_children else 13]) / TICK


def database_seconds(postmaster):
    """Of the server and its sessions, those that have ended included."""
    total = processor_seconds(postmaster, True)
    for path in glob.glob("/proc/[0-9]*/stat"):
        try:
            if open(path).read().rsplit(")", 1)[1].split()[1] == str(postmaster):
                total += processor_seconds(path.split("/")[2], True)
        except (FileNotFoundError, ProcessLookupError):
            pass
    return total


def transactions(url):
    text = "SELECT xact_commit + xact_rollback FROM pg_stat_database WHERE datname = 'tailcast'"
    return int(subprocess.run(["psql", "-XAtc", text, url], check=True, capture_output=True, text=True).stdout)


def poll(port, times, tag):
    """Polls by one connection that stays open; answers how many bytes came."""
    head = f"GET {LATEST} HTTP/1.1\r\nhost: 127.0.0.1\r\n" + (f"if-none-match: {tag}\r\n" if tag else "") + "\r\n"
    total = 0
    with socket.create_connection(("127.0.0.1", port)) as connection:
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        for _ in range(times):
            connection.sendall(head.encode())
            text = b""
            while b"\r\n\r\n" not in text:
                text += connection.recv(65536)
            front, body = text.split(b"\r\n\r\n", 1)
            wanted = b"304" if tag else b"200"
            if front[9:12] != wanted:
                sys.exit(f"{front.decode()}")
            length = 0 if tag else int(re.search(rb"content-length: (\d+)", front, re.I)[1])
            while len(body) < length:
                body += connection.recv(65536)
            total += len(body)
    return total


def measure(children, ports, postmaster, url, tag):
    """Milliseconds of the service and of PostgreSQL for each thousand polls, transactions and polls a second."""
    time.sleep(1.5)
    before = transactions(url)
    service, database, begun = sum(map(processor_seconds, (child.pid for child in children))), database_seconds(postmaster), time.monotonic()
    threads = [
        threading.Thread(target=poll, args=(ports[place % len(ports)], POLLS // CONNECTIONS, tag)) for place in range(CONNECTIONS)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    took = time.monotonic() - begun
    service = sum(map(processor_seconds, (child.pid for child in children))) - service
    database = database_seconds(postmaster) - database
    return [1e6 * service / POLLS, 1e6 * database / POLLS, (transactions(url) - before) / took, POLLS / took]


def main():
    folder, pg_folder = tempfile.mkdtemp(), tempfile.mktemp(prefix="bench-pg-")
    server = os.path.join(ROOT, "tests", "postgres")
    url = subprocess.run([server, "start", pg_folder], check=True, stdout=subprocess.PIPE, text=True).stdout.strip()
    postmaster = int(open(os.path.join(pg_folder, "data", "postmaster.pid")).readline())
    children, ports = [], []
    try:
        for _ in range(2):
            child, port = serve(folder, url)
            children.append(child)
            ports.append(port)
        first = Replicas(ports[:1])
        plan = {"thresholds": [5, 10], "horizon": {"ends_after": "P3M", "every": "P1M"}, "arrivals": {"per_day": 4.0}}
        first.send("PUT", "/v1/networks/heronsgate", {"degree_kind": "received", "forecast_plan": plan})
        pairs = [[degree, nodes] for degree, nodes in sorted(GROWN[0].items())]
        first.send("PUT", f"/v1/networks/heronsgate/snapshots/{DATES[0]}", {"degree_counts": pairs})
        for _ in range(600):
            answer = first.send("GET", LATEST)
            if answer[0] == 200 and answer[1]["forecast-state"] == "current":
                break
            time.sleep(0.2)
        tag = answer[1]["etag"]
        print(f"{os.cpu_count()} cores shared by service, PostgreSQL and clients; latest forecast of {len(answer[2])} bytes;")
        print(f"{POLLS} polls by {CONNECTIONS} connections that stay open, medians of {ROUNDS} interleaved rounds")
        before, service, database = transactions(url), [processor_seconds(child.pid) for child in children], database_seconds(postmaster)
        time.sleep(IDLE_SECONDS)
        service = [1000 * (processor_seconds(child.pid) - was) / IDLE_SECONDS for child, was in zip(children, service)]
        database = 1000 * (database_seconds(postmaster) - database) / IDLE_SECONDS
        rate = (transactions(url) - before) / IDLE_SECONDS
        print(f"idle, two processes: {statistics.mean(service):.1f} ms of processor time a second each, PostgreSQL {database:.1f} ms, {rate:.1f} transactions a second")
        taken = {}
        for _ in range(ROUNDS):
            for name, with_tag in (("200", None), ("304", tag)):
                for count in (1, 2):
                    taken.setdefault((name, count), []).append(measure(children[:count], ports[:count], postmaster, url, with_tag))
        print("answer  processes   service ms/1000 polls   PostgreSQL ms/1000   transactions/s   polls/s here")
        cost = {}
        for (name, count), rows in sorted(taken.items()):
            middle = [statistics.median(column) for column in zip(*rows)]
            cost[name, count] = middle[0]
            print(f"{name:6}  {count:9}   {middle[0]:21.1f}   {middle[1]:18.2f}   {middle[2]:14.1f}   {middle[3]:12.0f}")
        for name in ("200", "304"):
            work = cost[name, 2] / cost[name, 1]
            print(f"{name}: work for each poll by two is {work:.3f} of that by one, so with a core each two serve {2 / work:.2f} times one")
    finally:
        for child in children:
            child.kill()
            child.wait()
        subprocess.run([server, "stop", pg_folder])


if __name__ == "__main__":
    main()
