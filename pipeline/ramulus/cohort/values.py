"""The figures of a cohort as they are compared: per stack and per subject, on their scale."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from .._cohort_settings import CohortSettings
from ..errors import UnusableInputError
from .figures import FIGURES, Figure

__all__ = ["Values", "by_subject", "figures_of", "group_names", "numbers", "stack_values"]

_Z_95 = 1.959963984540054  # the contract's intervals are at 0.95


@dataclass(frozen=True, slots=True)
class Values:
    """One figure on its scale of comparison, a value per stack or per subject.

    Parameters
    ----------
    value : (n,) float
        Natural logarithm where `scale` is "log".
    measurement_sd : (n,) float
        Standard error of the measurement on the same scale; NaN where unknown.
    subject, group, batch : (n,) str
        Who it belongs to.
    stacks : (n,) int
        Stacks behind each value.
    scale : str
        "log" or "linear".
    """

    value: np.ndarray
    measurement_sd: np.ndarray
    subject: np.ndarray
    group: np.ndarray
    batch: np.ndarray
    stacks: np.ndarray
    scale: str

    def where(self, kept: np.ndarray) -> "Values":
        """Return some of the values."""
        return Values(
            value=self.value[kept],
            measurement_sd=self.measurement_sd[kept],
            subject=self.subject[kept],
            group=self.group[kept],
            batch=self.batch[kept],
            stacks=self.stacks[kept],
            scale=self.scale,
        )

    def shown(self, value: float) -> float:
        """Return a value or difference as printed: a ratio or geometric mean on the log scale."""
        return float(np.exp(value)) if self.scale == "log" else value


def group_names(table: pd.DataFrame, settings: CohortSettings) -> list[str]:
    """Return the groups, the reference first, the others as they first appear.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    settings : CohortSettings
        The reference group.

    Returns
    -------
    list of str
        The groups; empty where no sample has one.

    Raises
    ------
    UnusableInputError
        If the reference group is not in the table.
    """
    found = [str(name) for name in dict.fromkeys(table["group"]) if name and not pd.isna(name)]
    first = settings.reference_group
    if first and first not in found:
        msg = f"cohort.reference_group: {first!r} is no group; found {', '.join(found) or 'none'}"
        raise UnusableInputError(msg)
    return sorted(found, key=lambda name: name != first) if first else found


def figures_of(table: pd.DataFrame, settings: CohortSettings) -> list[Figure]:
    """Return the primary figures, then the others that some sample has.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    settings : CohortSettings
        The primary figures.

    Returns
    -------
    list of Figure
        Each once.
    """
    primary = [FIGURES[name] for name in settings.primary_figures if name in FIGURES]
    rest = [
        figure
        for figure in FIGURES.values()
        if figure not in primary and figure.name in table and table[figure.name].notna().any()
    ]
    return primary + rest


def stack_values(table: pd.DataFrame, figure: Figure, settings: CohortSettings) -> Values:
    """Return the figure of every stack that may be compared, on its scale.

    A figure whose scale is logarithmic stays linear where one of its values is not positive.

    Parameters
    ----------
    table : DataFrame
        The cohort's table.
    figure : Figure
        Which figure.
    settings : CohortSettings
        Whether rejected samples count.

    Returns
    -------
    Values
        A value per stack that is done, has a group and has the figure.
    """
    value = numbers(table, figure.name)
    kept = np.isfinite(value) & (table["status"] == "done").to_numpy() & _has_group(table)
    if settings.rejected == "exclude":
        kept &= (table["rejected_by"].fillna("") == "").to_numpy()
    rows, value = table[kept], value[kept]
    width = numbers(rows, f"{figure.name}_low"), numbers(rows, f"{figure.name}_high")
    scale = "log" if figure.scale == "log" and (value > 0).all() else "linear"
    if scale == "log":
        low, high = (np.log(np.where(edge > 0, edge, np.nan)) for edge in width)
        value = np.log(value)
    else:
        low, high = width
    return Values(
        value=value,
        measurement_sd=(high - low) / (2 * _Z_95),
        subject=_labels(rows, "subject"),
        group=_labels(rows, "group"),
        batch=_labels(rows, "batch"),
        stacks=np.ones(len(value), dtype=np.int64),
        scale=scale,
    )


def _labels(table: pd.DataFrame, column: str) -> np.ndarray:
    labels: np.ndarray = table[column].fillna("").astype(str).to_numpy(dtype=str)
    return labels


def numbers(table: pd.DataFrame, column: str) -> np.ndarray:
    """Return a column as float64, NaN where it is missing or no number."""
    if column not in table:
        return np.full(len(table), np.nan)
    return pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=np.float64)


def _has_group(table: pd.DataFrame) -> np.ndarray:
    groups: np.ndarray = (table["group"].fillna("") != "").to_numpy()
    return groups


def by_subject(stacks: Values) -> Values:
    """Return one value per subject: the mean of its stacks on the figure's scale.

    Subjects stand in the order of their first stack; a subject's batch joins those of its stacks.

    Parameters
    ----------
    stacks : Values
        A value per stack.

    Returns
    -------
    Values
        A value per subject; the measurement's errors count as independent between stacks.

    Examples
    --------
    >>> names = np.array(["m1", "m1", "m2"])
    >>> stacks = Values(np.array([1.0, 3.0, 5.0]), np.array([0.3, 0.4, 0.2]), names, names, names,
    ...     np.ones(3, dtype=int), "linear")
    >>> subjects = by_subject(stacks)
    >>> subjects.value, subjects.measurement_sd, subjects.stacks
    (array([2., 5.]), array([0.25, 0.2 ]), array([2, 1]))
    """
    _, first, code = np.unique(stacks.subject, return_index=True, return_inverse=True)
    order = np.argsort(first)
    rank = np.argsort(order)[code]
    size = np.bincount(rank, minlength=len(order))
    mean = np.bincount(rank, stacks.value, len(order)) / size
    error = np.sqrt(np.bincount(rank, stacks.measurement_sd**2, len(order))) / size
    batch = np.array(
        ["+".join(sorted(set(stacks.batch[rank == k]))) for k in range(len(order))], dtype=str
    )
    first = first[order]
    return Values(
        mean, error, stacks.subject[first], stacks.group[first], batch, size, stacks.scale
    )
