#!/usr/bin/env python3
"""Kills the service with SIGKILL again and again under mixed writes, then holds what is stored against all that was acknowledged.

usage: kills.py BINARY [--kills 200] [--seed 1] [--postgres [--replicas 3]] [--keep FOLDER]

On SQLite one process is killed and started anew; with --postgres several processes on a PostgreSQL of the command's own
(tests/postgres), one killed at a time. Moments and writes are drawn from the seed; how they meet is the machine's affair. Standard
library, and psql with --postgres. Traffic goes to loopback and ends by itself. Ends with 1 when anything was lost, doubled, half
there or stuck.
"""

import argparse
import json
import os
import random

import shutil
import signal
import socket
import sqlite3
import subprocess
import sys
import tempfile
import threading
import time

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
from kills_writer import Replicas, Writer, link_list, LISTS

WRITERS = 4
# Seconds in which every job ends after the last start. A claim of a lost process lasts 20 seconds, and a job is begun three times at most;
# refreshes step back behind whatever else the machine does.
MOST_WAIT = 600


def free_port():
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


class Process:
    """One replica: always at the same port."""

    def __init__(self, binary, folder, url, number):
        self.binary, self.folder, self.url, self.port = binary, folder, url, free_port()
        self.log = open(os.path.join(folder, f"log-{number}"), "a+")

    def start(self):
        variables = {name: value for name, value in os.environ.items() if not name.startswith(("TAILCAST_", "OTEL_"))}
        variables |= {"TAILCAST_BIND": f"127.0.0.1:{self.port}", "TAILCAST_DATABASE_URL": self.url, "TAILCAST_LOG_FILTER": "warn"}
        self.child = subprocess.Popen([self.binary, "serve"], cwd=self.folder, env=variables, stdout=self.log, stderr=self.log)
        begun = time.monotonic()
        while time.monotonic() - begun < 60:
            try:
                socket.create_connection(("127.0.0.1", self.port), timeout=1).close()
                return time.monotonic() - begun
            except OSError:
                if self.child.poll() is not None:
                    self.log.seek(0)
                    sys.exit(f"the service did not start:\n{self.log.read()[-2000:]}")
                time.sleep(0.005)
        sys.exit("the service did not listen within 60 seconds")

    def kill(self):
        self.child.send_signal(signal.SIGKILL)
        self.child.wait()


def select(url, text):
    """Rows of a query, as tuples of text."""
    if url.startswith("sqlite"):
        with sqlite3.connect(url.removeprefix("sqlite://")) as database:
            return [tuple(str(value) for value in row) for row in database.execute(text)]
    told = subprocess.run(["psql", "-X", "-A", "-t", "-F", "\t", "-c", text, url], check=True, capture_output=True, text=True)
    return [tuple(line.split("\t")) for line in told.stdout.splitlines() if line]


def wait_for_jobs(url):
    """Seconds until no job is live, and how many are if they do not end."""
    begun = time.monotonic()
    while True:
        live = select(url, "SELECT id, kind, network, state, starts FROM jobs WHERE state IN ('waiting', 'running')")
        waited = time.monotonic() - begun
        if not live or waited > MOST_WAIT:
            return waited, live
        time.sleep(0.5)


def faults_of_tables(url):
    """What no answer shows: rows that must never be."""
    checks = {
        "a revision with two issued forecasts": "SELECT network, revision, count(*) FROM network_runs WHERE issued_to IS NOT NULL "
        "AND network IS NOT NULL GROUP BY network, revision HAVING count(*) > 1",
        "two runs of one key": "SELECT label, count(*) FROM runs WHERE label LIKE 'key-%' GROUP BY label HAVING count(*) > 1",
        "a key without its run": "SELECT key FROM idempotency_keys WHERE run_id NOT IN (SELECT id FROM runs)",
        "a backtest whose job did not succeed": "SELECT backtests.id, jobs.state FROM backtests JOIN jobs ON jobs.id = backtests.id "
        "WHERE jobs.state <> 'succeeded'",
        "a backtest's job that succeeded without one": "SELECT id FROM jobs WHERE kind = 'backtest' AND state = 'succeeded' "
        "AND id NOT IN (SELECT id FROM backtests) AND network IN (SELECT name FROM networks)",
        "records of a backtest that has ended": "SELECT job, count(*) FROM backtest_records GROUP BY job",
        "a job begun more often than allowed": "SELECT id, starts FROM jobs WHERE starts > 8",
        "a network that says it is being refreshed": "SELECT name FROM networks WHERE refresh_state = 'refreshing'",
        "a network called current that is not": "SELECT name FROM networks WHERE refresh_state = 'current' AND refreshed <> revision",
        "a latest forecast that is not the newest issued": "SELECT network FROM latest_forecasts WHERE run_id <> (SELECT max(run_id) "
        "FROM network_runs WHERE network_runs.network = latest_forecasts.network AND issued_to IS NOT NULL)",
    }
    return [f"{what}: {row}" for what, text in checks.items() for row in select(url, text)[:5]]


