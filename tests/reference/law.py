#!/usr/bin/env python3
"""Reference values for the law of one node's degree, computed apart from the engine.

usage: law.py [constant] [drift] [losses] [stationary] [quantiles]      (none: all)

Writes the CSV files beside this script. Inputs printed in a row stand for the double nearest to the
printed decimal; the value was computed from exactly that double.
"""
import csv
import math
import pathlib
import platform
import sys

import mpmath
import numpy as np
import scipy
from mpmath import mp, mpf
from scipy import integrate, special, stats

HERE = pathlib.Path(__file__).parent
EXTENDED = np.longdouble  # 64-bit mantissa where the platform has it
assert np.finfo(EXTENDED).eps < 1e-18, "needs an extended-precision long double (x86)"


def write(name, header, rows):
    with open(HERE / name, "w", newline="") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(header.split(","))
        out.writerows(rows)
    print(f"{name}: {len(rows)} rows")


def digits(x, n=20):
    """n significant digits in scientific notation."""
    if isinstance(x, np.longdouble):
        return np.format_float_scientific(x, precision=n - 1, unique=False, trim="k", exp_digits=1)
    return mpmath.nstr(x, n, strip_zeros=False, min_fixed=0, max_fixed=0)


def close(a, b, tolerance, what):
    error = abs(a - b) / abs(b)
    assert error <= tolerance, f"{what}: {a} against {b}, relative error {error}"


def pick(tail, low, high, target):
    """Threshold in low..high whose (falling) tail comes first at or below the target."""
    while low < high:
        middle = (low + high) // 2
        low, high = (low, middle) if tail(middle) <= target else (middle + 1, high)
    return low


# ---- constant ratio: k + negative binomial --------------------------------------------------------


def incomplete_beta(a, b, x, y):
    """I_x(a, b), y = 1 - x, by the continued fraction of DLMF 8.17.22, on the side where it converges
    fast; mpmath's own betainc takes too long at parameters of 1e9."""
    if x > (a + 1) / (a + b + 2):
        return 1 - incomplete_beta(b, a, y, x)
    front = mp.exp(a * mp.log(x) + b * mp.log(y) + mp.loggamma(a + b) - mp.loggamma(a) - mp.loggamma(b)) / a
    d = 1 / (1 - (a + b) * x / (a + 1))
    value, c, n = d, mpf(1), 0
    while True:  # modified Lentz; the first step of the odd-even pair is above
        n += 1
        even = n * (b - n) * x / ((a + 2 * n - 1) * (a + 2 * n))
        odd = -(a + n) * (a + b + n) * x / ((a + 2 * n) * (a + 2 * n + 1))
        for term in (even, odd):
            d, c = 1 / (1 + term * d), 1 + term / c
            value *= d * c
        if abs(d * c - 1) < mpf(10) ** (5 - mp.dps):
            return front * value


def constant_ratio_tail(start, growth, ratio, threshold):
    """P(start -> at least threshold): the gain is negative binomial of shape start + ratio and success
    probability e^-growth (Kendall 1948)."""
    if threshold <= start:
        return mpf(1)
    growth, ratio = mpf(growth), mpf(ratio)
    return incomplete_beta(mpf(threshold - start), start + ratio, -mp.expm1(-growth), mp.exp(-growth))


def constant_ratio_by_master_equation(start, growth, ratio, threshold):
    """The same by the exponential of the pure-birth generator, absorbing at the threshold."""
    size = threshold - start
    generator = mp.zeros(size + 1)
    for i in range(size):
        rate = mpf(growth) * (start + i + mpf(ratio))
        generator[i, i], generator[i, i + 1] = -rate, rate
    return mp.expm(generator)[0, size]


