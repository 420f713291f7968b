#!/usr/bin/env python3
"""Degree counts of graphs grown by igraph with a known preferential share.

usage: graphs.py [grown] [twosample] [power] [transitions]      (none: all)

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


def grow(kind, links_each, share, nodes, seed, power=1.0):
    random.seed(seed)  # igraph draws from Python's generator
    received = kind == "received"
    appeal = (1 - share) / share * links_each * (1 if received else 2)
    graph = igraph.Graph.Barabasi(
        nodes, links_each, power=power, zero_appeal=appeal, directed=received, outpref=not received,
        implementation="psumtree_multiple")  # links of one newcomer are independent picks
    return graph


def degree_counts(kind, links_each, share, nodes, seed, power=1.0):
    received = kind == "received"
    graph = grow(kind, links_each, share, nodes, seed, power)
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


def power():
    rows = []
    for s, exponent in enumerate((0.7, 1.2)):
        for seed in range(3001 + 10 * s, 3011 + 10 * s):
            counts = degree_counts("total", 2, 1.0, 20_000, seed, exponent)
            rows += [["total", 2, exponent, 20_000, seed, k, c] for k, c in counts]
    write("power_graphs.csv", "kind,links_each,exponent,nodes,seed,degree,count", rows)


def transitions():
    """Degrees when 40,000 nodes had arrived and when 50,000 had; nodes are numbered by arrival."""
    rows = []
    for kind, links_each, share, exponent, seed in (
            ("received", 3, 0.7, 1.0, 4001), ("total", 3, 0.6, 1.0, 4002), ("total", 2, 1.0, 0.7, 4003)):
        graph = grow(kind, links_each, share, 50_000, seed, exponent)
        early = graph.induced_subgraph(range(40_000))
        degree = (lambda g: g.indegree()) if kind == "received" else (lambda g: g.degree())
        before = degree(early) + [""] * 10_000
        moves = collections.Counter(zip(before, degree(graph)))
        moves = sorted(moves.items(), key=lambda move: (move[0][0] == "", move[0]))
        rows += [[kind, links_each, share, exponent, seed, b, a, n] for (b, a), n in moves]
    write("grown_transitions.csv", "kind,links_each,share,exponent,seed,before,after,nodes", rows)


if __name__ == "__main__":
    print(f"python {platform.python_version()}, igraph {igraph.__version__}")
    parts = {"grown": grown, "twosample": twosample, "power": power, "transitions": transitions}
    for name in sys.argv[1:] or parts:
        parts[name]()
