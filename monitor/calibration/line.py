"""The straight line of common practice, with the doubt of reading it backwards.

References: Draper and Smith, Applied Regression Analysis, 3rd ed. (1998), 3.2; EURACHEM/CITAC
Guide CG 4 (QUAM), 3rd ed. (2012), A5.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from monitor.blocks import Floats


@dataclass(frozen=True)
class Line:
    """y = a + b x, fitted by weighted least squares to n points."""

    a: float
    b: float
    s: float  # residual standard deviation of unit weight
    n: int
    weight: float  # sum of the weights
    mean_x: float
    mean_y: float
    s_xx: float  # weighted sum of squares of x about its mean

    @property
    def u_b(self) -> float:
        """Standard uncertainty of the slope."""
        return self.s / math.sqrt(self.s_xx)

    @property
    def u_a(self) -> float:
        """Standard uncertainty of the intercept."""
        return self.s * math.sqrt(1 / self.weight + self.mean_x**2 / self.s_xx)

    def at(self, x: float) -> tuple[float, float]:
        """y there and its standard uncertainty, that of the line alone."""
        u = self.s * math.sqrt(1 / self.weight + (x - self.mean_x) ** 2 / self.s_xx)
        return self.a + self.b * x, u

    def inverse(self, y: float, means_of: float = 1.0) -> tuple[float, float]:
        """x that reads y, and its standard uncertainty; y is a mean of so many (their weight)."""
        x = (y - self.a) / self.b
        away = (y - self.mean_y) ** 2 / (self.b**2 * self.s_xx)
        return x, self.s / abs(self.b) * math.sqrt(1 / means_of + 1 / self.weight + away)

    def fieller(self, y: float, t: float, means_of: float = math.inf) -> tuple[float, float]:
        """Exact limits of x for Student's t; `means_of` infinite where y is a mean response."""
        g = (t * self.s / self.b) ** 2 / self.s_xx
        d = (y - self.mean_y) / self.b
        root = math.sqrt((1 / means_of + 1 / self.weight) * (1 - g) + d**2 / self.s_xx)
        half = t * self.s / abs(self.b) * root
        return self.mean_x + (d - half) / (1 - g), self.mean_x + (d + half) / (1 - g)


def line(x: Floats, y: Floats, weight: Floats | None = None) -> Line:
    """The line through at least three points that do not share one x."""
    w = np.ones_like(x) if weight is None else weight
    total = float(w.sum())
    mean_x, mean_y = float((w * x).sum()) / total, float((w * y).sum()) / total
    s_xx = float((w * (x - mean_x) ** 2).sum())
    b = float((w * (x - mean_x) * (y - mean_y)).sum()) / s_xx
    a = mean_y - b * mean_x
    left = float((w * (y - a - b * x) ** 2).sum())
    return Line(a, b, math.sqrt(left / (len(x) - 2)), len(x), total, mean_x, mean_y, s_xx)
