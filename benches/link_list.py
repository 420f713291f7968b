"""Counting a link list beside DuckDB: time and peak memory, as ratios.

usage: python3 benches/link_list.py [--links N] [--rounds N] [--cores N]      (needs duckdb; cargo build --release first)

The list: about N/10 accounts, N links in order of time. Each link comes from a newcomer with probability 0.1 and lands in
proportion to links received with probability 0.7, on any account alike otherwise.

`tailcast tally` makes degree counts, or with them every attachment statistic in the same pass; DuckDB makes degree counts alone, on as many threads
as there are cores, to which all are held: of the targets, and of all accounts, those that are only sources as degree 0, by two queries of which either may be
the quicker. Runs take turns. DuckDB's time is that of the query without starting Python or connecting; tailcast's is that
of the whole process. Memory is the largest that a process had.
"""

import argparse
import array
import json
import os
import random
import statistics
import subprocess
import sys
import tempfile
import time

PREFERENTIAL, NEWCOMERS, SEED = 0.7, 0.1, 20260601
TAILCAST = os.path.join(os.path.dirname(__file__), "..", "target", "release", "tailcast")

TARGETS = "(SELECT target, count(*) AS degree FROM read_csv('{list}') GROUP BY target)"
QUERIES = {
    "DuckDB, targets alone": f"SELECT degree, count(*) FROM {TARGETS} GROUP BY degree",
    "DuckDB, all, by unnest": "SELECT degree, count(*) FROM (SELECT name, sum(gained) AS degree FROM (SELECT"
    " unnest([source, target]) AS name, unnest([0, 1]) AS gained FROM read_csv('{list}')) GROUP BY name) GROUP BY degree",
    "DuckDB, all, by anti join": f"WITH gained AS MATERIALIZED {TARGETS} SELECT degree, count(*) FROM gained GROUP BY degree"
    " UNION ALL SELECT 0, count(*) FROM (SELECT DISTINCT source FROM read_csv('{list}')) AS sources"
    " ANTI JOIN gained ON source = target",
}
CHILD = """
import duckdb, json, sys, time
connection = duckdb.connect()
connection.execute(f"SET threads = {sys.argv[2]}; SET enable_progress_bar = false")
start = time.perf_counter()
rows = connection.execute(sys.argv[1]).fetchall()
took = time.perf_counter() - start
json.dump({"seconds": took, "version": duckdb.__version__, "rows": sorted([int(k), int(n)] for k, n in rows)}, sys.stdout)
"""
FORMS = {
    "tailcast, degree counts": [],
    "tailcast, evidence": ["--format", "json"],
    "tailcast, evidence by the month": ["--format", "json", "--every", "P1M"],
}
REFERENCE = "tailcast, evidence"


def write_list(path, links):
    """Writes the list; returns the accounts and the bytes of their identifiers."""
    draw = random.Random(SEED).random
    targets, accounts, moment = array.array("I"), 1, 1640995200.0
    second, pairs, day, date = None, set(), None, ""
    with open(path, "w", encoding="ascii") as out:
        out.write("time,source,target\n")
        while len(targets) < links:
            moment += 20 * draw()
            if int(moment) != second:
                second = int(moment)
                pairs.clear()
            source = accounts if accounts < 2 or draw() < NEWCOMERS else int(draw() * accounts)
            proportional = targets and draw() < PREFERENTIAL
            target = targets[int(draw() * len(targets))] if proportional else int(draw() * accounts)
            if source == target or (source, target) in pairs:
                continue
            pairs.add((source, target))
            accounts = max(accounts, source + 1)
            targets.append(target)
            if second // 86400 != day:
                day = second // 86400
                date = time.strftime("%Y-%m-%d", time.gmtime(second))
            hour, rest = divmod(second % 86400, 3600)
            out.write(f"{date}T{hour:02}:{rest // 60:02}:{rest % 60:02}Z,acct-{source:08},acct-{target:08}\n")
    return accounts, accounts * len("acct-00000000")


