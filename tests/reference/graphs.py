#!/usr/bin/env python3
"""Degree counts of graphs grown by igraph with a known preferential share.

usage: graphs.py [grown] [twosample]      (none: both)

A landing picks its node in proportion to degree + A. With N nodes and K link ends that is the mix of a
preferential share p and a uniform share 1 - p where A = (1 - p) K / (p N) (Pennock et al. 2002); K / N
is links_each for links received and 2 links_each for total degree.
"""
import collections
import csv
import pathlib
import platform
import random
import sys

import igraph

HERE = pathlib.Path(__file__).parent


def degree_counts(kind, links_each, share, nodes, seed):
    random.seed(seed)  # igraph draws from Python's generator
    received = kind == "received"
    appeal = (1 - share) / share * links_each * (1 if received else 2)
    graph = igraph.Graph.Barabasi(
        nodes, links_each, power=1, zero_appeal=appeal, directed=received, outpref=not received,
        implementation="psumtree_multiple")  # links of one newcomer are independent picks
    degrees = graph.indegree() if received else graph.degree()
    assert sum(degrees) == links_each * (nodes - 1) * (1 if received else 2)
    return sorted(collections.Counter(degrees).items())


def write(name, header, rows):
    with open(HERE / name, "w", newline="") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(header.split(","))
        out.writerows(rows)
    print(f"{name}: {len(rows)} rows")


def grown():
    settings = [(kind, m, p) for kind in ("received", "total") for m in (1, 3, 8) for p in (0.1, 0.3, 0.5, 0.7, 0.9)]
    settings += [("total", m, 1.0) for m in (1, 3, 8)]
    rows = []
    for n, (kind, links_each, share) in enumerate(settings):
        seed = 1001 + n
        counts = degree_counts(kind, links_each, share, 200_000, seed)
        rows += [[kind, links_each, share, seed, k, c] for k, c in counts]
    write("grown_graphs.csv", "kind,links_each,share,seed,degree,nodes", rows)


def twosample():
    settings = [("received", 3, 0.5), ("received", 1, 0.9), ("total", 3, 0.5), ("total", 2, 1.0)]
    rows = []
    for s, (kind, links_each, share) in enumerate(settings):
        for seed in range(2001 + 10 * s, 2011 + 10 * s):
            counts = degree_counts(kind, links_each, share, 20_000, seed)
            rows += [[kind, links_each, share, 20_000, seed, k, c] for k, c in counts]
    write("twosample.csv", "kind,links_each,share,nodes,seed,degree,count", rows)


if __name__ == "__main__":
    print(f"python {platform.python_version()}, igraph {igraph.__version__}")
    parts = {"grown": grown, "twosample": twosample}
    for name in sys.argv[1:] or parts:
        parts[name]()
