#!/usr/bin/env python3
"""Reference values of scores, computed apart from the engine.

usage: scores.py

Writes scores.csv and interval_scores.csv beside this script. CRPS of Poisson, negative binomial and binomial laws comes from scoringrules; where its
special functions give out (large counts) from the sum over whole numbers, which is also what small ones are checked against.
"""
import csv
import math
import pathlib
import platform

import numpy as np
import scipy
import scoringrules
from scipy import stats

HERE = pathlib.Path(__file__).parent
Z = (-6.0, -2.0, -0.7, 0.0, 0.4, 1.5, 4.0, 30.0)
MOST_SUMMED = 1e6
MOST_TRIALS = 1e5  # scoringrules sums over all of them


def law_of(mean, ratio):
    """scipy's law and the score of scoringrules, for a variance of ratio times the mean."""
    if ratio == 1:
        return stats.poisson(mean), lambda y: scoringrules.crps_poisson(y, mean)
    if ratio > 1:
        size, chance = mean / (ratio - 1), 1 / ratio
        return stats.nbinom(size, chance), lambda y: scoringrules.crps_negbinom(y, size, chance)
    trials = round(mean / (1 - ratio))
    chance = 1 - ratio
    few = trials <= MOST_TRIALS
    return stats.binom(trials, chance), lambda y: scoringrules.crps_binomial(y, trials, chance) if few else math.nan


def summed(law, observed):
    """The integral of (F − 1{t ≥ observed})², F constant between whole numbers."""
    low = int(max(law.mean() - 45 * law.std(), 0))
    high = int(law.mean() + 45 * law.std() + 60 * law.var() / law.mean() + 60)
    if high - low > MOST_SUMMED:
        return None
    x = np.arange(low, high)
    within = np.sum(np.where(x < observed, law.cdf(x), law.sf(x)) ** 2)
    return float(max(low - observed, 0.0) + max(observed - high, 0.0) + within)


def close(a, b, tolerance):
    return abs(a - b) <= tolerance * abs(b)


def write(name, header, rows):
    with open(HERE / name, "w", newline="") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(header.split(","))
        out.writerows(rows)
    print(f"{name}: {len(rows)} rows")


def crps():
    rows, dropped = [], 0
    for mean in (0.1, 1.0, 7.5, 120.0, 900.0, 5e3, 9e4, 1e6, 1e7):
        for ratio in (0.02, 0.3, 0.8, 1.0, 1.3, 4.0, 1 + 0.01 * mean, 1 + 0.2 * mean, 1 + 9 * mean):
            trials = round(mean / (1 - ratio)) if ratio < 1 else 1
            if trials == 0:
                continue
            law_mean = trials * (1 - ratio) if ratio < 1 else mean
            law, score = law_of(law_mean, ratio)
            for observed in sorted({max(0, round(law_mean + z * law.std())) for z in Z}):
                value, library = summed(law, observed), float(score(float(observed)))
                sound = np.isfinite(library) and library > 0
                if value is None and not sound:
                    dropped += 1
                    continue
                both = value is not None and sound and close(library, value, 1e-6)
                source = "both" if both else "library" if value is None else "sum"
                rows.append([law_mean, ratio * law_mean, observed, library if value is None else value, source])
    agree = sum(row[-1] == "both" for row in rows)
    print(f"{agree} values of scoringrules agree with the sum to 1e-6; {dropped} too large for either")
    assert agree > 200
    write("scores.csv", "mean,variance,observed,crps,from", rows)


def interval_score():
    rows = [[level, low, high, observed, float(scoringrules.interval_score(observed, low, high, 1 - level))]
            for level, low, high, observed in ((0.5, 10.0, 20.0, 15.0), (0.9, 10.0, 20.0, 25.0), (0.9, 10.0, 20.0, 3.0),
                                               (0.99, 0.0, 1e6, 2e6))]
    write("interval_scores.csv", "level,low,high,observed,score", rows)


if __name__ == "__main__":
    print(f"python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}, "
          f"scoringrules {scoringrules.__version__}")
    crps()
    interval_score()
