"""The Poisson-binomial distribution: the number of successes of unequal independent trials."""

from __future__ import annotations

import math

import numpy as np

from miner.kernels.compiling import kernel, summing_kernel

TINY = 1e-300
EXACT_WORK = 100_000  # trials x states up to which one tail is always summed exactly
EXACT_STATES = 60  # and states up to which it is whatever the number of trials
LITTLE_SPREAD = 8.0  # variance at the tilt under which the saddlepoint is not trusted
NEAR_MEAN = 0.05  # standard deviations from the mean within which tails are built from masses
TABLE_WORK = 300_000  # trials x states up to which a whole table is


@kernel
def few_states(q, n_states):
    """P(X = x) for x < n_states, and P(X >= n_states), adding two trials at a time.

    All terms are positive, so the relative error stays near rounding however small they are.
    Returns float64 [n_states] and a float.
    """
    now = np.zeros(n_states + 2)  # state x at x + 2, so that x - 1 and x - 2 are there
    after = np.zeros(n_states + 2)
    now[2] = 1.0
    top = n_states - 1
    tail = 0.0
    high = 0
    i = 0
    if q.size % 2 == 1:
        now[2] = 1.0 - q[0]
        if top == 0:
            tail = q[0]
        else:
            now[3] = q[0]
            high = 1
        i = 1
    while i < q.size:
        a, b = q[i], q[i + 1]
        both = a * b
        one = a * (1.0 - b) + b * (1.0 - a)
        none = (1.0 - a) * (1.0 - b)
        if high >= top - 1:
            tail += now[2 + top] * (one + both)
            if top >= 1:
                tail += now[1 + top] * both
            high = top
        else:
            high += 2
        for x in range(2, high + 3):
            after[x] = now[x] * none + now[x - 1] * one + now[x - 2] * both
        now, after = after, now
        i += 2
    return now[2:], tail


@kernel
def exact_tail(q, least):
    """P(X >= least) for X the sum of Bernoulli(q[i])."""
    if least <= 0:
        return 1.0
    if least > q.size:
        return 0.0
    return min(1.0, few_states(q, least)[1])


@summing_kernel
def cumulants(q, s):
    """K(s), K'(s), K''(s), K'''(s), K''''(s) of the sum of Bernoulli(q[i]), tilted by s."""
    grow = math.exp(s)
    k0 = k1 = k2 = k3 = k4 = 0.0
    for i in range(q.size):
        m = 1.0 - q[i] + q[i] * grow
        p = q[i] * grow / m
        v = p * (1.0 - p)
        k0 += math.log(m)
        k1 += p
        k2 += v
        k3 += v * (1.0 - 2.0 * p)
        k4 += v * (1.0 - 6.0 * v)
    return k0, k1, k2, k3, k4


@summing_kernel
def tilt_to(q, total, s):
    """The tilt at which the mean is ``total``, by Newton steps from ``s``, kept in a bracket.

    ``total`` lies strictly between the sure successes and the possible ones. Returns the tilt and
    the variance there.
    """
    low, high = -60.0, 60.0
    spread = 0.0
    for _ in range(200):
        grow = math.exp(s)
        mean = 0.0
        spread = 0.0
        for i in range(q.size):
            p = q[i] * grow / (1.0 - q[i] + q[i] * grow)
            mean += p
            spread += p * (1.0 - p)
        miss = mean - total
        step = miss / spread
        # sums of n terms are no better than this; to go on would be to chase rounding
        if abs(miss) < 1e-13 * q.size or abs(step) < 1e-15:
            break
        if miss > 0:
            high = s
        else:
            low = s
        s -= step
        if not low < s < high:
            s = 0.5 * (low + high)
    return s, spread


@kernel
def lattice_mass(x, s, k0, k2, k3, k4):
    """P(X = x) of a sum on the integers by its saddlepoint, to second order.

    ``s`` is the tilt at which the mean is ``x``; ``k0 .. k4`` are the cumulant generating function
    and its derivatives there. Daniels (1954), Ann. Math. Stat. 25:631-650, eq. 2.6.
    """
    series = 1.0 + k4 / k2**2 / 8.0 - 5.0 * k3 * k3 / k2**3 / 24.0
    return math.exp(k0 - s * x) / math.sqrt(2.0 * math.pi * k2) * series


@kernel
def lattice_tail(least, s, k0, k2, k3, k4):
    """P(X >= least) of a sum on the integers by its saddlepoint, to second order.

    Arguments as in ``lattice_mass``; ``s`` not near 0. Lugannani & Rice (1980), the lattice form
    with its second term as in Daniels (1987), "Tail probability approximations", section 6.
    """
    depth = s * least - k0
    w = math.sqrt(2.0 * max(depth, 0.0)) * (1.0 if s > 0 else -1.0)
    u = (1.0 - math.exp(-s)) * math.sqrt(k2)
    skew, kurt = k3 / k2**1.5, k4 / k2**2
    a = 1.0 - math.exp(-s)
    # derivatives of 1 / (1 - exp(-s)), in units of the tilted standard deviation
    first = math.exp(-s) / a / math.sqrt(k2)
    second = (math.exp(-s) * (1.0 + math.exp(-s)) / (a * a)) / k2
    correction = (kurt / 8.0 - 5.0 * skew * skew / 24.0) - skew * first / 2.0 - second / 2.0
    correction = (correction / u) + 1.0 / w**3
    log_density = -depth - 0.5 * math.log(2.0 * math.pi)
    normal_tail = 0.5 * math.erfc(w / math.sqrt(2.0))
    if w > 30.0:
        # beyond the range of erfc: Mills' ratio, the two large terms cancelled by hand
        x = w * w
        bracket = -1.0 / w**3 * (1.0 - 3.0 / x + 15.0 / x**2) + 1.0 / u + correction
        return math.exp(log_density) * bracket
    tail = normal_tail + math.exp(log_density) * (1.0 / u - 1.0 / w + correction)
    return min(1.0, max(0.0, tail))


