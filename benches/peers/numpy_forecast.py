"""One forecast in vectorised numpy and scipy: the fit of one snapshot with its interval, tails, totals and the largest degree at every
date, with intervals. Written from the formulas in the crate's documentation; no code is shared.

Nodes arrive without links and links only come (entry degree 0, received links), so u/v is constant and each node's law is negative
binomial.
"""

import numpy as np
from scipy.linalg import solve_banded
from scipy.optimize import brentq, minimize_scalar
from scipy.special import betainc, betaln, ndtri

LEVELS = (0.5, 0.9)
MODEL_ERROR = 0.15


def log_pmf(share, links, degrees):
    """ln P_k of the stationary law: a Waring law."""
    with np.errstate(divide="ignore", invalid="ignore"):
        alpha, beta = links * (1 - share), share
        a, b = alpha / beta, (1 + alpha) / beta
        logs = -np.log1p(alpha) + betaln(degrees + a, 1 + b - a) - betaln(a, 1 + b - a)
    return np.where(degrees == 0, -np.log1p(alpha), logs)


def tail_shares(share, links, degrees):
    below = np.maximum(degrees - 1, 0)
    alpha, beta = links * (1 - share), share
    return np.where(degrees == 0, 1.0, (alpha + beta * below) * np.exp(log_pmf(share, links, below)))


def information_over_variance(share, links):
    """Fisher information over the variance of the score, by the backward equation on cells of degree."""
    edges = list(range(int(min(40 * (1 + links), 300)) + 1))
    while tail_shares(share, links, np.array([edges[-1]]))[0] > 1e-10:
        edges.append(int(np.ceil(edges[-1] * 1.08)))
    grid = np.array(edges, float)
    mass = -np.diff(tail_shares(share, links, grid))
    low, high = share - min(1e-4, share / 2), share + min(1e-4, (1 - share) / 2)
    h = ((log_pmf(high, links, grid) - log_pmf(low, links, grid)) / (high - low))[:-1]
    mean = h @ mass
    information = mass @ (h - mean) ** 2
    width = np.diff(grid)
    gain = links * (1 - share) + share * (grid[:-1] + 0.5 * (width - 1))
    flow, hazard = (gain * mass)[:-1], gain / width

    def rate(h):
        step = np.diff(h) / width[:-1]
        return flow @ step**2 - (flow @ step) ** 2 / links

    age, step, before, variance = 0.0, 0.02, rate(h), 0.0
    bands = np.zeros((2, len(h)))
    while age < 20:
        h[-1] += step * gain[-1] * (h[-1] - h[-2]) / width[-2]
        bands[1, :-1], bands[1, -1] = 1 + step * hazard[:-1], 1
        bands[0, 1:] = -step * hazard[:-1]
        h = solve_banded((0, 1), bands, h, overwrite_b=True, check_finite=False)
        after = rate(h)
        variance += 0.5 * step * (np.exp(-age) * before + np.exp(-age - step) * after)
        age, before, step = age + step, after, step * 1.05
    return information / variance


def fit(degrees, nodes, seed=0):
    links = degrees @ nodes / nodes.sum()

    def likelihood(share):
        return nodes @ log_pmf(share, links, degrees)

    best = minimize_scalar(lambda p: -likelihood(p), bounds=(1e-9, 1 - 1e-9), method="bounded", options={"xatol": 1e-9})
    share, top = best.x, -best.fun
    scale = information_over_variance(share, links)

    def bounds(fall):
        def excess(p):
            return np.sqrt(max(2 * scale * (top - likelihood(p)), 0.0)) - np.sqrt(fall)

        return tuple(brentq(excess, share, end, xtol=1e-9) for end in (1e-9, 1 - 1e-9))

    low, high = bounds(2.705543454095404)
    excursion = bounds(1.0)
    points = [1]
    while points[-1] < degrees[-1]:
        points.append(min(int(np.ceil(points[-1] * 1.25)), int(degrees[-1])))
    fitted = tail_shares(share, links, np.array(points, float))
    total = int(nodes.sum())
    tails = np.cumsum(nodes[::-1])[::-1]
    observed = tails[np.searchsorted(degrees, points)]
    distance = np.abs(observed / total - fitted).max()
    rng = np.random.default_rng(seed)
    left, before, worst = np.full(199, total), 1.0, np.zeros(199)
    for point in fitted:
        left = rng.binomial(left, min(point / before, 1.0))
        worst = np.maximum(worst, np.abs(left / total - point))
        before = point
    p_value = (1 + (worst >= distance).sum()) / 200
    return {"share": share, "low": low, "high": high, "excursion": excursion, "links": links, "p_value": p_value}


