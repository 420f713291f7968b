#!/usr/bin/env python3
"""Holds the service against its own OpenAPI document with schemathesis (PyPI), all checks on.

usage: conformance.py BINARY [--cases 1000] [--tool schemathesis] [--seed 1] [--keep FOLDER]

A service with access keys and a few networks of an invented kind is started on loopback; schemathesis draws valid and invalid
requests for every operation from the document, most of them about what is there. A process of its own puts back what they delete.
Then: requests and statuses by route, as the service's own metrics count them, and every finding. Ends with 1 on a finding, a status of
500 or above other than 503, or a panic in the log. Two kinds of findings are told and not counted: a request that the schemas allow
and a rule refuses that no schema can tell (what excludes what, orders of dates, sums; schemathesis ST202), and a link list taken on
as a job whose text turns out to be none (ST201).
"""

import argparse
import collections
import http.client
import json
import os
import pathlib
import re
import socket
import subprocess
import sys
import tempfile
import threading
import time

NETWORKS = ["heronsgate", "heronsgate-quay", "heronsgate.mill"]
DATES = ["2026-04-01", "2026-05-01", "2026-06-01"]
COUNTS = [
    [[0, 5000], [1, 900], [2, 300], [7, 40], [25, 6]],
    [[0, 5400], [1, 1100], [2, 390], [7, 52], [25, 7], [40, 1]],
    [[0, 5800], [1, 1290], [2, 480], [7, 66], [25, 8], [40, 3]],
]
PLAN = {"arrivals": {"per_day": 20}, "thresholds": [5, 25], "horizon": {"ends_after": "P6M", "every": "P1M"}}
LINKS = "time,source,target\n2026-06-01T10:00:00Z,ida,tom\n2026-06-01T10:05:00Z,eve,ida\n2026-06-02T08:00:00Z,ida,eve\n"
# Where nobody listens: what is sent there fails, as it may at any time.
NOWHERE = "127.0.0.1:9"

HOOKS = '''
import schemathesis

@schemathesis.serializer("application/x-ndjson")
def lines(ctx, value):
    return value if isinstance(value, bytes) else str(value).encode(errors="surrogatepass")
'''


class Service:
    def __init__(self, binary, folder):
        self.binary, self.folder = binary, folder
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port = probe.getsockname()[1]
        kept = {name: value for name, value in os.environ.items() if not name.startswith(("TAILCAST_", "OTEL_"))}
        self.variables = kept | {
            "TAILCAST_BIND": f"127.0.0.1:{self.port}",
            "TAILCAST_ACCESS_KEYS": "required",
            "TAILCAST_LOG_FILTER": "warn",
            "TAILCAST_NOTICES_DESTINATIONS": f"http://{NOWHERE}/",
            "TAILCAST_NOTICES_SECRET": "aGVyb25zZ2F0ZS1oZXJvbnNnYXRlLWhlcm9uc2dhdGU=",
            "TAILCAST_SOURCES_DATABASES": f"links=postgres://counter@{NOWHERE}/links",
        }
        made = subprocess.run(
            [binary, "keys", "create", "conformance", "--scope", "admin"],
            cwd=folder, env=self.variables, capture_output=True, text=True, check=True,
        )
        self.key = re.search(r"\b\w+_[0-9a-f]{16}_[0-9a-f]{64}\b", made.stdout)[0]

    def __enter__(self):
        self.log = open(self.folder / "service.log", "w+")
        self.child = subprocess.Popen(
            [self.binary, "serve"], cwd=self.folder, env=self.variables, stdout=self.log, stderr=self.log
        )
        for _ in range(200):
            try:
                if self.send("GET", "/readyz")[0] == 200:
                    return self
            except OSError:
                time.sleep(0.1)
        raise SystemExit("the service did not start")

    def __exit__(self, *_):
        self.child.terminate()
        self.child.wait(60)

    def send(self, method, path, body=None, **headers):
        connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=60)
        headers = {"authorization": f"Bearer {self.key}", "content-type": "application/json", **headers}
        try:
            connection.request(method, path, body if isinstance(body, (str, type(None))) else json.dumps(body), headers)
            answer = connection.getresponse()
            return answer.status, answer.read().decode()
        finally:
            connection.close()

    def furnish(self, name):
        """A network with all it may have."""
        at = f"/v1/networks/{name}"
        self.send("PUT", at, {"degree_kind": "received", "description": "Followers on Heronsgate", "forecast_plan": PLAN})
        for date, counts in zip(DATES, COUNTS):
            self.send("PUT", f"{at}/snapshots/{date}", {"degree_counts": counts})
        self.send("PUT", f"{at}/limits/shards", {"threshold": 25, "max_nodes": 20, "by": "2026-11-01", "risk": 0.1})
        self.send("PUT", f"{at}/scenarios/campaign", {"arrivals_factor": 1.4})
        self.send("PUT", f"{at}/notices/desk", {"url": f"http://{NOWHERE}/desk", "on": ["limit_risk"]})
        query = "SELECT degree, count(*) AS nodes FROM counted GROUP BY degree"
        self.send("PUT", f"{at}/source", {"database": "links", "query": query, "every": "P1D"})

    def tend(self, done):
        while not done.wait(2):
            for name in NETWORKS:
                if self.send("GET", f"/v1/networks/{name}/limits/shards")[0] == 404:
                    self.furnish(name)

    def runs(self):
        """Ids of what belongs to no network."""
        counts = {"as_of": "2026-06-01", "degree_counts": COUNTS[2]}
        fit = {"degree_kind": "received", "snapshots": [counts]}
        asked = fit | {"arrivals": {"per_day": 20}, "thresholds": [25], "dates": ["2026-12-01"]}
        made = [self.send("POST", "/v1/fits", fit), self.send("POST", "/v1/forecasts", asked)]
        self.send("PUT", f"/v1/networks/{NETWORKS[0]}-list", {"degree_kind": "received"})
        made.append(self.send("PUT", f"/v1/networks/{NETWORKS[0]}-list/links", LINKS, **{"content-type": "text/csv"}))
        made.append(self.send("POST", f"/v1/networks/{NETWORKS[0]}/backtests", {"thresholds": [5], "ahead": 1}))
        return [json.loads(text)["id"] for status, text in made if status < 300 and "id" in json.loads(text)]


