"""Compare the groups of a cohort: subjects are what is counted, never stacks or vessels."""

from itertools import combinations
from typing import Any

import numpy as np
import pandas as pd

from .._cohort_settings import CohortSettings
from ..errors import UnusableInputError
from ..quantities import Estimate, Undefined
from .difference import (
    GroupTest,
    Permutation,
    comparable,
    hedges_g,
    hodges_lehmann,
    permutation_test,
    pooled_sd,
    smallest_detectable_g,
    welch_test,
)
from .figures import Figure
from .second_opinions import mixed_model, precision_weighted, spread_of_stacks
from .values import Values, by_subject, figures_of, group_names, stack_values

__all__ = ["COMPARISON_COLUMNS", "adjust", "compare"]

COMPARISON_COLUMNS = (
    "figure", "role", "group_a", "group_b", "n_subjects_a", "n_subjects_b", "n_stacks_a",
    "n_stacks_b", "scale", "mean_a", "mean_b", "estimate_kind", "estimate", "estimate_low",
    "estimate_high", "hodges_lehmann", "effect_size", "effect_size_low", "effect_size_high", "p",
    "p_adjusted", "adjustment", "n_tests", "method", "p_permutation", "p_permutation_floor",
    "arrangements", "estimate_mixed", "estimate_mixed_low", "estimate_mixed_high", "p_mixed",
    "estimate_weighted", "estimate_weighted_low", "estimate_weighted_high", "p_weighted",
    "measurement_share", "icc", "smallest_effect_size", "smallest_estimate", "level", "reason",
    "notes",
)  # fmt: skip
_FAMILIES = (
    ("primary", "holm", "Holm"),
    ("secondary", "bh", "Benjamini-Hochberg"),
    ("quality", "bh", "Benjamini-Hochberg"),
)


def compare(table: pd.DataFrame, settings: CohortSettings) -> pd.DataFrame:
    """Compare every figure between every pair of groups.

    One value per subject (the mean of its stacks, of logarithms for lengths, diameters, flows and
    resistances). The main test is Welch's, within batches; beside it an exact permutation test
    within batches, a mixed model of the single stacks, and the comparison weighted by measurement
    error. P values are adjusted in families: Holm for the primary figures, Benjamini & Hochberg for
    the rest and, apart, for the figures of image quality.

    Parameters
    ----------
    table : DataFrame
        The cohort's table (`cohort.csv`): sample, subject, group, batch, status, rejected_by, and
        each figure with `_low` and `_high`.
    settings : CohortSettings
        Primary figures, level, power.

    Returns
    -------
    DataFrame
        A row per figure and pair of groups with COMPARISON_COLUMNS; where nothing can be said the
        cells are empty and `reason` tells why.

    Raises
    ------
    UnusableInputError
        If the reference group is not in the table.

    Examples
    --------
    >>> table = pd.DataFrame({"sample": list("abcdef"), "subject": list("abcdef"), "batch": "",
    ...     "group": ["control"] * 3 + ["treated"] * 3, "status": "done", "rejected_by": "",
    ...     "junction_exponent": [2.9, 3.0, 3.1, 2.4, 2.5, 2.6]})
    >>> row = compare(table, CohortSettings(primary_figures=("junction_exponent",))).iloc[0]
    >>> row.role, round(float(row.estimate), 3), round(float(row.p), 4)
    ('primary', -0.5, 0.0036)
    """
    pairs = list(combinations(group_names(table, settings), 2))
    n_primary = len(settings.primary_figures) * len(pairs)
    rows: list[dict[str, Any]] = []
    for figure in figures_of(table, settings):
        stacks = stack_values(table, figure, settings)
        role = _role(figure, settings)
        share = n_primary if role == "primary" else 1
        for pair in pairs:
            head = {"figure": figure.name, "role": role, "level": settings.level}
            alpha = (1 - settings.level) / share
            rows.append(head | _pair_row(stacks, pair, alpha, settings))
    return pd.DataFrame(_adjusted(rows), columns=list(COMPARISON_COLUMNS), dtype=object)