class Growth:
    """The negative binomial laws of a network's nodes at the days ahead under one mix."""

    def __init__(self, degrees, nodes, share, links, rate, days):
        self.degrees, self.nodes, self.days, self.rate = degrees, nodes, days, rate
        self.total, self.share, self.links = nodes.sum(), share, links
        self.ratio = (1 - share) * links / share
        abscissae, weights = np.polynomial.legendre.leggauss(40)
        self.arrivals = days[:, None] * 0.5 * (1 + abscissae)
        self.weights = days[:, None] * 0.5 * weights
        self.spread = np.expm1(share * np.log1p(rate * days / self.total))
        grown = (self.total + rate * days[:, None]) / (self.total + rate * self.arrivals)
        self.young = np.expm1(share * np.log(grown))

    def newcomers(self, date, threshold):
        x = self.young[date] / (1 + self.young[date])
        return self.rate * self.weights[date] @ betainc(threshold, self.ratio, x)

    def risers(self, date, threshold):
        """Nodes below the threshold, and their probabilities to come past it."""
        below = np.searchsorted(self.degrees, threshold)
        x = self.spread[date] / (1 + self.spread[date])
        return self.nodes[:below], betainc(threshold - self.degrees[:below], self.degrees[:below] + self.ratio, x)

    def tail(self, date, threshold):
        """Kept, expected, sampling variance."""
        nodes, rise = self.risers(date, threshold)
        kept, new = self.total - nodes.sum(), self.newcomers(date, threshold)
        return kept, kept + nodes @ rise + new, nodes @ (rise * (1 - rise)) + new

    def log_none(self, date, largest):
        """ln P(no node has more than `largest` links), for at least today's largest."""
        nodes, rise = self.risers(date, largest + 1)
        return nodes @ np.log1p(-rise) - self.newcomers(date, largest + 1)

    def largest(self, date, probability, now):
        wanted = np.log(probability)

        def excess(x):
            return self.log_none(date, np.floor(x)) - wanted

        if excess(now) >= 0:
            return now
        reach = 2 * now
        while excess(reach) < 0:
            reach *= 2
        return np.floor(brentq(excess, now, reach, xtol=0.25))


def at_most(x, mean, variance):
    """The distribution function of a negative binomial or binomial count with these moments; 0 below 0."""
    ratio = variance / mean
    over = ratio > 1
    with np.errstate(divide="ignore", invalid="ignore"):
        shape = mean / (ratio - 1)
        clustered = betainc(np.where(over, shape, 1), np.maximum(x, 0) + 1, np.where(over, 1 / ratio, 0.5))
        trials = mean / (1 - ratio)
        open_ = ~over & (x < trials)
        bounded = betainc(np.where(open_, trials - x, 1), np.maximum(x, 0) + 1, np.where(open_, ratio, 0.5))
    return np.where(x < 0, 0.0, np.where(over, clustered, np.where(open_, bounded, 1.0)))


def first(holds, reach):
    """Smallest whole x ≥ 0 from which on `holds` is true, elementwise."""
    low, high = np.full(reach.shape, -1.0), np.ceil(reach)
    while (high - low > 1).any():
        middle = np.floor(0.5 * (low + high))
        met = holds(middle)
        low, high = np.where(met, low, middle), np.where(met, middle, high)
    return high


def wilson_hilferty(mean, variance, probability):
    ninth = variance / (9 * mean**2)
    return np.round(mean * (1 - ninth + ndtri(probability) * np.sqrt(ninth)) ** 3)


