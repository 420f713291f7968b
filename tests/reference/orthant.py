#!/usr/bin/env python3
"""Reference values of normal and Student probabilities below bounds, by scipy.

usage: orthant.py

Writes orthant.csv beside this script: degrees of freedom (inf: normal), how coordinates are correlated, their number, the
bound of coordinate i (first + step*i), and the probability with the scatter of four independent evaluations.
"""
import csv
import pathlib
import platform

import numpy as np
import scipy
from scipy import stats

HERE = pathlib.Path(__file__).parent


def correlation(kind, size):
    i = np.arange(size)
    if kind == "brownian":  # positions of Brownian motion at times 1, 2, ...
        return np.sqrt((np.minimum.outer(i, i) + 1.0) / (np.maximum.outer(i, i) + 1.0))
    if kind == "markov":  # stationary, 0.8 from one coordinate to the next
        return 0.8 ** np.abs(np.subtract.outer(i, i))
    return np.where(np.equal.outer(i, i), 1.0, 0.5)  # equal


def value(kind, size, nu, bounds):
    matrix = correlation(kind, size)
    points = 20_000
    def once(seed):
        if np.isinf(nu):
            rng = np.random.default_rng(seed)
            return stats.multivariate_normal.cdf(
                bounds, cov=matrix, maxpts=points, abseps=1e-6, releps=0, rng=rng
            )
        return stats.multivariate_t.cdf(bounds, shape=matrix, df=nu, maxpts=points, random_state=seed)
    values = [once(seed) for seed in range(4)]
    return float(np.mean(values)), float(np.std(values))


def main():
    rows = []
    for kind in ("brownian", "markov", "equal"):
        for size in (2, 5, 16):
            for nu in (np.inf, 4.0):
                for first, step in ((0.5, 0.0), (2.0, -1.0 / size)):
                    mean, scatter = value(kind, size, nu, first + step * np.arange(size))
                    assert scatter < 3e-4, (kind, size, nu, scatter)
                    rows.append((nu, kind, size, first, step, f"{mean:.7f}", f"{scatter:.1e}"))
    with open(HERE / "orthant.csv", "w", newline="") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(("degrees_of_freedom", "kind", "size", "first", "step", "probability", "scatter"))
        out.writerows(rows)
    print(f"orthant.csv: {len(rows)} rows; python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}")


main()
