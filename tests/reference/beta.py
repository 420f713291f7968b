"""Regularised incomplete beta functions in 60 digits: beta.csv.

usage: python3 beta.py > beta.csv

Continued fraction (DLMF 8.17.22) on the side of the mean where it converges fast; against mpmath's `betainc` to 1e-30 where that is
quick. Every x is a multiple of 2^−40, so that x and 1 − x are doubles.
"""

import sys

import mpmath as mp

mp.mp.dps = 60
GRID = 2**40


def lower(a, b, x):
    """By the fraction's even part, from the bottom up."""

    def fraction(terms):
        rest = mp.mpf(1)
        for m in range(terms, 0, -1):
            even = m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m))
            odd = -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
            rest = 1 + even / (1 + odd / rest)
        return 1 / (1 - (a + b) * x / (a + 1) / rest)

    terms, found = 200, fraction(100)
    while True:
        finer = fraction(terms)
        if abs(finer - found) < abs(finer) * mp.mpf(10) ** -35:
            break
        terms, found = 2 * terms, finer
    front = a * mp.log(x) + b * mp.log1p(-x) + mp.loggamma(a + b) - mp.loggamma(a + 1) - mp.loggamma(b)
    return mp.exp(front) * finer


def value(a, b, x):
    return lower(a, b, x) if x <= a / (a + b) else 1 - lower(b, a, 1 - x)


print(f"python {sys.version.split()[0]}, mpmath {mp.__version__}", file=sys.stderr)
print("a,b,x,value")
for a in ("0.001", "0.5", "3.75", "50", "1000", "10000000"):
    for b in ("0.001", "0.5", "3.75", "50", "1000", "10000000"):
        a_, b_ = mp.mpf(float(a)), mp.mpf(float(b))
        mean = a_ / (a_ + b_)
        deviation = mp.sqrt(mean * (1 - mean) / (a_ + b_ + 1))
        for offset in (-30, -8, -3, -1, 0, 2, 6):
            x = mp.mpf(int((mean + offset * deviation) * GRID)) / GRID
            if not 0 < x < 1:
                continue
            found = value(a_, b_, x)
            if max(a_, b_) <= 50 and min(a_, b_) >= 0.5:
                assert abs(found / mp.betainc(a_, b_, 0, x, regularized=True) - 1) < mp.mpf(10) ** -30
            if mp.mpf(10) ** -290 < found:
                print(f"{a},{b},{mp.nstr(x, 20)},{mp.nstr(found, 20)}")