def constant():
    starts = [0, 1, 2, 5, 20, 300, 10_000, 1_000_000, 10_000_000]
    growths = [1e-6, 1e-3, 0.05, 0.3, 1.0, 2.0, 4.0, 6.0]
    ratios = [0.01, 0.3, 1.0, 3.7, 50.0, 1e4, 0.0]
    targets = [0.999999, 0.9, 0.5, 0.1, 1e-3, 1e-6, 1e-9, 1e-14]
    extremes = [1 - 1e-12, 1e-30, 1e-60]
    rows, checked = [], 0
    for i, start in enumerate(starts):
        for g, growth in enumerate(growths):
            ratio = ratios[(3 * i + 2 * g) % len(ratios)]
            if start + ratio == 0:
                ratio = 0.01
            # double precision is enough to choose thresholds
            approximate = lambda j: special.betainc(j - start, start + ratio, -math.expm1(-growth))
            mean = (start + ratio) * math.expm1(growth)
            furthest = start + 200 + int(200 * mean + 40 * math.sqrt(mean * math.exp(growth)))
            wanted = [targets[(i + g + n) % len(targets)] for n in (0, 2, 3, 5, 7)]
            wanted.append(extremes[(i + g) % len(extremes)])
            for threshold in sorted({pick(approximate, start + 1, furthest, t) for t in wanted}):
                if not 1e-200 < approximate(threshold) <= 1:
                    continue
                mp.dps = 80  # log-gamma of 4e9 and the complement each cost a dozen digits or more
                tail = constant_ratio_tail(start, growth, ratio, threshold)
                rows.append([start, growth, ratio, threshold, digits(tail)])
                rate = growth * (threshold + ratio)
                if threshold - start <= 12 and rate < 50:
                    mp.dps = 110
                    close(constant_ratio_by_master_equation(start, growth, ratio, threshold), tail, 1e-25, rows[-1])
                    checked += 1
                if max(threshold, ratio) <= 300:
                    mp.dps = 60
                    own = mp.betainc(threshold - start, start + mpf(ratio), 0, -mp.expm1(-mpf(growth)), regularized=True)
                    close(own, tail, 1e-30, rows[-1])
    assert checked >= 40
    print(f"constant ratio: {checked} rows agree with the exact master equation to 1e-25")
    write("law_constant.csv", "start,growth,ratio,threshold,tail", rows)


# ---- drifting ratio: the exact master equation ----------------------------------------------------


def drift_tails(start, share, landings, entry_mean, nodes0, links0, arrivals, top, number=EXTENDED, pace=4, order=60):
    """Tails P(degree >= j), j = start..top, after `arrivals` arrivals, of the pure-birth master equation

        P_m' = lambda_{m-1} P_{m-1} - lambda_m P_m,   lambda_m(x) = u(x) + m v(x),
        u = landings (1 - share) / N(x),  v = landings share / K(x),

    with N = nodes0 + x, K = links0 + (landings + entry_mean) x and `top` absorbing.

    Times N K it has polynomial coefficients, so Taylor coefficients follow from a two-term recurrence.
    P = Q exp(-integral of lambda_{top-1}) makes the operator non-negative: nothing cancels, and the far
    tail, a sum of positive masses, keeps its relative accuracy."""
    one = number(1)
    a, b = number(landings) * (1 - number(share)), number(landings) * number(share)
    slope = number(landings) + number(entry_mean)
    m = np.array([number(i) for i in range(start, top + 1)])
    last = m[-2]  # the highest degree that still moves
    exp, log = (np.exp, np.log) if number is EXTENDED else (mp.exp, mp.log)

    def shift(q):
        moved = np.empty_like(q)
        moved[0], moved[1:] = q[0] * 0, q[:-1]
        return moved

    def uniform_part(q):
        moved = shift(q)
        moved[-1] += q[-1]
        return moved

    def preferential_part(q):
        moved = (last - m) * q
        moved[-1] = last * q[-1]
        return moved + shift(m * q)

    n, c, x, end = number(nodes0), number(links0), number(0), number(arrivals)
    p = np.array([one * 0] * len(m))
    p[0] = one
    if links0 == 0:
        assert start == 0
        h = min(n / 16, end)
        p = empty_start(p, m, a, b, slope, n, h, order)
        n, c, x = n + h, c + slope * h, h
    while x < end:
        h = min(pace / (a / n + b * last / c), n / 8, c / slope / 8, end - x)
        q, before, term = p, p * 0, one
        total = q
        for i in range(order):
            # n c (i+1) q_{i+1} = ..., with powers of h carried in the coefficients
            right = a * (c * uniform_part(q) + slope * h * uniform_part(before))
            right = right + b * (n * preferential_part(q) + h * preferential_part(before))
            q, before = (h * (right - (n * slope + c) * i * q) - slope * h * h * (i - 1) * before) / (n * c * (i + 1)), q
            total = total + q
        decay = a * log((n + h) / n) + b * last / slope * log((c + slope * h) / c)
        p = total * exp(-decay)
        x, n, c = x + h, n + h, c + slope * h
    return np.cumsum(p[::-1])[::-1]