def count_intervals(floor, mean, variance):
    """Medians and intervals of many counts at once: [count], [count, level, end]."""
    small = mean <= 1e5
    safe_mean, safe_variance = np.where(small, mean, 1.0), np.where(small, variance, 2.0)
    reach = safe_mean + 12 * np.sqrt(safe_variance) + 12

    def cdf(x):
        return at_most(x, safe_mean, safe_variance)

    median = first(lambda x: cdf(x) >= 0.5, reach)
    ends = []
    for level in LEVELS:
        low = first(lambda x: cdf(x) + cdf(x - 1) >= 1 - level, reach)
        high = first(lambda x: cdf(x) + cdf(x - 1) > 1 + level, reach) - 1
        large = [wilson_hilferty(mean, variance, 0.5 + side * level / 2) for side in (-1, 1)]
        ends.append(np.stack([np.where(small, low, large[0]), np.where(small, high, large[1])], axis=-1))
    median = np.where(small, median, wilson_hilferty(mean, variance, 0.5))
    ends = np.stack(ends, axis=1)
    ends[..., 0], ends[..., 1] = np.minimum(ends[..., 0], median[:, None]), np.maximum(ends[..., 1], median[:, None])
    return floor + median, floor[:, None, None] + ends


def forecast(degrees, nodes, rate, days, thresholds):
    """Everything the program's answer to the same request tells in figures."""
    degrees, nodes = np.asarray(degrees, float), np.asarray(nodes, float)
    days = np.asarray(days, float)
    fitted = fit(degrees, nodes.astype(np.int64))
    links, total = fitted["links"], nodes.sum()
    central, low, high = (
        Growth(degrees, nodes, share, links, rate, days) for share in (fitted["share"], *fitted["excursion"])
    )
    grown, now = total + rate * days, degrees[-1]
    floors, means, variances = [], [], []
    for date in range(len(days)):
        for threshold in thresholds:
            kept, mean, chance = central.tail(date, threshold)
            beyond = (0.5 * (high.tail(date, threshold)[1] - low.tail(date, threshold)[1])) ** 2
            flow = (mean - kept) * (1 - mean / grown[date])
            floors.append(kept), means.append(mean), variances.append(chance + beyond + (MODEL_ERROR * flow) ** 2)
        arrived = rate * days[date]
        floors += [total, total * links]
        means += [grown[date], grown[date] * links]
        variances += [arrived, max(links, 1) * links * arrived]
    floors, means, variances = map(np.array, (floors, means, variances))
    medians, ends = count_intervals(floors, means - floors, variances)
    rows = len(thresholds) + 2
    dates = []
    for date in range(len(days)):
        median = central.largest(date, 0.5, now)
        step = max(np.round(median * 1.03), median + 1)
        slope = (central.log_none(date, step) - central.log_none(date, median)) / (np.log1p(step) - np.log1p(median))
        shift = [np.clip((law.log_none(date, median) - np.log(0.5)) / slope, -1.5, 1.5) for law in (low, high)]
        moved = [np.log1p(max(np.expm1(np.log1p(median) - s), now)) for s in shift]
        gain = abs(np.log1p(median) - np.log1p(now))
        spread = np.hypot(0.5 * (moved[1] - moved[0]), MODEL_ERROR * gain)
        intervals = []
        for level in LEVELS:
            pair = []
            for side in (-1, 1):
                probability = 0.5 + side * level / 2
                own = abs(np.log1p(central.largest(date, probability, now)) - np.log1p(median))
                widened = np.expm1(np.log1p(median) + side * np.hypot(own, abs(ndtri(probability)) * spread))
                pair.append(max(np.round(widened), now))
            intervals.append(pair)
        at = slice(date * rows, (date + 1) * rows)
        counts = [
            {"expected": mean, "median": middle, "intervals": both.tolist()}
            for mean, middle, both in zip(means[at], medians[at], ends[at])
        ]
        dates.append(
            {"tail": counts[:-2], "nodes": counts[-2], "links": counts[-1], "largest": {"median": median, "intervals": intervals}}
        )
    return {"fit": fitted, "dates": dates}
