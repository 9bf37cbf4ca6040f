"""What to look at before a comparison is believed: outliers, batches, and what more would give."""

from collections.abc import Iterator
from typing import Any

import numpy as np
import pandas as pd

from .._cohort_settings import CohortSettings
from ..quantities import Undefined
from .difference import smallest_detectable_g
from .figures import FIGURES, Figure
from .second_opinions import spread_of_stacks
from .statistics import adjust
from .values import Values, by_subject, figures_of, numbers, stack_values

__all__ = ["batch_effects", "outliers", "plan", "quality_links"]

_SUSPECTS = (
    "smallest_resolved_radius_um",
    "image_contrast_to_noise",
    "spacing_z_um",
    "spacing_x_um",
    "depth_um",
)


def outliers(table: pd.DataFrame, settings: CohortSettings) -> pd.DataFrame:
    """List subjects far from the median of their group; they are shown, never removed.

    The modified z-score of Iglewicz & Hoaglin 1993 (How to Detect and Handle Outliers): 0.6745
    times the distance from the median over the median absolute deviation, the latter pooled over
    the groups, since groups are small.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    settings : CohortSettings
        The limit of the score.

    Returns
    -------
    DataFrame
        `figure, subject, group, value, group_median, score`; as printed, not as logarithms.
    """
    rows = []
    for figure in figures_of(table, settings):
        values = by_subject(stack_values(table, figure, settings))
        if len(values.value) < 4:
            continue
        median = np.array([np.median(values.value[values.group == g]) for g in values.group])
        away = values.value - median
        typical = float(np.median(np.abs(away)))
        if typical <= 0:
            continue
        score = 0.6745 * away / typical
        rows += [
            {
                "figure": figure.name,
                "subject": values.subject[k],
                "group": values.group[k],
                "value": values.shown(float(values.value[k])),
                "group_median": values.shown(float(median[k])),
                "score": float(score[k]),
            }
            for k in np.flatnonzero(np.abs(score) > settings.outlier_limit)
        ]
    return pd.DataFrame(
        rows, columns=["figure", "subject", "group", "value", "group_median", "score"]
    )


def batch_effects(table: pd.DataFrame, settings: CohortSettings) -> pd.DataFrame:
    """Test whether batches differ when the groups' means are taken out.

    An F test of value = group + batch against value = group, one value per subject.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    settings : CohortSettings
        Whether rejected samples count.

    Returns
    -------
    DataFrame
        `figure, n_batches, share, f, p, p_adjusted`; `share` is the part of the spread within
        groups that goes with the batch (partial eta squared). Empty where there is one batch.
    """
    rows = [
        {"figure": figure.name} | found
        for figure in figures_of(table, settings)
        for found in _batch_effect(by_subject(stack_values(table, figure, settings)))
    ]
    frame = pd.DataFrame(rows, columns=["figure", "n_batches", "share", "f", "p", "p_adjusted"])
    if len(frame):
        frame["p_adjusted"] = adjust(frame["p"].to_numpy(dtype=np.float64), rule="bh")
    return frame


def _batch_effect(values: Values) -> Iterator[dict[str, Any]]:
    from scipy.stats import f as f_law  # noqa: PLC0415 - scipy.stats costs a second at start-up

    groups, batches = (np.unique(a, return_inverse=True)[1] for a in (values.group, values.batch))
    if not len(values.value) or batches.max() == 0:
        return
    group = np.eye(groups.max() + 1)[groups]
    whole = np.column_stack([group, np.eye(batches.max() + 1)[batches]])
    gained = int(np.linalg.matrix_rank(whole)) - group.shape[1]
    df = len(values.value) - group.shape[1] - gained
    plain, fitted = (float(_misfit(values.value, design)) for design in (group, whole))
    tiny = 1e-20 * float(values.value @ values.value)  # nothing but rounding
    if gained < 1 or df < 1 or plain <= tiny or fitted <= 1e-12 * plain:
        return
    f = (plain - fitted) / gained / (fitted / df)
    p = float(f_law.sf(f, gained, df))
    yield {"n_batches": int(batches.max()) + 1, "share": 1 - fitted / plain, "f": f, "p": p}


