"""Quantiles of the standard normal distribution, for compiled code."""

import math

from midspread.udfs.declaring import compiled


@compiled
def two_sided_quantile(confidence: float) -> float:
    """z such that a standard normal value lies within ±z with this probability, in (0, 1).

    Newton's method on erf, or on the logarithm of erfc far out, where it is nearly straight.
    """
    if confidence < 0.5:
        z = confidence
        for _ in range(60):
            density = math.sqrt(2.0 / math.pi) * math.exp(-z * z / 2)
            step = (math.erf(z / math.sqrt(2.0)) - confidence) / density
            z -= step
            if abs(step) <= 1e-16 * z:
                break
        return z
    outside = 1.0 - confidence
    z = math.sqrt(-2.0 * math.log(outside)) / 1.3
    for _ in range(60):
        tail = math.erfc(z / math.sqrt(2.0))
        density = math.sqrt(2.0 / math.pi) * math.exp(-z * z / 2)
        step = math.log(tail / outside) * tail / density
        z += step
        if abs(step) <= 2e-16 * z:
            break
    return z
