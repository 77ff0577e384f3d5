"""Student's t and Fisher's F from the incomplete beta function, without SciPy's start-up.

References: Abramowitz and Stegun, Handbook of Mathematical Functions (1964), 26.5.8 (continued
fraction of the incomplete beta function), 26.6.2 and 26.7.1 (F and t through it).
"""

from __future__ import annotations

import math

_TINY = 1e-300


def incomplete_beta(a: float, b: float, x: float) -> float:
    """Regularised incomplete beta function I_x(a, b), for a, b > 0 and 0 <= x <= 1."""
    if x <= 0 or x >= 1:
        return 0.0 if x <= 0 else 1.0
    if x > (a + 1) / (a + b + 2):
        return 1.0 - incomplete_beta(b, a, 1.0 - x)
    ln_front = math.lgamma(a + b) - math.lgamma(a) - math.lgamma(b)
    ln_front += a * math.log(x) + b * math.log1p(-x)
    return math.exp(ln_front) / (a * _fraction(a, b, x))


def _fraction(a: float, b: float, x: float) -> float:
    """1 + d1/(1 + d2/(1 + ...)) of 26.5.8, by Lentz's method."""
    value, c, d = 1.0, 1.0, 0.0
    for i in range(1, 1000):
        m = i // 2
        if i % 2:
            term = -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
        else:
            term = m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m))
        d = 1.0 / ((1.0 + term * d) or _TINY)
        c = (1.0 + term / c) or _TINY
        value *= c * d
        if abs(c * d - 1) < 1e-15:
            break
    return value


def t_cdf(t: float, nu: float) -> float:
    """Probability that Student's t with `nu` degrees of freedom is below t."""
    if math.isinf(nu):
        return 0.5 * math.erfc(-t / math.sqrt(2))
    tail = 0.5 * incomplete_beta(nu / 2, 0.5, nu / (nu + t * t))
    return 1.0 - tail if t > 0 else tail


def t_quantile(p: float, nu: float) -> float:
    """The t that Student's t with `nu` > 0 degrees of freedom stays below with probability p."""
    if p < 0.5:
        return -t_quantile(1 - p, nu)
    low, high = 0.0, 2.0
    while t_cdf(high, nu) < p and high < 1e12:
        low, high = high, high * 2
    for _ in range(200):
        middle = (low + high) / 2
        if not low < middle < high:
            break
        low, high = (middle, high) if t_cdf(middle, nu) < p else (low, middle)
    return (low + high) / 2


def f_tail(f: float, above: float, below: float) -> float:
    """Probability that F with (above, below) degrees of freedom exceeds f."""
    if not f > 0:
        return 1.0
    return incomplete_beta(below / 2, above / 2, below / (below + above * f))