@kernel
def saddlepoint_tail(q, least, start):
    """P(X >= least) by the saddlepoint, and the tilt it used.

    ``least`` lies strictly between the sure successes and the possible ones; ``start`` is where
    the search for the tilt begins. Near the mean the tail's terms cancel to noise; there single
    chances are added until it is far enough away.
    """
    s, _ = tilt_to(q, float(least), start)
    first_s = s
    mass = 0.0
    x = least
    while True:
        k0, _, k2, k3, k4 = cumulants(q, s)
        if abs(s) * math.sqrt(k2) >= NEAR_MEAN:
            return min(1.0, mass + lattice_tail(x, s, k0, k2, k3, k4)), first_s
        mass += lattice_mass(x, s, k0, k2, k3, k4)
        x += 1
        s, _ = tilt_to(q, float(x), s)


@kernel
def upper_tail_from(q, least, start):
    """``upper_tail``, and a tilt from which to begin for a neighbour of ``least``."""
    if q.size * least <= EXACT_WORK or least <= EXACT_STATES:
        return exact_tail(q, least), start
    n_sure = 0
    n_possible = 0
    for i in range(q.size):
        n_sure += q[i] >= 1.0
        n_possible += q[i] > 0.0
    if least <= n_sure:
        return 1.0, start
    if least > n_possible:
        return 0.0, start
    if least == n_possible:
        return exact_tail(q[q > 0.0], least), start
    s, spread = tilt_to(q, float(least), start)
    if spread < LITTLE_SPREAD:
        # near the end of what is likely at all the series has too few trials to work with
        return exact_tail(q, least), s
    return saddlepoint_tail(q, least, s)


@kernel
def upper_tail(q, least):
    """P(X >= least): summed exactly where that is affordable, else by the saddlepoint."""
    return upper_tail_from(q, least, 0.0)[0]


@kernel
def tail_table(q, first, last):
    """P(X >= x) for x = first .. last: float64 [last - first + 1].

    Exact where affordable. Otherwise tails at up to thirteen knots, their logarithms joined by
    parabolas (a log tail is close to one): what ranking draws needs, not a p-value to report.
    """
    table = np.empty(last - first + 1)
    if q.size * (last + 1) <= TABLE_WORK or last - first < 3:
        p_x, tail = few_states(q, last + 1)
        for x in range(last, first - 1, -1):
            tail += p_x[x]
            table[x - first] = min(1.0, tail)
        return table
    n_knots = min(last - first, 12) + 1
    knot = np.empty(n_knots)
    log_p = np.empty(n_knots)
    s = 0.0
    for i in range(n_knots):
        x = first + (last - first) * i // (n_knots - 1)
        p, s = upper_tail_from(q, x, s)
        knot[i], log_p[i] = x, math.log(max(p, TINY))
    i = 0
    for x in range(first, last + 1):
        while i < n_knots - 3 and x > knot[i + 1]:
            i += 1
        a, b, c = knot[i], knot[i + 1], knot[i + 2]
        value = (
            log_p[i] * (x - b) * (x - c) / ((a - b) * (a - c))
            + log_p[i + 1] * (x - a) * (x - c) / ((b - a) * (b - c))
            + log_p[i + 2] * (x - a) * (x - b) / ((c - a) * (c - b))
        )
        table[x - first] = math.exp(min(0.0, value))
    return table


@kernel
def tilt(q, log_odds):
    """Rates whose odds are ``exp(log_odds)`` times those of ``q``; 0 and 1 stay."""
    grow = math.exp(log_odds)
    return q * grow / (1.0 - q + q * grow)


@kernel
def sharper_p_value(q_rest, hits_rest, q_own, hits_own, node, weight):
    """Chance of at least ``hits_own`` hits, were the odds ratio that of the rest.

    The ratio of the rest's odds to the null's is estimated from ``q_rest`` (its rates under the
    null) and ``hits_rest``, and carried to ``q_own`` with its uncertainty: the tail is averaged
    over a normal law of the log ratio by Gauss-Hermite quadrature (``node, weight`` for the weight
    exp(-x^2)). 1.0 where the rest says nothing.
    """
    is_inside = (q_rest > 0.0) & (q_rest < 1.0)
    inside = q_rest[is_inside]
    n = inside.size
    if n == 0:
        return 1.0
    # sure cells say nothing of the ratio: they and their hits are left out
    n_sure = np.sum(q_rest >= 1.0)
    total = float(hits_rest - n_sure)
    total = min(max(total, 0.5), n - 0.5)
    log_odds, spread = tilt_to(inside, total, 0.0)
    scale = math.sqrt(2.0 / spread)
    p = 0.0
    for i in range(node.size):
        log_odds_i = min(60.0, max(-60.0, log_odds + scale * node[i]))
        p += weight[i] * upper_tail(tilt(q_own, log_odds_i), hits_own)
    return max(TINY, min(1.0, p / math.sqrt(math.pi)))