def empty_start(p, m, a, b, slope, n, h, order):
    """First step from a network without links. v ~ 1/x there, yet P is analytic in x (a node of degree 0
    is hit only uniformly), so its power series is solved order by order: Frobenius with exponent 0."""
    q, total = p, p
    for i in range(1, order + 1):
        new = p * 0
        for s in range(len(m)):
            absorbing = s == len(m) - 1
            out_a, out_b = (0, 0) if absorbing else (a, b * m[s])
            right = (-slope * (i - 1) - slope * out_a - out_b) * q[s]
            if s:
                right += (slope * a + b * m[s - 1]) * q[s - 1]
            right *= h
            if s:
                right += b * n * m[s - 1] * new[s - 1]
            new[s] = right / (n * (slope * i + out_b))
        q, total = new, total + new
    return total


def drift_by_scipy(start, share, landings, entry_mean, nodes0, links0, arrivals, top):
    """P(degree >= top) by an adaptive Runge-Kutta of order 8, for comparison."""
    m = np.arange(start, top)
    slope = landings + entry_mean

    def derivative(x, p):
        rate = landings * ((1 - share) / (nodes0 + x) + share * m / (links0 + slope * x))
        flow = rate * p[:-1]
        out = np.zeros_like(p)
        out[:-1] -= flow
        out[1:] += flow
        return out

    first = np.zeros(top - start + 1)
    first[0] = 1
    return integrate.solve_ivp(derivative, (0, arrivals), first, "DOP853", rtol=1e-13, atol=1e-28).y[-1, -1]


def empty_start_by_first_link(share, landings, entry_mean, nodes0, arrivals, threshold):
    """The tail of a node of degree 0 in a network without links, another way: over the time x of its first
    link (a uniform landing), the tail of a node of degree 1 at x. x = arrivals t^8 takes in the power-law
    behaviour near 0."""
    a = landings * (1 - share)
    t, weight = np.polynomial.legendre.leggauss(48)
    t, weight = (t + 1) / 2, weight / 2
    total = 0.0
    for x, dx in zip(arrivals * t**8, weight * arrivals * 8 * t**7):
        links = (landings + entry_mean) * x
        later = drift_tails(1, share, landings, entry_mean, nodes0 + x, links, arrivals - x, threshold)
        total += dx * a / (nodes0 + x) * (nodes0 / (nodes0 + x)) ** a * later[-1]
    return total


