"""Properties of the weighted median and the weighted trimmed mean."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from midspread.udfs.compiling import dispatcher
from midspread.udfs.declaring import null_mask
from midspread.udfs.location.weighted import weighted_median, weighted_trimmed_mean

pairs = st.lists(
    st.tuples(st.integers(-30, 30).map(float), st.integers(0, 6).map(float)),
    min_size=1,
    max_size=40,
).filter(lambda rows: any(w > 0 for _, w in rows))
shares = st.integers(0, 32).map(lambda i: i / 64)


def figure(kernel, rows, *parameters):
    rows = sorted(rows)
    x, w = (np.array(column, float) for column in zip(*rows, strict=True))
    return dispatcher(kernel)(x, w, *map(float, parameters))


def exact_median(rows):
    """Edgeworth's weighted median in exact arithmetic."""
    rows = [(Fraction(x), Fraction(w)) for x, w in sorted(rows) if w > 0]
    total = sum(w for _, w in rows)
    low = next(x for i, (x, _) in enumerate(rows) if 2 * sum(w for _, w in rows[: i + 1]) >= total)
    high = next(
        x
        for i, (x, _) in reversed(list(enumerate(rows)))
        if 2 * sum(w for _, w in rows[i:]) >= total
    )
    return (low + high) / 2


def exact_trimmed_mean(rows, share):
    """The mean of the middle part of the weight in exact arithmetic."""
    if share == 0.5:
        return exact_median(rows)
    total = sum(Fraction(w) for _, w in rows)
    cut = Fraction(share) * total
    reached = mass = moment = Fraction(0)
    for x, w in sorted(rows):
        before, reached = reached, reached + Fraction(w)
        kept = max(min(reached, total - cut) - max(before, cut), Fraction(0))
        mass += kept
        moment += kept * Fraction(x)
    return moment / mass


@settings(deadline=None)
@given(pairs)
def test_median_is_exact(rows):
    assert figure(weighted_median, rows) == float(exact_median(rows))


@settings(deadline=None)
@given(pairs, shares)
def test_trimmed_mean_is_exact(rows, share):
    assert figure(weighted_trimmed_mean, rows, share) == pytest.approx(
        float(exact_trimmed_mean(rows, share)), abs=1e-13
    )


@settings(deadline=None)
@given(pairs, st.sampled_from([1 / 3, 0.1, 1e-300, 1e300]), shares)
def test_weights_are_masses(rows, factor, share):
    scaled = [(x, w * factor) for x, w in rows]
    assert figure(weighted_median, scaled) == figure(weighted_median, rows)
    assert figure(weighted_trimmed_mean, scaled, share) == pytest.approx(
        figure(weighted_trimmed_mean, rows, share), abs=1e-12
    )


@settings(deadline=None)
@given(pairs, shares, st.lists(st.sampled_from([-math.inf, -50.0, 0.5, 99.0, math.inf])))
def test_weight_0_never_counts(rows, share, others):
    more = [*rows, *((x, 0.0) for x in others)]
    assert figure(weighted_median, more) == figure(weighted_median, rows)
    assert figure(weighted_trimmed_mean, more, share) == pytest.approx(
        figure(weighted_trimmed_mean, rows, share), abs=1e-13
    )


@settings(deadline=None)
@given(pairs, shares)
def test_mirrors(rows, share):
    mirrored = [(-x, w) for x, w in rows]
    assert figure(weighted_median, mirrored) == -figure(weighted_median, rows)
    assert figure(weighted_trimmed_mean, mirrored, share) == pytest.approx(
        -figure(weighted_trimmed_mean, rows, share), abs=1e-13
    )


def test_many_decimal_weights_split_evenly():
    # 1,000 times 0.1 below and above: the running sum is not a whole number in double
    rows = [(float(i), 0.1) for i in range(2000)]
    assert figure(weighted_median, rows) == 999.5


def test_a_weight_too_small_to_tip_the_balance():
    assert figure(weighted_median, [(1.0, 1.0), (2.0, 1e-20), (3.0, 1.0)]) == 2.0


def test_infinite_values_cut_away_do_no_harm():
    # 0.29 · 100 is just below 29 in double; the 29th value is cut all the same
    rows = [(-math.inf, 1.0)] * 29 + [(float(i), 1.0) for i in range(42)] + [(math.inf, 1.0)] * 29
    assert figure(weighted_trimmed_mean, rows, 0.29) == pytest.approx(20.5)
    assert figure(weighted_median, rows) == 20.5
    assert figure(weighted_trimmed_mean, rows, 0.28) != figure(weighted_trimmed_mean, rows, 0.28)
    assert figure(weighted_trimmed_mean, rows[:-1], 0.288) == -math.inf
    tenths = [(-math.inf, 0.1)] * 2 + [(7.0, 0.1)] * 6 + [(math.inf, 0.1)] * 2
    assert figure(weighted_trimmed_mean, tenths, 0.2) == pytest.approx(7.0)


def test_digits_hold_under_a_large_shift(generator):
    x = np.round(generator.gamma(2, 20, 1000) * 64) / 64
    w = generator.uniform(0, 1, 1000)
    found = figure(weighted_trimmed_mean, zip(x, w, strict=True), 0.1)
    shifted = figure(weighted_trimmed_mean, zip(x + 1e9, w, strict=True), 0.1)
    assert shifted - 1e9 == pytest.approx(found, abs=1.3e-7)


@pytest.mark.parametrize(
    ("rows", "expected"),
    [
        ([(4.0, 0.3)], 4.0),
        ([(4.0, 5e-324), (6.0, 0.0)], 4.0),
        ([(2.0, 0.0), (4.0, 5e-324)], 4.0),
        ([(4.0, 1.0), (6.0, 1.0)], 5.0),
        ([(4.0, 1.0), (6.0, math.inf)], math.nan),
        ([(math.inf, 1.0), (math.inf, 2.0)], math.inf),
    ],
)
def test_few_values(rows, expected):
    assert figure(weighted_median, rows) == pytest.approx(expected, nan_ok=True)
    assert figure(weighted_trimmed_mean, rows, 0.2) == pytest.approx(expected, nan_ok=True)


def test_no_weight_at_all_is_null():
    rows = [(1.0, 0.0), (2.0, 0.0)]
    answers = np.array([figure(weighted_median, rows), figure(weighted_trimmed_mean, rows, 0.2)])
    assert null_mask(answers).all()


def test_negative_weights_are_refused(estimate):
    for name in ("weighted_median", "weighted_trimmed_mean"):
        with pytest.raises(Exception, match=rf"{name}: weights must be 0 or more, got -1"):
            estimate(name, [1, 2, 3], [1, -1, 1])


def test_rows_with_a_null_on_either_side_are_left_out(estimate):
    x, w = [1.0, None, 3.0, 4.0, 50.0], [1.0, 9.0, None, 1.0, 1.0]
    assert estimate("weighted_median", x, w) == 4.0
    assert estimate("weighted_trimmed_mean", x, w, share=0.0) == pytest.approx(55 / 3)
