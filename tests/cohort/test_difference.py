"""Two-group tests against scipy, statsmodels, a published data set and brute force."""

from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import stats
from statsmodels.regression.linear_model import OLS
from statsmodels.stats.meta_analysis import effectsize_smd
from statsmodels.stats.power import TTestIndPower

from ramulus import UnusableInputError
from ramulus.cohort.difference import (
    comparable,
    hedges_g,
    hodges_lehmann,
    permutation_test,
    pooled_sd,
    smallest_detectable_g,
    welch_test,
)
from ramulus.quantities import Undefined

# Source: Student 1908, Biometrika 6:1-25, hours of sleep gained with two drugs (from memory).
SLEEP_1 = [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0]
SLEEP_2 = [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]


def two_groups(first, second):
    value = np.array([*first, *second], dtype=float)
    return value, np.arange(len(value)) >= len(first), np.zeros(len(value))


def test_welch_gives_the_known_answer_for_the_sleep_data():
    # Source: Welch's test of these data as printed in the manual of R's t.test (recalled from
    # memory): t = 1.8608 in size, df = 17.776, p = 0.07939, interval -0.2055 to 3.3655.
    test = welch_test(*two_groups(SLEEP_1, SLEEP_2))
    assert test.t == pytest.approx(1.8608, abs=5e-5)
    assert test.df == pytest.approx(17.776, abs=5e-4)
    assert test.p == pytest.approx(0.07939, abs=5e-6)
    assert (test.low, test.high) == pytest.approx((-0.2054832, 3.3654832), abs=1e-6)


def test_one_of_each_group_in_every_batch_is_the_paired_test():
    # Source: the paired test of the same data (recalled from memory): t = 4.0621, p = 0.002833.
    value, second, _ = two_groups(SLEEP_1, SLEEP_2)
    test = welch_test(value, second, np.tile(np.arange(10), 2))
    assert test.df == pytest.approx(9)
    assert test.t == pytest.approx(4.0621, abs=5e-5)
    assert test.p == pytest.approx(0.002833, abs=5e-7)


@given(
    first=hnp.arrays(float, st.integers(2, 8), elements=st.floats(-50, 50)),
    second=hnp.arrays(float, st.integers(2, 8), elements=st.floats(-50, 50)),
)
@settings(max_examples=60, deadline=None)
def test_welch_equals_scipy_for_any_two_groups(first, second):
    test = welch_test(*two_groups(first, second))
    if isinstance(test, Undefined) or min(np.ptp(first), np.ptp(second)) < 1e-3:
        return
    reference = stats.ttest_ind(second, first, equal_var=False)
    interval = reference.confidence_interval(0.95)
    assert test.p == pytest.approx(reference.pvalue, rel=1e-7, abs=1e-14)
    assert test.df == pytest.approx(reference.df, rel=1e-7)
    assert (test.low, test.high) == pytest.approx((interval.low, interval.high), rel=1e-6, abs=1e-9)


def test_within_batches_estimate_and_variance_equal_statsmodels_hc2():
    random = np.random.default_rng(3)
    batch = np.repeat(["a", "b", "c"], [7, 5, 6])
    second = np.array([0, 0, 0, 1, 1, 1, 1, 0, 0, 1, 1, 1, 0, 0, 0, 0, 1, 1], dtype=bool)
    value = random.normal(size=18) + (batch == "b") * 5 + second * random.normal(1, 2, 18)
    design = np.column_stack([second, batch == "a", batch == "b", batch == "c"]).astype(float)
    reference = OLS(value, design).fit(cov_type="HC2")
    test = welch_test(value, second, batch)
    assert test.estimate == pytest.approx(reference.params[0])
    assert test.t == pytest.approx(reference.params[0] / reference.bse[0])
    assert 3 < test.df <= 14


def test_a_shift_of_a_whole_batch_changes_nothing():
    random = np.random.default_rng(4)
    batch, second = np.repeat([0, 1, 2], 6), np.tile([False, True], 9)
    value = random.normal(size=18)
    shifted = value + 100.0 * batch
    assert welch_test(shifted, second, batch).p == pytest.approx(
        welch_test(value, second, batch).p, rel=1e-8
    )
    assert permutation_test(shifted, second, batch).p == permutation_test(value, second, batch).p
    assert hedges_g(shifted, second, batch).value == pytest.approx(
        hedges_g(value, second, batch).value, rel=1e-8
    )


def test_undefined_says_why():
    flat = welch_test(*two_groups([1, 1, 1], [2, 2, 2]))
    few = welch_test(*two_groups([1], [2, 3]))
    crowded = welch_test(np.arange(4.0), np.array([0, 1, 0, 1], bool), np.array([1, 1, 2, 3]))
    assert "same value" in flat.reason
    assert "1 and 2" in few.reason
    assert "3 batches" in crowded.reason
    assert not hedges_g(*two_groups([1, 1, 1], [2, 2, 2]))
    assert not hedges_g(*two_groups([1], [2]))
    assert not smallest_detectable_g(np.array([False, True]), np.zeros(2))
    assert not permutation_test(np.arange(3.0), np.ones(3, bool), np.zeros(3))


def test_one_flat_group_is_still_tested():
    test = welch_test(*two_groups([1.0, 1.0, 1.0], [2.0, 3.0, 4.0]))
    assert test.df == pytest.approx(2)  # the spread of the second group alone


@pytest.mark.parametrize("seed", range(4))
def test_exact_permutation_equals_brute_force_over_all_orders(seed):
    value, second, batch = two_groups(*np.random.default_rng(seed).normal(size=(2, 3)))
    observed = abs(value[second].mean() - value[~second].mean())
    orders = [np.array(order) for order in permutations(value)]
    extreme = [abs(o[second].mean() - o[~second].mean()) >= observed - 1e-12 for o in orders]
    result = permutation_test(value, second, batch)
    assert result.p == pytest.approx(np.mean(extreme))
    assert (result.arrangements, result.exact) == (20, True)


