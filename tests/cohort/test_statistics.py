"""The comparison of groups: error rates in simulated cohorts, refusals, families, bookkeeping."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from statsmodels.stats.multitest import multipletests

from ramulus import UnusableInputError
from ramulus._cohort_settings import CohortSettings
from ramulus.cohort.statistics import COMPARISON_COLUMNS, adjust, compare

PRIMARY = CohortSettings(primary_figures=("junction_exponent",))


def cohort(
    random,
    *,
    subjects=5,
    stacks=4,
    effect=0.0,
    groups=("control", "treated"),
    batches=1,
    batch_shift=0.0,
    spread_ratio=1.0,
):
    """Draw a nested cohort: subjects differ as much as their stacks do (ICC 0.5)."""
    rows = []
    for g, group in enumerate(groups):
        for k in range(subjects):
            batch = k % batches
            level = random.normal(0, spread_ratio**g) + effect * g + batch_shift * batch
            rows += [
                {
                    "sample": f"{group}-{k}-{i}",
                    "subject": f"{group}-{k}",
                    "group": group,
                    "batch": f"day {batch}",
                    "junction_exponent": level + random.normal(0, spread_ratio**g),
                }
                for i in range(stacks)
            ]
    return pd.DataFrame(rows).assign(status="done", rejected_by="")


def p_values(number, seed, settings=PRIMARY, **design):
    """Return the p values of our main tests and of the naive test, per simulated cohort."""
    random = np.random.default_rng(seed)
    found = []
    for _ in range(number):
        table = cohort(random, **design)
        row = compare(table, settings).iloc[0]
        first, second = (
            table.loc[table.group == g, "junction_exponent"] for g in ("control", "treated")
        )
        found.append((row.p, row.p_permutation, stats.ttest_ind(first, second).pvalue))
    return np.array(found, dtype=float)


@pytest.fixture
def no_second_opinions(monkeypatch):
    """Leave out the mixed model, whose fit takes most of the time; it does not touch p."""
    from ramulus.cohort import statistics
    from ramulus.quantities import Undefined

    monkeypatch.setattr(statistics, "mixed_model", lambda *_, **__: Undefined("left out"))


@pytest.mark.usefixtures("no_second_opinions")
def test_false_finds_in_a_thousand_nested_cohorts_stay_near_five_per_cent(record_property):
    welch, permuted, naive = np.mean(p_values(1000, seed=11) < 0.05, axis=0)
    record_property("type_one_error", {"welch": welch, "permutation": permuted, "naive": naive})
    print(f"type-I error: Welch {welch:.3f}, permutation {permuted:.3f}, naive t {naive:.3f}")
    assert 0.03 <= welch <= 0.07
    assert 0.03 <= permuted <= 0.07
    assert naive > 0.2  # the pooled test of single stacks, beside ours


@pytest.mark.slow
@pytest.mark.usefixtures("no_second_opinions")
@pytest.mark.parametrize(
    "design",
    [
        {"batches": 3, "batch_shift": 3.0, "subjects": 6},
        {"batches": 2, "batch_shift": 3.0, "spread_ratio": 3.0, "subjects": 6},
        {"spread_ratio": 3.0},
    ],
    ids=["batches", "batches and unequal spread", "unequal spread"],
)
def test_false_finds_stay_near_five_per_cent_with_batches_and_unequal_spread(design):
    welch = np.mean(p_values(1000, seed=12, stacks=2, **design)[:, 0] < 0.05)
    print(f"type-I error of Welch with {design}: {welch:.3f}")
    assert 0.03 <= welch <= 0.07


@pytest.mark.slow
def test_mixed_model_keeps_its_size_in_nested_cohorts():
    random = np.random.default_rng(13)
    p = [compare(cohort(random), PRIMARY).iloc[0].p_mixed for _ in range(1000)]
    assert 0.03 <= np.mean(np.array(p, dtype=float) < 0.05) <= 0.07


@pytest.mark.usefixtures("no_second_opinions")
def test_a_known_difference_is_found_as_often_as_the_power_says():
    # Subject means of four stacks have an SD of sqrt(1 + 1/4).
    random = np.random.default_rng(14)
    table = cohort(random)
    row = compare(table, PRIMARY).iloc[0]
    effect = row.smallest_effect_size * 1.25**0.5
    p = p_values(250, seed=15, effect=effect)[:, 0]
    assert np.mean(p < 0.05) == pytest.approx(0.8, abs=0.075)


@pytest.mark.usefixtures("no_second_opinions")
def test_intervals_cover_the_known_difference():
    random = np.random.default_rng(16)
    covered = 0
    for _ in range(250):
        row = compare(cohort(random, effect=2.0), PRIMARY).iloc[0]
        covered += row.estimate_low <= 2.0 <= row.estimate_high
    assert 0.92 <= covered / 250 <= 0.98


def test_row_of_a_plain_cohort_equals_scipy_on_subject_means():
    table = cohort(np.random.default_rng(1), effect=1.0)
    row = compare(table, PRIMARY).iloc[0]
    means = table.groupby(["group", "subject"])["junction_exponent"].mean()
    reference = stats.ttest_ind(means["treated"], means["control"], equal_var=False)
    assert row.p == pytest.approx(reference.pvalue)
    assert row.estimate == pytest.approx(means["treated"].mean() - means["control"].mean())
    assert (row.n_subjects_a, row.n_stacks_a) == (5, 20)
    assert (row.group_a, row.group_b, row.estimate_kind) == ("control", "treated", "difference b-a")
    assert row.method == "Welch t"
    assert 0 < row.icc < 1
    assert row.arrangements == 252  # 10 choose 5


def test_lengths_and_resistances_are_compared_as_ratios():
    table = cohort(np.random.default_rng(2), stacks=1)
    log_length = table["junction_exponent"] + 8
    table["total_length_um"] = np.exp(log_length)
    row = compare(table, CohortSettings()).set_index("figure").loc["total_length_um"]
    control = log_length[table.group == "control"].mean()
    treated = log_length[table.group == "treated"].mean()
    assert row.scale == "log"
    assert row.estimate == pytest.approx(np.exp(treated - control))
    assert row.mean_a == pytest.approx(np.exp(control))
    assert row.estimate_low < row.estimate < row.estimate_high
    assert row.smallest_estimate > 1


def test_a_length_of_zero_is_compared_on_the_linear_scale():
    table = cohort(np.random.default_rng(3), stacks=1)
    table["total_length_um"] = [0.0, *range(1, 10)]
    row = compare(table, CohortSettings()).set_index("figure").loc["total_length_um"]
    assert (row.scale, row.estimate_kind) == ("linear", "difference b-a")


def test_groups_that_share_no_batch_are_refused_with_the_reason():
    table = cohort(np.random.default_rng(4))
    table["batch"] = table["group"].map({"control": "May", "treated": "June"})
    row = compare(table, PRIMARY).iloc[0]
    assert pd.isna(row.p)
    assert pd.isna(row.p_adjusted)
    assert row.reason == ("group and batch cannot be told apart: control in May; treated in June")


def test_only_the_pair_that_shares_no_batch_is_refused():
    table = cohort(np.random.default_rng(5), groups=("a", "b", "c"))
    table.loc[table.group == "c", "batch"] = "another day"
    rows = compare(table, PRIMARY)
    assert rows.p.notna().tolist() == [True, False, False]  # a-b, a-c, b-c


def test_subjects_whose_batch_holds_one_group_are_left_out_and_it_is_said():
    table = cohort(np.random.default_rng(6))
    table.loc[table.subject == "control-0", "batch"] = "alone"
    row = compare(table, PRIMARY).iloc[0]
    assert (row.n_subjects_a, row.n_stacks_a, row.n_subjects_b) == (4, 16, 5)
    assert row.notes.startswith("1 subjects left out")
    without = table[table.subject != "control-0"]
    assert row.p == compare(without, PRIMARY).iloc[0].p


def test_too_few_subjects_are_a_row_with_a_reason_however_many_the_stacks():
    table = cohort(np.random.default_rng(7), subjects=1, stacks=50)
    row = compare(table, PRIMARY).iloc[0]
    assert pd.isna(row.p)
    assert "too few subjects: 1 and 1" in row.reason


def test_a_primary_figure_that_no_sample_has_is_a_row_with_a_reason():
    table = cohort(np.random.default_rng(8))
    rows = compare(table, CohortSettings(primary_figures=("loops",)))
    assert rows.figure.tolist() == ["loops", "junction_exponent"]
    assert rows.iloc[0].reason == "no subject of both groups has this figure"


def test_primary_figures_get_holm_and_the_rest_benjamini_hochberg():
    random = np.random.default_rng(9)
    table = cohort(random, effect=1.0)
    names = ("loops", "ends", "segments", "junctions", "ordered_fraction")
    for name in names:
        table[name] = random.normal(size=len(table))
    primary = ("junction_exponent", "loops")
    rows = compare(table, CohortSettings(primary_figures=primary)).set_index("figure")
    p = rows.p.astype(float)
    low, high = sorted(primary, key=lambda name: p[name])
    assert rows.role.to_dict() == {
        "junction_exponent": "primary", "loops": "primary", "segments": "secondary",
        "junctions": "secondary", "ends": "secondary", "ordered_fraction": "quality",
    }  # fmt: skip
    assert rows.p_adjusted[low] == pytest.approx(min(1, 2 * p[low]))
    assert rows.p_adjusted[high] == pytest.approx(max(min(1, 2 * p[low]), p[high]))
    rest = ["segments", "junctions", "ends"]
    assert rows.p_adjusted[rest].to_numpy(float) == pytest.approx(
        stats.false_discovery_control(p[rest])
    )
    assert rows.p_adjusted["ordered_fraction"] == p["ordered_fraction"]
    assert rows.n_tests.to_dict()["ends"] == 3


def test_benjamini_hochberg_finds_what_the_article_finds():
    # Source: Benjamini & Hochberg 1995, section 3.1: of these fifteen p values the procedure
    # rejects four at 0.05, Bonferroni's three (recalled from memory).
    p = np.array([0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240,
                  0.4262, 0.5719, 0.6528, 0.7590, 1.0])  # fmt: skip
    assert np.sum(adjust(p, rule="bh") <= 0.05) == 4
    assert np.sum(adjust(p, rule="holm") <= 0.05) == 3
    with pytest.raises(UnusableInputError, match="'sidak'"):
        adjust(p, rule="sidak")


@pytest.mark.parametrize(("rule", "theirs"), [("holm", "holm"), ("bh", "fdr_bh")])
def test_adjusted_p_equals_statsmodels(rule, theirs):
    random = np.random.default_rng(21)
    for number in (1, 2, 7, 30):
        p = np.round(random.uniform(0, 0.3, number), 2)  # with ties
        assert adjust(p, rule=rule) == pytest.approx(multipletests(p, method=theirs)[1])
    assert adjust(np.zeros(0), rule=rule).size == 0


def test_measurement_error_is_set_beside_the_spread_between_subjects():
    table = cohort(np.random.default_rng(10), stacks=1, effect=2.0)
    half = 1.959963984540054 * 0.5
    table["junction_exponent_low"] = table.junction_exponent - half
    table["junction_exponent_high"] = table.junction_exponent + half
    row = compare(table, PRIMARY).iloc[0]
    values = table.groupby("group")["junction_exponent"]
    assert row.measurement_share == pytest.approx(0.25 / values.var().mean())
    # Equal errors weigh all subjects alike: the estimate stays.
    assert row.estimate_weighted == pytest.approx(row.estimate)
    assert "mixed model: each subject has one stack" in row.notes


def test_measurement_errors_of_several_stacks_average_out():
    table = cohort(np.random.default_rng(11), stacks=4)
    half = 1.959963984540054
    table["junction_exponent_low"] = table.junction_exponent - half
    table["junction_exponent_high"] = table.junction_exponent + half
    row = compare(table, PRIMARY).iloc[0]
    means = table.groupby(["group", "subject"])["junction_exponent"].mean()
    spread = means.groupby("group").var().mean()
    assert row.measurement_share == pytest.approx((1 / 4) / spread)


def test_failed_rejected_and_groupless_samples_do_not_enter():
    table = cohort(np.random.default_rng(12))
    clean = compare(table, PRIMARY)
    strange = table.iloc[:3].copy()
    strange["sample"] = ["x", "y", "z"]
    strange["junction_exponent"] = 1e6
    strange["status"] = ["failed", "done", "done"]
    strange["rejected_by"] = ["", "snr_low", ""]
    strange["group"] = ["control", "control", ""]
    strange["subject"] = ["x", "y", "z"]
    both = pd.concat([table, strange], ignore_index=True)
    pd.testing.assert_frame_equal(compare(both, PRIMARY), clean)
    including = CohortSettings(primary_figures=("junction_exponent",), rejected="include")
    assert compare(both, including).iloc[0].n_subjects_a == 6


def test_the_reference_group_comes_first():
    table = cohort(np.random.default_rng(13), groups=("a", "b", "c"))
    rows = compare(table, CohortSettings(reference_group="c"))
    assert list(zip(rows.group_a, rows.group_b, strict=True)) == [
        ("c", "a"),
        ("c", "b"),
        ("a", "b"),
    ]
    with pytest.raises(UnusableInputError, match="'sham' is no group; found a, b, c"):
        compare(table, CohortSettings(reference_group="sham"))


def test_an_undefined_value_leaves_out_its_stack_only():
    table = cohort(np.random.default_rng(14))
    table.loc[0, "junction_exponent"] = np.nan
    row = compare(table, PRIMARY).iloc[0]
    assert (row.n_subjects_a, row.n_stacks_a) == (5, 19)


def test_one_group_gives_an_empty_table_with_all_columns():
    table = cohort(np.random.default_rng(15), groups=("only",))
    rows = compare(table, PRIMARY)
    assert len(rows) == 0
    assert list(rows) == list(COMPARISON_COLUMNS)


def test_result_does_not_depend_on_the_order_of_the_rows():
    table = cohort(np.random.default_rng(16), effect=1.0, batches=2)
    turned = table.iloc[::-1].reset_index(drop=True)
    settings = CohortSettings(primary_figures=("junction_exponent",), reference_group="control")
    one, other = compare(table, settings).iloc[0], compare(turned, settings).iloc[0]
    assert other.p == pytest.approx(one.p, rel=1e-9)
    assert other.p_permutation == one.p_permutation


def test_more_than_three_primary_figures_are_refused():
    with pytest.raises(ValueError, match="at most 3"):
        CohortSettings(primary_figures=("loops", "ends", "segments", "junctions"))