def _role(figure: Figure, settings: CohortSettings) -> str:
    if figure.name in settings.primary_figures:
        return "primary"
    return "quality" if figure.role == "quality" else "secondary"


def _pair_row(
    stacks: Values, pair: tuple[str, str], alpha: float, settings: CohortSettings
) -> dict[str, Any]:
    """Return one comparison, or its refusal with the reason."""
    stacks = stacks.where(np.isin(stacks.group, pair))
    subjects = by_subject(stacks)
    row = _counts(subjects, pair) | {"scale": subjects.scale}
    kept = comparable(subjects.group == pair[1], subjects.batch)
    both = set(pair) <= set(subjects.group)
    if both and not kept.any():
        return row | {"reason": _confounded(subjects, pair)}
    left_out = int(np.sum(~kept)) if both else 0
    subjects = subjects.where(kept)
    stacks = stacks.where(np.isin(stacks.subject, subjects.subject))
    if both:
        row |= _counts(subjects, pair)
    test = _welch(subjects, pair, settings)
    if isinstance(test, Undefined):
        return row | {"reason": test.reason}
    notes = [f"{left_out} subjects left out: their batch holds one group"] if left_out else []
    row |= _main_results(subjects, test, pair, alpha, settings)
    row |= _permutation(subjects, pair, alpha, settings, notes)
    row |= _second_results(subjects, stacks, pair, settings, notes)
    return row | {"notes": "; ".join(notes)}


def _counts(subjects: Values, pair: tuple[str, str]) -> dict[str, Any]:
    counts: dict[str, Any] = {"group_a": pair[0], "group_b": pair[1]}
    for letter, name in zip("ab", pair, strict=True):
        counts[f"n_subjects_{letter}"] = int(np.sum(subjects.group == name))
        counts[f"n_stacks_{letter}"] = int(np.sum(subjects.stacks[subjects.group == name]))
    return counts


def _confounded(subjects: Values, pair: tuple[str, str]) -> str:
    """Say which batches each group has, none of them shared."""
    listed = (
        f"{name} in {', '.join(sorted(set(subjects.batch[subjects.group == name])))}"
        for name in pair
    )
    return f"group and batch cannot be told apart: {'; '.join(listed)}"


def _welch(
    subjects: Values, pair: tuple[str, str], settings: CohortSettings
) -> GroupTest | Undefined:
    if not len(subjects.value):
        return Undefined("no subject of both groups has this figure")
    second = subjects.group == pair[1]
    return welch_test(subjects.value, second, subjects.batch, level=settings.level)


def _main_results(
    subjects: Values, test: GroupTest, pair: tuple[str, str], alpha: float, settings: CohortSettings
) -> dict[str, Any]:
    second = subjects.group == pair[1]
    arrays = subjects.value, second, subjects.batch
    smallest = smallest_detectable_g(second, subjects.batch, alpha=alpha, power=settings.power)
    batches = len(set(subjects.batch))
    results: dict[str, Any] = {
        "mean_a": subjects.shown(float(subjects.value[~second].mean())),
        "mean_b": subjects.shown(float(subjects.value[second].mean())),
        "estimate_kind": "ratio b/a" if subjects.scale == "log" else "difference b-a",
        "hodges_lehmann": subjects.shown(hodges_lehmann(*arrays)),
        "method": "Welch t" if batches == 1 else f"Welch t within {batches} batches",
    }
    results |= _shown(test, "", subjects)
    g = hedges_g(*arrays, level=settings.level)
    if isinstance(g, Estimate):
        results |= {
            "effect_size": g.value, "effect_size_low": g.low, "effect_size_high": g.high
        }  # fmt: skip
    if not isinstance(smallest, Undefined):
        results["smallest_effect_size"] = smallest
        results["smallest_estimate"] = subjects.shown(smallest * pooled_sd(*arrays))
    return results


def _shown(test: GroupTest, kind: str, subjects: Values) -> dict[str, float]:
    """Return the cells of one test as printed."""
    return {
        f"estimate{kind}": subjects.shown(test.estimate),
        f"estimate{kind}_low": subjects.shown(test.low),
        f"estimate{kind}_high": subjects.shown(test.high),
        f"p{kind}": test.p,
    }


