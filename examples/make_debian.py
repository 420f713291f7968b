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


def watched(suite, fewest, most):
    """[{name, degree}, ...] of the packages of a suite with so many dependents, the largest first."""
    with open(HERE / "data/debian/hubs.csv", newline="") as file:
        degrees = {row["package"]: int(row[suite]) for row in csv.DictReader(file) if row[suite]}
    found = sorted(((d, n) for n, d in degrees.items() if fewest <= d <= most), key=lambda pair: (-pair[0], pair[1]))
    return [{"name": name, "degree": degree} for degree, name in found]


def questions(suite, limit_by, most):
    """What a mirror's planner would ask: packages with 1,000 dependents are rebuilt in a queue of their own."""
    return {
        "limits": [{"name": "rebuild queues", "threshold": 1000, "max_nodes": most, "by": limit_by, "risk": 0.05}],
        "bands": [{"from": 0, "to": 99, "per_node": 0.02}, {"from": 100, "to": 999, "per_node": 1.0},
                  {"from": 1000, "per_node": 20.0, "per_link": 0.01}],
        "cost_unit": "build hours a week",
        "watch": {"nodes": watched(suite, 600, 999), "classes": [{"from": 500, "to": 999}], "thresholds": [1000]},
        "next_hubs": 5,
        "scenarios": [
            {"name": "a fifth more packages", "arrivals_factor": 1.2},
            {"name": "large packages split at 1,000", "degree_cap": {"links": 1000, "refused": "spread"}},
            {"name": "dependencies spread evenly", "preferential_share": 0.5},
        ],
    }


def write(name, label, evidence, dates, arrivals=None, tables=(), asked=None):
    fields = [f'"label": {json.dumps(label)}', '"degree_kind": "received"']
    fields.append('"snapshots": [\n' + ",\n".join(snapshot_text(s) for s in evidence) + " ]")
    if tables:
        fields.append('"transitions": [\n' + ",\n".join(table_text(t) for t in tables) + " ]")
    if arrivals is not None:
        fields.append(f'"arrivals": {{ "per_day": {arrivals} }}')
    fields += [f'"thresholds": {json.dumps(THRESHOLDS)}', f'"dates": {json.dumps(dates)}']
    fields += [f"{json.dumps(field)}: {json.dumps(value)}" for field, value in (asked or {}).items()]
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
# The same questions where the outcome is known, and from the newest suite on.
write("debian-planning.json", "Debian packages, planned from trixie", [suites["trixie"]],
      ["2026-10-30", "2027-08-09"], tables=transitions()[:2], asked=questions("trixie", "2027-08-09", 16))
write("debian-next-hubs.json", "Debian packages, from the suites up to October 2026", [suites["sid"]],
      ["2027-10-30", "2028-10-30"], tables=transitions(), asked=questions("sid", "2028-10-30", 22))
