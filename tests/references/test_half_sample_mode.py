"""The half-sample mode against cases worked by hand from the papers, and known modes.

No general statistics library carries this estimator.
"""

import numpy as np
import pytest


@pytest.mark.parametrize(
    ("x", "expected"),
    [
        # Bickel & Frühwirth 2006, section 2: one value is itself, two give their mean,
        # of three the closer pair gives its mean, and the middle where both pairs are as close
        ([7.0], 7.0),
        ([3.0, 8.0], 5.5),
        ([1.0, 2.0, 4.0], 1.5),
        ([1.0, 3.0, 4.0], 3.5),
        ([1.0, 2.0, 3.0], 2.0),
        # six values, halves of three: 10-13-14 is the narrowest; then 13-14
        ([0.0, 5.0, 10.0, 13.0, 14.0, 30.0], 13.5),
        # seven values, halves of four: 4-5-6-8 (width 4); then halves of two: a tie of 4-5 and
        # 5-6, the span of both is 4-5-6, equally spaced: the middle
        ([0.0, 4.0, 5.0, 6.0, 8.0, 20.0, 50.0], 5.0),
        # more than half are equal
        ([2.0, 2.0, 2.0, 2.0, 9.0, 30.0], 2.0),
    ],
)
def test_worked_by_hand(estimate, x, expected):
    assert estimate("half_sample_mode", x) == expected


def test_ties_are_settled_as_documented(estimate):
    # an odd number of equally narrow halves: the middle one, [2, 3]
    assert estimate("half_sample_mode", [1, 2, 3, 4]) == 2.5
    # an even number far apart, [0, 1] and [5, 6]: midway, [1, 5]
    assert estimate("half_sample_mode", [0, 1, 5, 6]) == 3.0
    # decimals whose differences are equal but for rounding
    tenths = [0.1, 0.2, 0.3, 0.4, 0.6, 1.0]
    assert estimate("half_sample_mode", tenths) == pytest.approx(
        estimate("half_sample_mode", [10 * v for v in tenths]) / 10, rel=1e-15
    )


@pytest.mark.parametrize(
    ("name", "parameters", "mode"),
    [("lognormal", (0.0, 1.0), np.exp(-1.0)), ("gamma", (3.0, 10.0), 20.0), ("normal", (5, 2), 5)],
)
def test_finds_known_modes(estimate, generator, name, parameters, mode):
    # Modes by the textbook formulas exp(mu − sigma²), (shape − 1) scale, mu; the median of 25
    # samples, since one estimate varies much
    found = [
        estimate("half_sample_mode", getattr(generator, name)(*parameters, 2000)) for _ in range(25)
    ]
    spread = np.subtract(*np.percentile(getattr(generator, name)(*parameters, 2000), [75, 25]))
    assert abs(np.median(found) - mode) < 0.15 * spread