def run(command):
    """Runs a command; its seconds, peak bytes and output."""
    with tempfile.TemporaryFile() as out:
        start = time.perf_counter()
        child = subprocess.Popen(command, stdout=out)
        _, status, usage = os.wait4(child.pid, 0)
        took = time.perf_counter() - start
        if status != 0:
            sys.exit(f"{command[0]} failed")
        out.seek(0)
        return took, usage.ru_maxrss * 1024, out.read().decode()


def degree_counts(text):
    if text.startswith("{"):
        return json.loads(text)["snapshots"][-1]["degree_counts"]
    return [[int(field) for field in line.split(",")] for line in text.split()[1:]]


def main():
    options = argparse.ArgumentParser()
    options.add_argument("--links", type=int, default=10_000_000)
    options.add_argument("--rounds", type=int, default=7)
    options.add_argument("--cores", type=int, default=2)
    options = options.parse_args()
    os.sched_setaffinity(0, sorted(os.sched_getaffinity(0))[: options.cores])
    seconds, peaks, counts, version = {}, {}, {}, ""
    with tempfile.TemporaryDirectory() as folder:
        path = os.path.join(folder, "links.csv")
        accounts, identifier_bytes = write_list(path, options.links)
        size = os.path.getsize(path)
        for _ in range(options.rounds):
            for name, arguments in FORMS.items():
                took, peak, text = run([TAILCAST, "tally", path, *arguments])
                seconds.setdefault(name, []).append(took)
                peaks[name] = max(peak, peaks.get(name, 0))
                counts[name] = degree_counts(text)
            seconds.setdefault("wc -l", []).append(run(["wc", "-l", path])[0])
            for name, query in QUERIES.items():
                _, peak, text = run([sys.executable, "-c", CHILD, query.format(list=path), str(options.cores)])
                answer = json.loads(text)
                version = answer["version"]
                seconds.setdefault(name, []).append(answer["seconds"])
                peaks[name] = max(peak, peaks.get(name, 0))
                counts[name] = answer["rows"]
    whole = counts[REFERENCE]
    assert sum(nodes for _, nodes in whole) == accounts and sum(k * n for k, n in whole) == options.links
    for name, found in counts.items():
        expected = [pair for pair in whole if pair[0] > 0] if "targets" in name else whole
        assert found == expected, f"{name} counts otherwise"

    print(f"{options.links} links, {accounts} accounts, {size / 1e6:.0f} MB of CSV; {options.rounds} rounds; DuckDB {version}, "
          f"{options.cores} cores")
    print("All degree counts agree.\n")
    print(f"{'':34}{'median':>9}   {'to DuckDB: targets alone':>24}{'all accounts (quicker query)':>30}")
    everyone = [name for name in QUERIES if "all" in name]
    quickest = min(everyone, key=lambda name: statistics.median(seconds[name]))
    for name in [*FORMS, *QUERIES, "wc -l"]:
        line = f"{name:34}{statistics.median(seconds[name]):7.2f} s"
        if name in FORMS:
            for other in ("DuckDB, targets alone", quickest):
                ratio = statistics.median(a / b for a, b in zip(seconds[name], seconds[other]))
                line += f"{ratio:24.2f}"
        print(line)
    print()
    for name, extra in (("tailcast, evidence", 0), ("tailcast, evidence by the month", 8)):
        own = identifier_bytes + accounts * (8 + 4 + extra)
        print(
            f"{name}: peak {peaks[name] / 1e6:.0f} MB, {peaks[name] / own:.2f} times the accounts' own {own / 1e6:.1f} MB\n"
            f"  (identifiers {identifier_bytes / 1e6:.1f} MB, hash slot 8 bytes, degree 4 bytes"
            + (f", degrees at the last two boundaries {extra} bytes" if extra else "")
            + ")"
        )
    for name in QUERIES:
        print(f"{name}: peak {peaks[name] / 1e6:.0f} MB, {peaks[name] / peaks[REFERENCE]:.1f} times tailcast's")


if __name__ == "__main__":
    main()