def _permutation(
    subjects: Values,
    pair: tuple[str, str],
    alpha: float,
    settings: CohortSettings,
    notes: list[str],
) -> dict[str, Any]:
    result = permutation_test(
        subjects.value,
        subjects.group == pair[1],
        subjects.batch,
        exact_limit=settings.exact_limit,
        random_permutations=settings.random_permutations,
        seed=settings.seed,
    )
    if not isinstance(result, Permutation):
        notes.append(f"permutation: {result.reason}")
        return {}
    if result.floor > alpha:
        notes.append(f"permutation: so few subjects cannot give p below {result.floor:.3g}")
    if not result.exact:
        notes.append(f"permutation: {result.arrangements} arrangements drawn, not listed")
    return {
        "p_permutation": result.p,
        "p_permutation_floor": result.floor,
        "arrangements": result.arrangements,
    }


def _second_results(
    subjects: Values,
    stacks: Values,
    pair: tuple[str, str],
    settings: CohortSettings,
    notes: list[str],
) -> dict[str, Any]:
    """Return the mixed model, the comparison weighted by measurement error, and the ICC."""
    results: dict[str, Any] = {}
    second = subjects.group == pair[1]
    weighted = precision_weighted(
        subjects.value, subjects.measurement_sd, second, subjects.batch, level=settings.level
    )
    # The mixed model takes the subject's batch, so that it fits the same model as the main test.
    batch = dict(zip(subjects.subject, subjects.batch, strict=True))
    mixed = mixed_model(
        stacks.value,
        stacks.group == pair[1],
        stacks.subject,
        np.array([batch[name] for name in stacks.subject]),
        level=settings.level,
    )
    for kind, words, test in (
        ("_mixed", "mixed model", mixed),
        ("_weighted", "weighted", weighted),
    ):
        if isinstance(test, GroupTest):
            results |= _shown(test, kind, subjects)
        else:
            notes.append(f"{words}: {test.reason}")
    known = subjects.measurement_sd[np.isfinite(subjects.measurement_sd)]
    if len(known):
        spread = pooled_sd(subjects.value, second, subjects.batch)
        results["measurement_share"] = float(np.mean(known**2)) / spread**2
    repeatability = spread_of_stacks(stacks.value, stacks.subject, stacks.group)
    if not isinstance(repeatability, Undefined) and not isinstance(repeatability.icc, Undefined):
        results["icc"] = repeatability.icc
    return results


def _adjusted(rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Adjust the p values, each family by its own rule."""
    for role, rule, name in _FAMILIES:
        family = [row for row in rows if row["role"] == role and "p" in row]
        for row, p in zip(
            family, adjust(np.array([r["p"] for r in family]), rule=rule), strict=True
        ):
            row |= {"p_adjusted": float(p), "adjustment": name, "n_tests": len(family)}
    return rows


def adjust(p: np.ndarray, *, rule: str) -> np.ndarray:
    """Return the p values adjusted for their number.

    Parameters
    ----------
    p : (n,) float
        P values.
    rule : str
        "holm" (Holm 1979, Scand J Stat 6:65-70: the chance of any false find) or "bh" (Benjamini &
        Hochberg 1995, J R Stat Soc B 57:289-300: the share of false finds).

    Returns
    -------
    (n,) float
        Adjusted p values, at most 1.

    Raises
    ------
    UnusableInputError
        If the rule is unknown.

    Examples
    --------
    >>> adjust(np.array([0.01, 0.04, 0.03]), rule="holm")
    array([0.03, 0.06, 0.06])
    """
    if rule not in ("holm", "bh"):
        msg = f"rule: found {rule!r}, expected holm or bh"
        raise UnusableInputError(msg)
    order = np.argsort(p)
    rank, number = np.arange(1, len(p) + 1), len(p)
    adjusted = np.empty(number)
    if rule == "holm":
        adjusted[order] = np.maximum.accumulate(p[order] * (number + 1 - rank))
    else:
        adjusted[order[::-1]] = np.minimum.accumulate((p[order] * number / rank)[::-1])
    return np.minimum(adjusted, 1.0)
