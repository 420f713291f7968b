#!/usr/bin/env python3
"""Cuts one of two processes off from their PostgreSQL and lets it back, while it is written to, read and probed.

usage: cut.py BINARY [--seconds 30]

Needs root, ip, unshare, nsenter and PostgreSQL. One process lives in a network namespace of its own, joined by a pair of virtual
interfaces to that of the database and the other process. The link is taken down, so that packets vanish without a word, and up again.
Standard library; ends with 1 when anything was lost, doubled or stuck, or kept somebody waiting for too long.
"""

import argparse
import ctypes
import json
import os
import re
import subprocess
import sys
import tempfile
import threading
import time

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
from kills_writer import DATES, GROWN, Replicas

NEW_NETWORK = 0x40000000
# What README and config promise: a probe, and any other request.
MOST_PROBE, MOST_REQUEST = 6, 30


def sh(*words, **kind):
    return subprocess.run(words, check=True, stdout=subprocess.PIPE, text=True, **kind).stdout.strip()


def serve(binary, folder, name, url, inside=()):
    variables = {key: value for key, value in os.environ.items() if not key.startswith(("TAILCAST_", "OTEL_"))}
    variables |= {"TAILCAST_BIND": "127.0.0.1:0", "TAILCAST_DATABASE_URL": url, "TAILCAST_LOG_FILTER": "warn,tailcast::app=info"}
    log = open(os.path.join(folder, name), "w+")
    child = subprocess.Popen([*inside, binary, "serve"], cwd=folder, env=variables, stderr=log)
    for _ in range(1200):
        found = re.search(r"serving address=127\.0\.0\.1:(\d+)", open(log.name).read())
        if found:
            return child, Replicas([int(found[1])])
        if child.poll() is not None:
            break
        time.sleep(0.05)
    sys.exit(f"{name} did not start: {open(log.name).read()[-1000:]}")


class Far:
    """Threads in the namespace that is cut off; each notes when it asked, how long it took and what came."""

    def __init__(self, namespace, replicas):
        self.namespace, self.replicas, self.stopped = namespace, replicas, threading.Event()
        self.seen, self.kept, self.asked = [], {}, {}
        self.threads = []

    def loop(self, what, step, pause):
        def work():
            with open(self.namespace) as namespace:
                if ctypes.CDLL(None, use_errno=True).setns(namespace.fileno(), NEW_NETWORK):
                    raise OSError(ctypes.get_errno(), "setns")
            count = 0
            while not self.stopped.is_set():
                begun = time.monotonic()
                answer = step(count)
                code = None
                if answer and answer[0] >= 400:
                    code = json.loads(answer[2]).get("code")
                self.seen.append((what, begun, time.monotonic() - begun, answer and answer[0], code))
                count += 1
                time.sleep(pause)

        self.threads.append(threading.Thread(target=work))
        self.threads[-1].start()

    def get(self, path):
        return lambda _: self.replicas.send("GET", path)

    def fit(self, count):
        label = f"key-{threading.get_ident()}-{count}"
        pairs = [[degree, nodes] for degree, nodes in sorted(GROWN[0].items())]
        body = {"degree_kind": "received", "snapshots": [{"as_of": DATES[0], "degree_counts": pairs}], "links_per_arrival": 3.0}
        body |= {"label": label, "fixed": {"preferential_share": 0.7}}
        self.asked[label] = body
        answer = self.replicas.send("POST", "/v1/fits", body, {"idempotency-key": label})
        if answer and answer[0] == 201:
            self.kept[label] = (answer[1]["location"], answer[2])
        return answer

    def limit(self, count):
        # A few: each is answered anew with every forecast, which takes seconds.
        path = f"/v1/networks/heronsgate/limits/shards-{count % 3}"
        answer = self.replicas.send("PUT", path, {"threshold": 10, "max_nodes": 1000 + count, "by": "2026-11-01", "risk": 0.1})
        if answer and answer[0] < 300:
            self.kept[path] = 1000 + count
        else:
            self.kept.pop(path, None)
        return answer

    def stop(self):
        self.stopped.set()
        for thread in self.threads:
            thread.join()


def ended(near, most=120):
    begun = time.monotonic()
    while True:
        jobs = json.loads(near.send("GET", "/v1/jobs?limit=200")[2])["items"]
        live = [job for job in jobs if job["state"] in ("waiting", "running")]
        if not live or time.monotonic() - begun > most:
            return time.monotonic() - begun, live, jobs
        time.sleep(0.2)


def main():
    options = argparse.ArgumentParser()
    options.add_argument("binary")
    options.add_argument("--seconds", type=float, default=30)
    asked = options.parse_args()
    if ctypes.CDLL(None, use_errno=True).unshare(NEW_NETWORK):
        sys.exit("a network namespace cannot be made here: run it as root")
    sh("ip", "link", "set", "lo", "up")
    holder = subprocess.Popen(["unshare", "--net", "sleep", "600"])
    folder, pg_folder = tempfile.mkdtemp(), tempfile.mktemp(prefix="cut-pg-")
    server = os.path.join(os.path.dirname(os.path.abspath(__file__)), "postgres")
    children = [holder]
    try:
        while os.readlink(f"/proc/{holder.pid}/ns/net") == os.readlink("/proc/self/ns/net"):
            time.sleep(0.01)
        inside = ("nsenter", f"--net=/proc/{holder.pid}/ns/net")
        sh("ip", "link", "add", "near", "type", "veth", "peer", "name", "far", "netns", str(holder.pid))
        sh("ip", "addr", "add", "10.79.0.1/24", "dev", "near")
        sh("ip", "link", "set", "near", "up")
        for words in (("link", "set", "lo", "up"), ("addr", "add", "10.79.0.2/24", "dev", "far"), ("link", "set", "far", "up")):
            sh(*inside, "ip", *words)
        url = sh(server, "start", pg_folder, "10.79.0.1")
        child, near = serve(os.path.abspath(asked.binary), folder, "near.log", url)
        children.append(child)
        child, far = serve(os.path.abspath(asked.binary), folder, "far.log", url, inside)
        children.append(child)
        return run(asked, near, Far(f"/proc/{holder.pid}/ns/net", far))
    finally:
        for child in children:
            child.kill()
            child.wait()
        if os.path.exists(pg_folder):
            subprocess.run([server, "stop", pg_folder])


