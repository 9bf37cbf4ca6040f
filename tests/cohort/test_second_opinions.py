"""Mixed model, precision weights and repeatability against statsmodels and published data."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.formula.api import mixedlm
from statsmodels.regression.linear_model import WLS
from statsmodels.stats.meta_analysis import combine_effects

from ramulus.cohort.difference import design_matrix, welch_test
from ramulus.cohort.second_opinions import (
    mixed_model,
    precision_weighted,
    spread_of_stacks,
    variance_among_subjects,
)

# Source: Shrout & Fleiss 1979, Psychol Bull 86:420-428, table 2: six targets, four judges; the
# article gives ICC(1,1) = 0.17 (recalled from memory).
JUDGES = [[9, 2, 5, 8], [6, 1, 3, 2], [8, 4, 6, 8], [7, 1, 2, 6], [10, 5, 6, 9], [6, 2, 4, 7]]

# Source: Pinheiro & Bates 2000, Mixed-Effects Models in S and S-PLUS, section 1.1: travel times in
# six rails; restricted likelihood gives SDs of 24.805 and 4.0208 (recalled from memory).
RAILS = [[55, 53, 54], [26, 37, 32], [78, 91, 85], [92, 100, 96], [49, 51, 50], [80, 85, 83]]


def stacked(table):
    value = np.array(table, dtype=float)
    return value.ravel(), np.repeat(np.arange(len(table)), value.shape[1])


def nested(random, *, subjects=10, stacks=3, effect=0.0, icc=0.6):
    subject = np.repeat(np.arange(subjects), stacks)
    second = subject >= subjects // 2
    level = random.normal(0, icc**0.5, subjects)[subject]
    value = level + random.normal(0, (1 - icc) ** 0.5, len(subject)) + effect * second
    return value, second, subject, np.zeros(len(subject))


def test_icc_of_the_judges_is_the_published_one():
    value, target = stacked(JUDGES)
    spread = spread_of_stacks(value, target, np.zeros(len(value)))
    assert spread.icc == pytest.approx(0.17, abs=0.005)


def test_variances_of_the_rails_are_the_published_ones():
    value, rail = stacked(RAILS)
    spread = spread_of_stacks(value, rail, np.zeros(len(value)))
    assert spread.among_subjects**0.5 == pytest.approx(24.805, abs=0.001)
    assert spread.among_stacks**0.5 == pytest.approx(4.0208, abs=0.0001)


def test_means_of_the_groups_do_not_enter_the_repeatability():
    value, rail = stacked(RAILS)
    group = rail % 2
    shifted = value + 1000.0 * group
    assert spread_of_stacks(shifted, rail, group).icc == pytest.approx(
        spread_of_stacks(value, rail, group).icc
    )


def test_unequal_numbers_of_stacks_give_unbiased_variances():
    random = np.random.default_rng(2)
    subject = np.repeat(np.arange(12), [1, 2, 3, 4, 5, 6, 1, 2, 3, 4, 5, 6])
    group = (subject >= 6).astype(int)
    found = []
    for _ in range(600):
        value = random.normal(0, 2, 12)[subject] + random.normal(0, 1, len(subject))
        spread = spread_of_stacks(value, subject, group)
        found.append((spread.among_subjects, spread.among_stacks))
    assert np.mean(found, axis=0) == pytest.approx([4.0, 1.0], rel=0.06)


def test_repeatability_needs_repeats():
    assert "more than one stack" in spread_of_stacks(*[np.arange(3.0)] * 2, np.zeros(3)).reason
    assert "more than one subject" in spread_of_stacks(np.arange(2.0), *[np.zeros(2)] * 2).reason
    flat = spread_of_stacks(np.ones(4), np.array([0, 0, 1, 1]), np.zeros(4))
    assert "same value" in flat.icc.reason


def test_mixed_model_equals_the_formula_interface_of_statsmodels():
    value, second, subject, batch = nested(np.random.default_rng(5), effect=1.0)
    frame = pd.DataFrame({"y": value, "g": second.astype(int), "s": subject})
    reference = mixedlm("y ~ g", frame, groups=frame["s"]).fit(reml=True)
    fit = mixed_model(value, second, subject, batch)
    assert fit.estimate == pytest.approx(reference.params["g"], rel=1e-5)
    assert fit.t == pytest.approx(reference.tvalues["g"], rel=1e-3)
    assert fit.df == 8  # ten subjects less two means


def test_balanced_stacks_make_mixed_model_and_subject_means_agree():
    value, second, subject, batch = nested(np.random.default_rng(6), effect=1.0)
    means = value.reshape(10, 3).mean(axis=1)
    plain = welch_test(means, np.arange(10) >= 5, np.zeros(10))
    fit = mixed_model(value, second, subject, batch)
    assert fit.estimate == pytest.approx(plain.estimate, rel=1e-6)
    assert fit.t == pytest.approx(plain.t, rel=1e-3)


@pytest.mark.parametrize("scale", [1e-12, 1.0, 1e15])
def test_mixed_model_does_not_mind_the_unit(scale):
    value, second, subject, batch = nested(np.random.default_rng(7), effect=0.5)
    fit = mixed_model(value * scale, second, subject, batch)
    assert fit.p == pytest.approx(mixed_model(value, second, subject, batch).p, rel=1e-4)


def test_mixed_model_says_why_it_is_not_given():
    value, second, subject, batch = nested(np.random.default_rng(8), stacks=1)
    assert "one stack" in mixed_model(value, second, subject, batch).reason
    value, second, subject, batch = nested(np.random.default_rng(8), subjects=2)
    assert "too few subjects" in mixed_model(value, second, subject, batch).reason
    value, second, subject, batch = nested(np.random.default_rng(8))
    assert "same value" in mixed_model(np.ones_like(value), second, subject, batch).reason


def test_variance_among_subjects_equals_the_iterated_estimate_of_statsmodels():
    random = np.random.default_rng(9)
    sd = random.uniform(0.2, 1.0, 12)
    value = random.normal(0, 0.8, 12) + random.normal(0, sd)
    reference = combine_effects(value, sd**2, method_re="iterated")
    assert variance_among_subjects(value, sd, np.ones((12, 1))) == pytest.approx(
        reference.tau2, rel=1e-4
    )


def test_precision_weighted_equals_weighted_least_squares():
    random = np.random.default_rng(10)
    sd = random.uniform(0.1, 1.5, 14)
    second, batch = np.arange(14) % 2 == 1, np.arange(14) // 7
    value = random.normal(0, 1, 14) + random.normal(0, sd) + second
    design = design_matrix(second, batch)
    weight = 1 / (variance_among_subjects(value, sd, design) + sd**2)
    reference = WLS(value, design, weights=weight).fit()
    test = precision_weighted(value, sd, second, batch)
    assert test.estimate == pytest.approx(reference.params[0])
    assert test.t == pytest.approx(reference.tvalues[0], rel=1e-6)
    assert test.p == pytest.approx(reference.pvalues[0], rel=1e-5)


def test_measurement_that_explains_all_spread_is_never_made_surer_than_it_says():
    value, second = np.array([0.0, 0.1, 0.0, 0.1]), np.arange(4) > 1
    test = precision_weighted(value, np.full(4, 1.0), second, np.zeros(4))
    # Two means of two measurements of SD 1 each: their difference has an SD of 1.
    assert test.t == pytest.approx(test.estimate / 1.0)


def test_a_poorly_measured_subject_counts_little():
    value = np.array([1.0, 1.1, 0.9, 2.0, 2.1, 1.9, 50.0])
    sd = np.array([0.1, 0.1, 0.1, 0.1, 0.1, 0.1, 100.0])
    test = precision_weighted(value, sd, np.arange(7) > 2, np.zeros(7))
    assert test.estimate == pytest.approx(1.0, abs=0.01)


def test_weights_need_all_intervals():
    test = precision_weighted(
        np.arange(4.0), np.array([1, 1, 1, np.nan]), np.arange(4) > 1, np.zeros(4)
    )
    assert "interval" in test.reason