def settings(folder, ids):
    (folder / "hooks.py").write_text(HOOKS)
    choices = {
        "path.name": NETWORKS, "path.id": ids, "path.limit": ["shards"], "path.scenario": ["campaign"], "path.notice": ["desk"],
        "path.as_of": DATES, "path.from": DATES[:2], "path.to": DATES[1:], "query.network": NETWORKS,
    }
    lines = ['hooks = "hooks.py"', "max-stream-events = 1", "request-timeout = 40"]
    # 412 and 422 say that what is stored or configured does not allow what was asked well.
    taken = ["2xx", "3xx", "401", "403", "404", "409", "412", "422", "429", "5xx"]
    lines += ["[checks.positive_data_acceptance]", f"expected-statuses = {json.dumps(taken)}"]
    lines += ["[checks]", "max_response_time = 40"]
    for name, values in choices.items():
        lines += [f'[dictionaries."{name}"]', f"values = {json.dumps(values)}"]
    lines.append("[parameters]")
    lines += [f'"{name}" = {{ dictionary = "{name}", probability = 0.8 }}' for name in choices]
    (folder / "schemathesis.toml").write_text("\n".join(lines) + "\n")


def counted(metrics):
    """Requests by route and method, and their statuses."""
    table = collections.defaultdict(collections.Counter)
    for line in metrics.splitlines():
        found = re.match(r"tailcast_http_requests_total\{(.*)\} (\d+)$", line)
        if found:
            labels = dict(re.findall(r'(\w+)="([^"]*)"', found[1]))
            table[labels["route"], labels["method"]][labels["status"]] += int(found[2])
    return table


def findings(text):
    """(operation, code, what the service said) of each finding."""
    for block in re.split(r"\n(?=_{3,} )", text)[1:]:
        operation = block.splitlines()[0].strip("_ ")
        for finding in re.split(r"\n(?=- ST\d)", block)[1:]:
            said = re.findall(r'"detail":\s*"((?:[^"\\]|\\.)*)"', finding)
            said = [words for words in said if "parts of it are wrong" not in words]
            yield operation, finding[2:7], said[0] if said else finding.splitlines()[0]


def is_beyond_schemas(operation, code):
    return code == "ST202" or (code == "ST201" and operation == "PUT /v1/networks/{name}/links")


def main():
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("binary")
    parser.add_argument("--cases", type=int, default=1000, help="drawn for each operation, beside the examples and the edges of each field")
    parser.add_argument("--tool", default="schemathesis")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep")
    given = parser.parse_args()
    folder = pathlib.Path(given.keep or tempfile.mkdtemp())
    folder.mkdir(parents=True, exist_ok=True)
    with Service(os.path.abspath(given.binary), folder) as service:
        for name in NETWORKS:
            service.furnish(name)
        settings(folder, service.runs())
        done = threading.Event()
        tender = threading.Thread(target=service.tend, args=(done,))
        tender.start()
        begun = time.monotonic()
        with open(folder / "findings.txt", "w") as told:
            outcome = subprocess.run(
                [given.tool, "run", f"http://127.0.0.1:{service.port}/openapi.json", "--workers", "2", "--no-color",
                 "--phases", "examples,coverage,fuzzing", "--max-examples", str(given.cases), "--checks", "all",
                 "--continue-on-failure", "--suppress-health-check", "all", "--generation-database", "none", "--warnings", "off",
                 "--seed", str(given.seed), "-H", f"Authorization: Bearer {service.key}"],
                cwd=folder, stdout=told, stderr=told,
            ).returncode
        took = time.monotonic() - begun
        done.set()
        tender.join()
        table = counted(service.send("GET", "/metrics")[1])
        alive = service.child.poll() is None
    for (route, method), statuses in sorted(table.items()):
        told = " ".join(f"{status}:{count}" for status, count in sorted(statuses.items()))
        print(f"{method:7} {route:50} {sum(statuses.values()):7}  {told}")
    total = collections.Counter()
    for statuses in table.values():
        total.update(statuses)
    broken = sum(count for status, count in total.items() if status >= "500" and status != "503")
    panics = (folder / "service.log").read_text().count("panicked")
    found = sorted(set(findings((folder / "findings.txt").read_text())))
    counted_ones = [finding for finding in found if not is_beyond_schemas(*finding[:2])]
    for operation, code, said in found:
        print(f"{'beyond schemas' if is_beyond_schemas(operation, code) else 'FINDING'}: {code} {operation}: {said[:160]}")
    # 0 and 1: it ran to its end, without or with findings.
    sound = outcome in (0, 1) and (found or outcome == 0) and not counted_ones and broken == 0 and panics == 0 and alive
    print(f"{sum(total.values())} requests in {took:.0f} s with seed {given.seed}: {len(counted_ones)} findings, {broken} answers of 5xx but "
          f"503, {total['503']} of 503, {panics} panics; the tool's own words are in {folder / 'findings.txt'}")
    sys.exit(0 if sound else 1)


if __name__ == "__main__":
    main()