def run(asked, near, far):
    network = "/v1/networks/heronsgate"
    plan = {"thresholds": [5, 10], "horizon": {"ends_after": "P2M", "every": "P1M"}, "arrivals": {"per_day": 4.0}}
    near.send("PUT", network, {"degree_kind": "received", "forecast_plan": plan})
    for date, table in zip(DATES, GROWN):
        near.send("PUT", f"{network}/snapshots/{date}", {"degree_counts": [[degree, nodes] for degree, nodes in sorted(table.items())]})
    ended(near)
    for what, step, pause in (
        ("readyz", far.get("/readyz"), 0.1), ("livez", far.get("/livez"), 0.1), ("latest", far.get(f"{network}/forecasts/latest"), 0.05),
        ("network", far.get(network), 0.1), ("fit", far.fit, 0.05), ("fit", far.fit, 0.05), ("limit", far.limit, 0.2),
    ):
        far.loop(what, step, pause)
    time.sleep(3)
    cut = time.monotonic()
    sh("ip", "link", "set", "near", "down")
    time.sleep(asked.seconds)
    sh("ip", "link", "set", "near", "up")
    mended = time.monotonic()
    faults = []
    while True:
        well = [begun + took for what, begun, took, status, _ in list(far.seen) if what == "readyz" and status == 200 and begun > mended]
        if well or time.monotonic() - mended > 60:
            break
        time.sleep(0.1)
    time.sleep(3)
    before_stop = time.monotonic()
    far.stop()
    waited, live, jobs = ended(near)
    ill = [begun + took for what, begun, took, status, code in far.seen if what == "readyz" and status == 503 and begun + took > cut]
    codes = sorted({str(code) for what, begun, _, status, code in far.seen if what == "readyz" and status == 503})
    print(f"link down for {mended - cut:.1f} s")
    print(f"  /readyz 503 ({', '.join(codes)}) after {min(ill, default=float('inf')) - cut:.1f} s; 200 again {min(well, default=float('inf')) - mended:.1f} s after the link was up")
    for what in ("readyz", "livez", "latest", "network", "fit", "limit"):
        mine = [(took, status, code) for name, begun, took, status, code in far.seen if name == what and begun + took > cut and begun < mended]
        told = {}
        for _, status, code in mine:
            key = f"{status} {code}" if code else str(status)
            told[key] = told.get(key, 0) + 1
        slowest = max((took for took, _, _ in mine), default=0)
        print(f"  {what:8} while it was down: slowest {slowest:5.1f} s; " + ", ".join(f"{number} × {key}" for key, number in sorted(told.items())))
        if slowest > (MOST_PROBE if what in ("readyz", "livez") else MOST_REQUEST):
            faults.append(f"{what} took {slowest:.1f} s")
        if any(status is None or status >= 500 and status != 503 for _, status, _ in mine):
            faults.append(f"{what}: {told}")
        late = [status for name, begun, _, status, _ in far.seen if name == what and begun > before_stop - 2]
        if not late or any(status is None or status >= 400 for status in late):
            faults.append(f"{what} is not well two seconds after recovery: {late}")
    if not ill or min(ill) - cut > MOST_PROBE:
        faults.append("/readyz did not tell in time")
    # Until connections that say nothing have been waited for, all of them seem to be at work.
    if "store_unavailable" not in codes or not set(codes) <= {"store_busy", "store_unavailable"}:
        faults.append(f"/readyz told {codes}")
    if not well:
        faults.append("/readyz did not come back")
    if any(status != 200 for what, _, _, status, _ in far.seen if what == "livez"):
        faults.append("/livez was not 200 throughout")
    faults += [f"a job that does not end: {job}" for job in live]
    # Only what nobody was in doubt about is compared; a key in doubt leads to one run.
    for key, kept in list(far.kept.items()):
        if key.startswith("/v1"):
            found = json.loads(near.send("GET", key)[2]).get("max_nodes")
            if found != kept:
                faults.append(f"{key}: {found} where {kept} was acknowledged")
        elif near.send("GET", kept[0])[2] != kept[1]:
            faults.append(f"{key}: not as acknowledged")
    doubtful = [label for label in far.asked if label not in far.kept]
    for label in doubtful:
        near.send("POST", "/v1/fits", far.asked[label], {"idempotency-key": label})
        if len(json.loads(near.send("GET", f"/v1/fits?label={label}")[2])["items"]) != 1:
            faults.append(f"{label}: not one run")
    print(f"  {len(far.kept)} acknowledged writes there, {len(doubtful)} keys without an answer lead to one run each when asked again")
    states = {}
    for job in jobs:
        states[f"{job['kind']} {job['state']}"] = states.get(f"{job['kind']} {job['state']}", 0) + 1
    print(f"  jobs: {', '.join(f'{number} {state}' for state, number in sorted(states.items()))}; the last ended {waited:.1f} s after the writes stopped")
    print(f"faults: {len(faults)}")
    for fault in faults[:20]:
        print(f"  {fault[:400]}")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