def test_permutation_within_batches_equals_brute_force():
    random = np.random.default_rng(8)
    value = random.normal(size=7)
    batch = np.array([0, 0, 0, 0, 1, 1, 1])
    second = np.array([1, 0, 1, 0, 1, 0, 0], dtype=bool)

    def fitted(ordered):
        design = np.column_stack([second, batch == 0, batch == 1]).astype(float)
        return abs(np.linalg.lstsq(design, ordered, rcond=None)[0][0])

    drawn = [
        fitted(np.array([*left, *right]))
        for left in permutations(value[:4])
        for right in permutations(value[4:])
    ]
    result = permutation_test(value, second, batch)
    assert result.p == pytest.approx(np.mean(np.array(drawn) >= fitted(value) - 1e-12))
    assert result.arrangements == 6 * 3


def test_permutation_equals_scipy_on_the_absolute_difference():
    value, second, batch = two_groups(SLEEP_1[:6], SLEEP_2[:7])
    reference = stats.permutation_test(
        (value[second], value[~second]),
        lambda x, y, axis: np.abs(np.mean(x, axis=axis) - np.mean(y, axis=axis)),
        alternative="greater",
        n_resamples=np.inf,
        vectorized=True,
    )
    assert permutation_test(value, second, batch).p == pytest.approx(reference.pvalue)


def test_three_against_three_cannot_reach_five_per_cent():
    # Two of the twenty arrangements are as far apart as can be.
    result = permutation_test(*two_groups([1, 2, 3], [10, 11, 12]))
    assert (result.p, result.floor) == (0.1, 0.1)


def test_drawn_permutations_agree_with_listed_ones_and_repeat():
    data = two_groups(SLEEP_1, SLEEP_2)
    listed = permutation_test(*data)
    drawn = permutation_test(*data, exact_limit=10, random_permutations=20_000, seed=5)
    assert listed.exact
    assert not drawn.exact
    assert listed.arrangements == 184_756  # 20 choose 10
    assert drawn.p == pytest.approx(listed.p, abs=4 * (listed.p * (1 - listed.p) / 20_000) ** 0.5)
    assert drawn == permutation_test(*data, exact_limit=10, random_permutations=20_000, seed=5)


def test_hodges_lehmann_is_the_median_of_differences_within_batches():
    value = np.array([1.0, 2.0, 7.0, 100.0, 105.0])
    second = np.array([False, False, True, False, True])
    # Differences: 7 - 1, 7 - 2 in the first batch, 105 - 100 in the second.
    assert hodges_lehmann(value, second, np.array([0, 0, 0, 1, 1])) == 5.0
    with pytest.raises(UnusableInputError, match="none with both"):
        hodges_lehmann(value[:4], second[:4], np.arange(4))


def test_hedges_g_is_near_statsmodels_which_rounds_the_small_sample_factor():
    value, second, batch = two_groups(SLEEP_1, SLEEP_2)
    reference, _ = effectsize_smd(
        np.mean(SLEEP_2), np.std(SLEEP_2, ddof=1), 10, np.mean(SLEEP_1), np.std(SLEEP_1, ddof=1), 10
    )
    assert hedges_g(value, second, batch).value == pytest.approx(reference, rel=1e-3)


def test_interval_of_g_puts_the_observed_t_at_both_tails():
    value, second, batch = two_groups(SLEEP_1, SLEEP_2)
    g = hedges_g(value, second, batch)
    t = stats.ttest_ind(SLEEP_2, SLEEP_1).statistic
    factor = g.value / (t * np.sqrt(2 / 10))
    for bound, tail in ((g.low, 0.975), (g.high, 0.025)):
        assert stats.nct.cdf(t, 18, bound / factor / np.sqrt(2 / 10)) == pytest.approx(
            tail, abs=1e-6
        )


def test_interval_of_g_covers_the_truth_at_its_level():
    random = np.random.default_rng(12)
    truth, covered = 1.2, 0
    for _ in range(400):
        g = hedges_g(*two_groups(random.normal(size=5), random.normal(truth, 1, size=6)))
        factor = 1 - 3 / (4 * 9 - 1)  # the bias that is taken out of the bounds, too
        covered += g.low / factor <= truth <= g.high / factor
    assert 0.92 <= covered / 400 <= 0.98


@pytest.mark.parametrize(("n_first", "n_second"), [(3, 3), (5, 5), (4, 9), (20, 20)])
@pytest.mark.parametrize("alpha", [0.05, 0.05 / 3])
def test_smallest_detectable_effect_equals_statsmodels(n_first, n_second, alpha):
    _, second, batch = two_groups(np.zeros(n_first), np.zeros(n_second))
    reference = TTestIndPower().solve_power(
        nobs1=n_first, alpha=alpha, power=0.8, ratio=n_second / n_first, alternative="two-sided"
    )
    assert smallest_detectable_g(second, batch, alpha=alpha) == pytest.approx(reference, rel=1e-3)


def test_pooled_sd_is_the_root_of_the_pooled_variance():
    value, second, batch = two_groups([1, 2, 3], [3, 5, 7])
    assert pooled_sd(value, second, batch) == pytest.approx(np.sqrt((2 * 1 + 2 * 4) / 4))
    assert np.isnan(pooled_sd(value[[0, 3]], second[[0, 3]], batch[:2]))


def test_batches_with_one_group_tell_nothing():
    second = np.array([True, True, False, False])
    assert not comparable(second, np.array(["x", "x", "y", "y"])).any()
    assert comparable(second, np.array(["x", "y", "y", "z"])).tolist() == [False, True, True, False]