def drift():
    # landings, entry_mean, nodes0, links0, arrivals: links per node ...
    settings = [
        (6.0, 0.0, 1000, 1000, 400),  # ... doubles and more
        (1.0, 0.0, 1000, 8000, 1500),  # ... halves
        (1.0, 0.0, 1000, 8000, 12000),  # ... falls fivefold over a long horizon
        (3.5, 0.2, 1_000_000, 3_000_000, 400_000),  # ... rises by a few per cent
        (3.0, 3.0, 5000, 20_000, 4000),  # ... rises by a fifth, total degree
        (8.0, 1.0, 50_000, 50_000, 25_000),  # ... rises fourfold from a sparse start
    ]
    shares = [0.0, 0.05, 0.3, 0.7, 0.95, 1.0]
    starts = [0, 1, 3, 10, 50, 400]
    targets = [0.99, 1e-4, 0.5, 1e-6, 1e-12, 0.1, 1e-9, 1e-2, 1e-3]
    cases = []
    for i, setting in enumerate(settings):
        for k, share in enumerate(shares):
            for offset in (0, 3) if (i + k) % 3 else (1, 2, 4):
                start = starts[(i + k + offset) % len(starts)]
                if start or share < 1:
                    cases.append((start, share, *setting))
    for share, landings, entry in ((0.0, 2.0, 0.0), (0.3, 4.0, 0.0), (0.5, 1.0, 0.0), (0.8, 3.0, 1.0), (0.95, 6.0, 0.0)):
        cases.append((0, share, landings, entry, 1000, 0, 1500))  # no links at the start
    cases.append((3, 0.6, 4.0, 0.0, 1000, 4000, 1000))  # no drift: also in closed form

    rows, exact, compared, closed = [], 0, 0, 0
    for n, case in enumerate(cases):
        start, share, landings, entry, nodes0, links0, arrivals = case
        top = start + 24
        while True:
            tails = drift_tails(*case, top)
            if tails[-1] < 1e-12 or top - start > 1500:
                break
            top = start + int(1.7 * (top - start))
        wanted = [targets[(n + s) % len(targets)] for s in (0, 1, 3)]
        found = sorted({pick(lambda j: tails[j - start], start + 1, top, t) for t in wanted})
        for threshold in found:
            rows.append([*case, threshold, digits(tails[threshold - start], 18)])

        if top - start <= 70 and exact < 14 and n % 3 == 0 or links0 == 0 and top <= 200:
            mp.dps = 40
            finer = drift_tails(*case, top, number=mpf, pace=3, order=64)
            for threshold in found:
                close(mpf(digits(tails[threshold - start], 21)), finer[threshold - start], 1e-15, case)
            exact += 1
        if top > 70 and n % 4 == 0 and links0:
            for threshold in found:
                close(drift_by_scipy(*case, threshold), tails[threshold - start], 1e-9, case)
            compared += 1
        u, v = landings * (1 - share), share * landings / (landings + entry)
        mp.dps = 40
        for threshold in found:
            value = mpf(digits(tails[threshold - start], 21))
            if share == 0:
                mean = mpf(u) * mp.log(mpf(nodes0 + arrivals) / nodes0)
                close(value, mp.gammainc(threshold - start, 0, mean, regularized=True), 1e-15, case)
                closed += 1
            elif links0 == nodes0 * (landings + entry):
                growth = mpf(share) * mp.log(mpf(nodes0 + arrivals) / nodes0)
                ratio = mpf(landings) * (1 - mpf(share)) / mpf(share)
                close(value, constant_ratio_tail(start, growth, ratio, threshold), 1e-15, case)
                closed += 1
    for share, landings, entry in ((0.3, 4.0, 0.0), (0.8, 3.0, 1.0)):
        for threshold in (2, 25):
            direct = drift_tails(0, share, landings, entry, 1000, 0, 1500, threshold)[-1]
            close(empty_start_by_first_link(share, landings, entry, 1000, 1500, threshold), direct, 1e-13, (share, threshold))
    print(f"drift: {exact} settings agree with 40-digit arithmetic to 1e-15, {compared} with DOP853 to 1e-9, "
          f"{closed} rows with a closed form to 1e-15")
    assert exact >= 8 and compared >= 8 and closed >= 10
    write("law_drift.csv", "start,share,landings,entry_mean,nodes0,links0,arrivals,threshold,tail", rows)


# ---- with lost links ------------------------------------------------------------------------------


def losses_tails(start, birth, immigration, loss, time, top):
    """Tails at 0..top of linear birth, death and immigration, by uniformisation: a Poisson mixture of
    powers of a non-negative matrix (Jensen 1953). `top` takes what would go beyond."""
    m = np.arange(top + 1, dtype=EXTENDED)
    up = EXTENDED(immigration) + EXTENDED(birth) * m
    down = EXTENDED(loss) * m
    up[-1] = down[-1] = 0
    pace = (up + down).max()
    up, down = up / pace, down / pace
    stay = 1 - up - down
    state = np.zeros(top + 1, dtype=EXTENDED)
    state[start] = 1
    jumps = pace * EXTENDED(time)
    assert jumps < 10_000  # e^-jumps must not underflow
    weight, total, n = np.exp(-jumps), state * 0, 0
    while n < jumps or weight > 1e-40:
        total += weight * state
        moved = stay * state
        moved[1:] += (up * state)[:-1]
        moved[:-1] += (down * state)[1:]
        state, n = moved, n + 1
        weight *= jumps / n
    return np.cumsum(total[::-1])[::-1]