def main():
    options = argparse.ArgumentParser()
    options.add_argument("binary")
    options.add_argument("--kills", type=int, default=200)
    options.add_argument("--seed", type=int, default=1)
    options.add_argument("--postgres", action="store_true")
    options.add_argument("--replicas", type=int, default=3)
    options.add_argument("--keep", help="leaves logs and database here")
    asked = options.parse_args()
    binary = os.path.abspath(asked.binary)
    folder = asked.keep or tempfile.mkdtemp()
    os.makedirs(folder, exist_ok=True)
    server = os.path.join(os.path.dirname(os.path.abspath(__file__)), "postgres")
    pg_folder = tempfile.mktemp(prefix="kills-pg-") if asked.postgres else None
    try:
        if pg_folder:
            url = subprocess.run([server, "start", pg_folder], check=True, stdout=subprocess.PIPE, text=True).stdout.strip()
        else:
            url = f"sqlite://{os.path.abspath(folder)}/kills.db"
        return run(asked, binary, folder, url)
    finally:
        if pg_folder:
            subprocess.run([server, "stop", pg_folder])
        if not asked.keep:
            shutil.rmtree(folder, ignore_errors=True)


def run(asked, binary, folder, url):
    chance = random.Random(asked.seed)
    count = asked.replicas if asked.postgres else 1
    processes = [Process(binary, folder, url, number) for number in range(count)]
    try:
        starts = [process.start() for process in processes]
        replicas = Replicas([process.port for process in processes])
        writers = [Writer(replicas, number, asked.seed) for number in range(WRITERS)]
        threads = [threading.Thread(target=writer.work) for writer in writers]
        begun = time.monotonic()
        for thread in threads:
            thread.start()
        for _ in range(asked.kills):
            time.sleep(chance.uniform(0.1, 1.1))
            process = chance.choice(processes)
            process.kill()
            starts.append(process.start())
        for writer in writers:
            writer.stop()
        for thread in threads:
            thread.join()
        took = time.monotonic() - begun
        waited, stuck = wait_for_jobs(url)
        faults = [f"{fault}" for writer in writers for fault in writer.faults]
        faults += [f"a job that does not end: {job}" for job in stuck]
        lists = {links: writers[0].put_list_in_peace(f"calm-{links}", links) for links in LISTS}
        told = {}
        for writer in writers:
            faults += writer.compare(lists)
            for name, number in writer.told.items():
                told[name] = told.get(name, 0) + number
        faults += faults_of_tables(url)
        faults += faults_of_trail(url, writers)
        report(asked, count, url, told, (took, waited, starts), faults)
        return 1 if faults else 0
    finally:
        for process in processes:
            process.child.kill()
            process.child.wait()


def faults_of_trail(url, writers):
    lines = {}
    for (request,) in select(url, "SELECT request_id FROM audit WHERE request_id IS NOT NULL"):
        lines[request] = lines.get(request, 0) + 1
    wrong = [
        (lines.get(request, 0), what, request) for writer in writers for request, what in writer.trail if lines.get(request, 0) != 1
    ]
    return [f"an acknowledged write with {number} lines in the trail: {what} ({request})" for number, what, request in wrong[:10]]


def report(asked, count, url, told, times, faults):
    took, waited, starts = times
    home = f"PostgreSQL, {count} processes" if asked.postgres else "SQLite, one process"
    print(f"{home}: {asked.kills} kills in {took:.0f} s, seed {asked.seed}, {WRITERS} writers; slowest start {max(starts):.1f} s")
    for name in sorted(told):
        print(f"  {name:54} {told[name]:7}")
    states = select(url, "SELECT kind, state, count(*) FROM jobs GROUP BY kind, state ORDER BY kind, state")
    for kind, state, number in states:
        print(f"  jobs kept: {kind + ', ' + state:43} {number:>7}")
    stands = select(url, "SELECT coalesce(refresh_state, 'no plan or evidence'), count(*) FROM networks GROUP BY refresh_state ORDER BY 1")
    for state, number in stands:
        print(f"  networks whose latest forecast is: {state:19} {number:>7}")
    issued = select(url, "SELECT count(*) FROM network_runs WHERE issued_to IS NOT NULL")[0][0]
    print(f"  {'forecasts issued by refreshes':54} {issued:>7}")
    print(f"  the last job ended {waited:.0f} s after the last start")
    print(f"faults: {len(faults)}")
    for fault in faults[:40]:
        print(f"  {fault}")


if __name__ == "__main__":
    sys.exit(main())