def _misfit(value: np.ndarray, design: np.ndarray) -> float:
    residual = value - design @ (np.linalg.pinv(design) @ value)
    return float(residual @ residual)


def plan(table: pd.DataFrame, figure: Figure, settings: CohortSettings) -> pd.DataFrame:
    """Tell what more subjects, or more stacks of each, would let a study of two groups find.

    Parameters
    ----------
    table : DataFrame
        The cohort's table; its spread among subjects and among their stacks is taken.
    figure : Figure
        Which figure.
    settings : CohortSettings
        Level and power.

    Returns
    -------
    DataFrame
        `n_subjects` (in each group), `n_stacks` (of each subject), `smallest_estimate` (a ratio on
        the log scale); empty where subjects have one stack each.
    """
    stacks = stack_values(table, figure, settings)
    spread = spread_of_stacks(stacks.value, stacks.subject, stacks.group)
    columns = ["n_subjects", "n_stacks", "smallest_estimate"]
    if isinstance(spread, Undefined):
        return pd.DataFrame(columns=columns)
    rows = []
    for n_subjects in (3, 4, 5, 6, 8, 10, 15, 20):
        second, batch = np.arange(2 * n_subjects) >= n_subjects, np.zeros(2 * n_subjects)
        g = smallest_detectable_g(second, batch, alpha=1 - settings.level, power=settings.power)
        if isinstance(g, Undefined):
            continue
        for n_stacks in (1, 2, 4, 8):
            sd = spread.of_subject_mean(n_stacks) ** 0.5
            rows.append((n_subjects, n_stacks, stacks.shown(g * sd)))
    return pd.DataFrame(rows, columns=columns)


def quality_links(table: pd.DataFrame, settings: CohortSettings) -> pd.DataFrame:
    """Correlate the primary figures with what should not matter: resolution, noise, spacing, depth.

    Spearman's rank correlation of one value per subject, the groups' means taken out of both.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    settings : CohortSettings
        The primary figures.

    Returns
    -------
    DataFrame
        `figure, against, n_subjects, rho, p`; empty where nothing varies.
    """
    depth_um = numbers(table, "shape_z") * numbers(table, "spacing_z_um")
    table = table.assign(depth_um=depth_um)
    rows = [
        {"figure": name, "against": other} | found
        for name in settings.primary_figures
        for other in _SUSPECTS
        for found in _link(table, FIGURES[name], Figure(other, other, scale="log"), settings)
    ]
    return pd.DataFrame(rows, columns=["figure", "against", "n_subjects", "rho", "p"])


def _link(
    table: pd.DataFrame, figure: Figure, other: Figure, settings: CohortSettings
) -> Iterator[dict[str, Any]]:
    from scipy.stats import spearmanr  # noqa: PLC0415 - scipy.stats costs a second at start-up

    first, second = (by_subject(stack_values(table, f, settings)) for f in (figure, other))
    shared = sorted(set(first.subject) & set(second.subject))
    left, right = (_within_groups(values, shared) for values in (first, second))
    if len(shared) < 5 or np.ptp(left) <= 1e-12 or np.ptp(right) <= 1e-12:
        return
    found = spearmanr(left, right)
    yield {"n_subjects": len(shared), "rho": float(found.statistic), "p": float(found.pvalue)}


def _within_groups(values: Values, subjects: list[str]) -> np.ndarray:
    """Return the subjects' values less their group's mean, in the order given."""
    of_subject = {name: k for k, name in enumerate(values.subject)}
    index = [of_subject[name] for name in subjects]
    value, group = values.value[index], values.group[index]
    if not len(value):
        return value
    centred: np.ndarray = value - np.array([value[group == name].mean() for name in group])
    return centred
