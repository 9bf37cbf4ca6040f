"""Outliers, batch effects and planning."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.formula.api import ols
from statsmodels.stats.anova import anova_lm
from statsmodels.stats.power import TTestIndPower

from ramulus._cohort_settings import CohortSettings
from ramulus.cohort.diagnostics import batch_effects, outliers, plan, quality_links
from ramulus.cohort.figures import FIGURES

SETTINGS = CohortSettings()


def table_of(value, *, group, batch="", subject=None, figure="junction_exponent"):
    number = len(value)
    samples = [f"s{k}" for k in range(number)]
    return pd.DataFrame(
        {
            "sample": samples,
            "subject": subject if subject is not None else samples,
            "group": group,
            "batch": batch,
            "status": "done",
            "rejected_by": "",
            figure: value,
        }
    )


def test_a_subject_far_from_its_own_group_is_listed():
    value = [1.0, 1.1, 0.9, 1.05, 5.0, 5.1, 4.9, 9.0]
    found = outliers(table_of(value, group=["a"] * 4 + ["b"] * 4), SETTINGS)
    assert found[["subject", "value", "group_median"]].to_numpy().tolist() == [["s7", 9.0, 5.05]]
    # 0.6745 * 3.95 over the median of the distances 0.025 0.075 0.125 0.025 0.05 0.05 0.15 3.95
    assert found["score"].iloc[0] == pytest.approx(0.6745 * 3.95 / 0.0625)


def test_lengths_are_judged_as_ratios():
    value = np.exp([1.0, 1.1, 0.9, 1.05, 5.0, 5.1, 4.9, 9.0])
    table = table_of(value, group=["a"] * 4 + ["b"] * 4, figure="total_length_um")
    found = outliers(table, SETTINGS)
    assert found["score"].iloc[0] == pytest.approx(0.6745 * 3.95 / 0.0625)
    assert found["value"].iloc[0] == pytest.approx(np.exp(9.0))


def test_three_subjects_or_equal_ones_are_no_ground_for_outliers():
    assert outliers(table_of([1.0, 2.0, 99.0], group=["a"] * 3), SETTINGS).empty
    assert outliers(table_of([1.0] * 7 + [2.0], group=["a"] * 8), SETTINGS).empty


def test_batch_effect_equals_the_analysis_of_variance_of_statsmodels():
    random = np.random.default_rng(1)
    group, batch = np.tile(["a", "b"], 9), np.repeat(["x", "y", "z"], 6)
    value = random.normal(size=18) + (batch == "y")
    table = table_of(value, group=group, batch=batch)
    effect = batch_effects(table, SETTINGS).iloc[0]
    reference = anova_lm(
        ols("junction_exponent ~ C(group)", table).fit(),
        ols("junction_exponent ~ C(group) + C(batch)", table).fit(),
    ).iloc[1]
    assert effect["f"] == pytest.approx(reference["F"])
    assert effect["p"] == pytest.approx(reference["Pr(>F)"])
    assert effect["n_batches"] == 3
    assert 0 < effect["share"] < 1


def test_one_batch_or_confounded_batches_have_no_effect_to_test():
    value = np.random.default_rng(2).normal(size=8)
    group = ["a"] * 4 + ["b"] * 4
    assert batch_effects(table_of(value, group=group), SETTINGS).empty
    assert batch_effects(table_of(value, group=group, batch=group), SETTINGS).empty


def test_plan_shows_what_subjects_and_stacks_would_give():
    random = np.random.default_rng(3)
    subject = np.repeat([f"m{k}" for k in range(40)], 3)
    level = np.repeat(random.normal(0, 1, 40), 3)
    table = table_of(level + random.normal(0, 1, 120), group="a", subject=subject)
    planned = plan(table, FIGURES["junction_exponent"], SETTINGS)
    few = planned.set_index(["n_subjects", "n_stacks"])["smallest_estimate"]
    d = TTestIndPower().solve_power(nobs1=6, alpha=0.05, power=0.8)
    assert few[6, 2] == pytest.approx(d * 1.5**0.5, rel=0.25)  # true variances 1 and 1
    assert few[6, 8] > few[10, 8]
    # Stacks do not replace subjects: eight times the stacks gain less than twice the subjects.
    assert few[10, 1] < few[5, 8]


def test_plan_needs_repeats():
    table = table_of([1.0, 2.0, 3.0], group="a")
    assert plan(table, FIGURES["junction_exponent"], SETTINGS).empty


def test_a_figure_that_follows_the_resolution_is_shown():
    random = np.random.default_rng(4)
    group = np.repeat(["a", "b"], 8)
    radius = np.exp(random.normal(0, 0.3, 16))
    table = table_of(2 * np.log(radius) + 5 * (group == "b"), group=group)
    table = table.assign(smallest_resolved_radius_um=radius, spacing_z_um=1.0, shape_z=100)
    settings = CohortSettings(primary_figures=("junction_exponent",))
    links = quality_links(table, settings)
    # Twice the logarithm: the same order within the groups, whose means are taken out.
    assert links.to_numpy().tolist()[0][:3] == [
        "junction_exponent", "smallest_resolved_radius_um", 16
    ]  # fmt: skip
    assert links["rho"].iloc[0] == pytest.approx(1.0)
    assert len(links) == 1  # the spacing and the depth do not vary


def test_links_need_a_primary_figure_and_some_subjects():
    table = table_of([1.0, 2.0, 3.0], group="a").assign(smallest_resolved_radius_um=[1, 2, 3])
    assert quality_links(table, SETTINGS).empty
    primary = CohortSettings(primary_figures=("junction_exponent",))
    assert quality_links(table.assign(shape_z=1, spacing_z_um=1.0), primary).empty