def losses_closed_tail(start, birth, immigration, loss, time, threshold):
    """Closed form (Kendall 1948) for birth != loss, as convolution of a negative binomial with `start`
    independent zero-modified geometrics; None where it is not worth it."""
    b, d, t = mpf(birth), mpf(loss), mpf(time)
    if birth in (0.0, loss) or start > 5 or threshold > 120:
        return None
    growth = mp.exp((b - d) * t)
    die = d * (growth - 1) / (b * growth - d)  # P(no descendants)
    more = b * (growth - 1) / (b * growth - d)
    pmf = [(1 - more) ** (mpf(immigration) / b)]
    for k in range(1, threshold):
        pmf.append(pmf[-1] * more * (k - 1 + mpf(immigration) / b) / k)
    geometric = [die] + [(1 - die) * (1 - more) * more ** (k - 1) for k in range(1, threshold)]
    for _ in range(start):
        pmf = [mp.fdot(pmf[: k + 1], geometric[k::-1]) for k in range(threshold)]
    return 1 - mp.fsum(pmf)


def losses():
    settings = [  # birth, immigration, loss, time
        (1.0, 0.5, 0.5, 1.0),
        (0.5, 0.3, 0.5, 2.0),  # critical
        (0.2, 1.0, 0.7, 3.0),  # shrinking
        (0.002, 0.005, 0.001, 365.0),
        (0.0, 0.8, 0.3, 2.0),  # uniform only
        (0.8, 0.0, 0.4, 1.5),  # preferential only
    ]
    targets = [0.9, 1e-6, 0.1, 1e-9, 0.5, 1e-3, 1e-2]
    rows, closed = [], 0
    for i, setting in enumerate(settings):
        for k, start in enumerate([0, 1, 3, 20, 200]):
            if setting[1] == 0 and start == 0:
                continue
            top = start + 40
            while losses_tails(start, *setting, top)[-1] > 1e-24:  # what lies beyond is then negligible
                top = start + int(1.5 * (top - start))
            tails, wider = losses_tails(start, *setting, top), losses_tails(start, *setting, top + 60)
            for s in (0, 1, 3) if (i + k) % 3 == 0 else (0, 1):
                threshold = pick(lambda j: tails[j], 1, top, targets[(3 * i + 2 * k + s) % len(targets)])
                row = [start, *setting, threshold]
                if any(r[:6] == row for r in rows):
                    continue
                close(tails[threshold], wider[threshold], 1e-13, row)
                mp.dps = 50
                known = losses_closed_tail(*row)
                if known is not None:
                    close(mpf(digits(tails[threshold], 21)), known, 1e-13, row)
                    closed += 1
                rows.append([*row, digits(tails[threshold], 17)])
    print(f"losses: {closed} rows agree with the closed form to 1e-13")
    assert closed >= 20
    write("law_losses.csv", "start,birth,immigration,loss,time,threshold,tail", rows)


# ---- stationary law -------------------------------------------------------------------------------


def stationary_law(share, landings, entry, degree):
    """(pmf, tail) of P_k (1 + alpha + beta k) = (alpha + beta (k-1)) P_{k-1} + [k = entry], a Waring law
    (Price 1976; Krapivsky, Redner, Leyvraz 2000). Summing the recurrence from k on telescopes, which
    gives the tail: T_k = (alpha + beta (k-1)) P_{k-1} for k > entry."""
    share, landings = mpf(share), mpf(landings)
    alpha, beta = landings * (1 - share), landings * share / (landings + entry)

    def pmf(k):
        if k < entry:
            return mpf(0)
        first = 1 / (1 + alpha + beta * entry)
        if beta == 0:
            return first * (alpha / (1 + alpha)) ** (k - entry)
        low, high = alpha / beta, 1 + (1 + alpha) / beta
        logs = mp.loggamma(k + low) - mp.loggamma(entry + low) - mp.loggamma(k + high) + mp.loggamma(entry + high)
        return first * mp.exp(logs)

    return pmf(degree), mpf(1) if degree <= entry else (alpha + beta * (degree - 1)) * pmf(degree - 1)


