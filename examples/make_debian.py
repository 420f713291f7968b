#!/usr/bin/env python3
"""Write the Debian request bodies, debian-*.json, from data/debian.

usage: make_debian.py
"""
import csv
import datetime
import json
import pathlib

HERE = pathlib.Path(__file__).parent
THRESHOLDS = [5, 10, 20, 50, 100, 200, 500, 1000, 2000]


def snapshots():
    """{suite: (date, [[degree, nodes], ...])}, oldest first."""
    found = {}
    with open(HERE / "data/debian/degree_counts.csv", newline="") as file:
        for row in csv.DictReader(file):
            _, counts = found.setdefault(row["suite"], (row["as_of"], []))
            counts.append([int(row["degree"]), int(row["nodes"])])
    return found


def transitions():
    """[(from, to, [[before, after, nodes], ...]), ...], oldest first."""
    found = {}
    with open(HERE / "data/debian/transitions.csv", newline="") as file:
        for row in csv.DictReader(file):
            degree = [int(row[c]) if row[c] else None for c in ("degree_before", "degree_after")]
            found.setdefault((row["from"], row["to"]), []).append(degree + [int(row["nodes"])])
    return [(start, end, rows) for (start, end), rows in found.items()]


def net_growth_per_day(before, after):
    (start, old), (end, new) = before, after
    days = (datetime.date.fromisoformat(end) - datetime.date.fromisoformat(start)).days
    return round((sum(n for _, n in new) - sum(n for _, n in old)) / days, 3)


def snapshot_text(snapshot, pairs_a_line=12):
    as_of, counts = snapshot
    pairs = [json.dumps(pair) for pair in counts]
    lines = [", ".join(pairs[i : i + pairs_a_line]) for i in range(0, len(pairs), pairs_a_line)]
    return f'    {{ "as_of": "{as_of}", "degree_counts": [\n      ' + ",\n      ".join(lines) + " ] }"


def table_text(table, rows_a_line=10):
    start, end, counts = table
    rows = [json.dumps(row) for row in counts]
    lines = [", ".join(rows[i : i + rows_a_line]) for i in range(0, len(rows), rows_a_line)]
    return f'    {{ "from": "{start}", "to": "{end}", "counts": [\n      ' + ",\n      ".join(lines) + " ] }"


def write(name, label, evidence, dates, arrivals=None, tables=()):
    fields = [f'"label": {json.dumps(label)}', '"degree_kind": "received"']
    fields.append('"snapshots": [\n' + ",\n".join(snapshot_text(s) for s in evidence) + " ]")
    if tables:
        fields.append('"transitions": [\n' + ",\n".join(table_text(t) for t in tables) + " ]")
    if arrivals is not None:
        fields.append(f'"arrivals": {{ "per_day": {arrivals} }}')
    fields += [f'"thresholds": {json.dumps(THRESHOLDS)}', f'"dates": {json.dumps(dates)}']
    text = "{ " + ",\n  ".join(fields) + " }\n"
    json.loads(text)
    (HERE / name).write_text(text)


suites = snapshots()
# One snapshot says nothing about the pace of arrivals, so the two releases before give it. It is net of
# departures, which one snapshot does not show either.
write("debian-one-snapshot.json", "Debian packages, from trixie alone", [suites["trixie"]],
      ["2026-10-30", "2027-08-09"], net_growth_per_day(suites["bullseye"], suites["bookworm"]))
write("debian-two-releases.json", "Debian packages, from bullseye and bookworm",
      [suites["bullseye"], suites["bookworm"]], ["2025-08-09", "2026-10-30"])
write("debian-transitions.json", "Debian packages, from bullseye to bookworm package by package",
      [suites["bookworm"]], ["2025-08-09", "2026-10-30"], tables=transitions()[:1])