def stationary():
    mp.dps = 60
    degrees = [*range(11), 12, 20, 50, 100, 300, 1000, 10_000, 100_000, 1_000_000, 10_000_000]
    rows = []
    for landings in (0.5, 1.0, 3.0, 8.0):
        for entry in (0, 1, 3, 8):
            kind = "total" if entry == landings else "received"
            for share in (0.0, 0.1, 0.5, 0.9, 1.0):
                if share == 1 and entry == 0:
                    continue
                running = mpf(0)
                alpha, beta = mpf(landings) * (1 - mpf(share)), mpf(landings) * mpf(share) / (mpf(landings) + entry)
                previous = mpf(0)
                for k in range(60):  # the recurrence itself
                    previous = ((alpha + beta * (k - 1)) * previous + (k == entry)) / (1 + alpha + beta * k)
                    pmf, tail = stationary_law(share, landings, entry, k)
                    assert pmf == previous == 0 or abs(pmf / previous - 1) < mpf(10) ** -50
                    assert abs(1 - running - tail) < mpf(10) ** -50
                    running += pmf
                for degree in degrees:
                    pmf, tail = stationary_law(share, landings, entry, degree)
                    if tail < 1e-290:
                        break
                    rows.append([kind, share, landings, entry, degree, digits(pmf) if pmf else "0", digits(tail)])
    agree = 0
    for landings in (0.5, 1.0, 3.0, 8.0):
        cases = [(1.0, landings, 1, stats.yulesimon((landings + 1) / landings))]
        # with nothing on arrival, alpha = beta is again Yule-Simon, one degree lower
        cases.append((landings / (1 + landings), landings, 0, stats.yulesimon((1 + landings) / landings, loc=-1)))
        cases += [(0.0, landings, e, stats.geom(1 / (1 + landings), loc=e - 1)) for e in (0, 1, 3)]
        for share, landings, entry, law in cases:
            for k in (1, 2, 5, 10, 30):
                pmf, tail = stationary_law(share, landings, entry, k)
                assert abs(float(pmf) - law.pmf(k)) <= 1e-11 * float(pmf) and abs(float(tail) - law.sf(k - 1)) <= 1e-11
                agree += 1
    for m in (1, 3, 8):  # preferential only, total degree (Dorogovtsev, Mendes, Samukhin 2000)
        for k in (m, m + 1, 40):
            close(stationary_law(1, m, m, k)[0], mpf(2 * m * (m + 1)) / (k * (k + 1) * (k + 2)), 1e-40, (m, k))
    print(f"stationary: {agree} values agree with scipy yulesimon and geom")
    write("stationary.csv", "kind,share,landings,entry,degree,pmf,tail", rows)


# ---- quantiles ------------------------------------------------------------------------------------


def quantiles():
    rows, dropped = [], 0
    for mean in (0.01, 0.3, 1.0, 7.5, 120.0, 5000.0, 1e6):
        for variance in (mean, 1.3 * mean, mean + mean * mean / 4):
            if variance == mean:
                law = stats.poisson(mean)
            else:
                size = mean * mean / (variance - mean)
                law = stats.nbinom(size, mean / variance)
            for probability in (0.005, 0.05, 0.25, 0.5, 0.75, 0.95, 0.995):
                quantile = int(law.ppf(probability))
                below, upto = (law.cdf(quantile - 1) if quantile else 0.0), law.cdf(quantile)
                # a probability on the edge of a step would test rounding, not the quantile
                if below + 1e-9 < probability < upto - 1e-9:
                    rows.append([mean, variance, probability, quantile])
                else:
                    dropped += 1
    print(f"quantiles: {dropped} left out on the edge of a step")
    write("quantiles.csv", "mean,variance,probability,quantile", rows)


if __name__ == "__main__":
    print(f"python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}, "
          f"mpmath {mpmath.__version__} ({mpmath.libmp.BACKEND})")
    parts = {f.__name__: f for f in (constant, drift, losses, stationary, quantiles)}
    for name in sys.argv[1:] or parts:
        parts[name]()
