"""The cohort in sentences: findings to read, and the text for a methods section."""

from collections.abc import Mapping
from typing import Any

import pandas as pd

from .._cohort_settings import CohortSettings
from .charts import number
from .figures import FIGURES
from .study import CohortResults
from .values import group_names

__all__ = ["finding", "methods_text", "p_value", "records", "warnings_of"]


def p_value(p: Any) -> str:
    """Return a p value for reading.

    Parameters
    ----------
    p : float
        A p value, or nothing.

    Returns
    -------
    str
        Two digits; empty where there is none.

    Examples
    --------
    >>> p_value(0.0123), p_value(0.00001), p_value(float("nan"))
    ('0.012', '< 0.001', '')
    """
    if pd.isna(p):
        return ""
    return "< 0.001" if p < 0.001 else f"{p:.2g}" if p < 0.1 else f"{p:.2f}"


def records(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """Return the rows of a table by column name."""
    return [{str(name): cell for name, cell in row.items()} for row in frame.to_dict("records")]


def finding(row: Mapping[str, Any]) -> str:
    """Say in one sentence what a row of the comparisons found.

    Parameters
    ----------
    row : mapping
        A row of `comparisons.csv`.

    Returns
    -------
    str
        The difference with its interval and p, or why there is none.
    """
    pair = f"{row['group_b']} against {row['group_a']}"
    if pd.isna(row["p"]):
        return f"{pair}: not compared: {row['reason']}."
    interval = f"{number(row['estimate_low'])} to {number(row['estimate_high'])}"
    kind = "ratio" if row["estimate_kind"] == "ratio b/a" else "difference"
    p = p_value(row["p"])
    p = f"p {p}" if p.startswith("<") else f"p = {p}"
    adjusted = f"{row['adjustment']}-adjusted {p_value(row['p_adjusted'])}"
    counts = f"{row['n_subjects_b']:.0f} and {row['n_subjects_a']:.0f} subjects"
    level = f"{100 * row['level']:g} %"
    return (
        f"{pair}: {kind} {number(row['estimate'])} ({level} interval {interval}), {p}, {adjusted}; "
        f"{counts}."
    )


def warnings_of(results: CohortResults) -> list[str]:
    """Say what a reader has to know before the comparisons are believed.

    Parameters
    ----------
    results : CohortResults
        The cohort.

    Returns
    -------
    list of str
        Sentences; empty where there is nothing to say.
    """
    settings, table = results.settings, results.table
    found = []
    if not settings.primary_figures and len(group_names(table, settings)) > 1:
        found.append(
            "No primary figure was named in advance (cohort.primary_figures): every comparison is "
            "exploratory."
        )
    refused = results.comparisons["reason"].fillna("").str.startswith("group and batch")
    if refused.any():
        reason = str(results.comparisons.loc[refused, "reason"].iloc[0])
        found.append(f"{reason[0].upper()}{reason[1:]}.")
    found += _spacing_warning(table)
    quality = results.comparisons[results.comparisons["role"] == "quality"]
    for row in records(quality[quality["p_adjusted"].astype(float) < 1 - settings.level]):
        label = FIGURES[row["figure"]].label.lower()
        found.append(
            f"The image itself differs between the groups: {label}, {row['group_b']} against "
            f"{row['group_a']}, adjusted p {p_value(row['p_adjusted'])}. Other differences "
            "may come from it."
        )
    if results.note:
        found.append(f"Pooled orders: {results.note}.")
    return found


def _spacing_warning(table: pd.DataFrame) -> list[str]:
    """Warn where the samples' voxels differ by more than a tenth; common practice, no source."""
    found = []
    for axis in "zyx":
        column = f"spacing_{axis}_um"
        sizes = pd.to_numeric(table.get(column, pd.Series(dtype=float)), errors="coerce").dropna()
        if len(sizes) and sizes.max() > 1.1 * sizes.min():
            found.append(
                f"The {axis} spacing runs from {number(sizes.min())} to {number(sizes.max())} µm: "
                "resample to the coarsest before radii are compared."
            )
    return found


def methods_text(results: CohortResults, versions: Mapping[str, str]) -> list[str]:
    """Write the text for a methods section, with the settings and versions of this cohort.

    Parameters
    ----------
    results : CohortResults
        The cohort.
    versions : mapping
        Versions by package.

    Returns
    -------
    list of str
        Paragraphs.
    """
    settings = results.settings
    return [
        _measured(results, versions),
        _unit_of_analysis(results),
        _tests(results),
        _families(results, settings),
        _orders(results),
    ]


def _measured(results: CohortResults, versions: Mapping[str, str]) -> str:
    table, settings = results.table, results.settings
    done = int((table["status"] == "done").sum())
    rejected = int((table["rejected_by"] != "").sum())
    fate = "left out of the comparisons" if settings.rejected == "exclude" else "kept"
    listed = ", ".join(f"{name} {version}" for name, version in versions.items())
    return (
        f"{len(table)} stacks were measured with one program ({listed}); {done} were measured and "
        f"{len(table) - done} failed. {rejected} raised a flag of severity reject and were {fate}."
    )


def _unit_of_analysis(results: CohortResults) -> str:
    table = results.table
    counts = []
    for name in group_names(table, results.settings):
        rows = table[table["group"] == name]
        counts.append(f"{name}: {rows['subject'].nunique()} subjects, {len(rows)} stacks")
    logs = ", ".join(f.label.lower() for f in FIGURES.values() if f.scale == "log")
    return (
        f"The subject is the unit of analysis ({'; '.join(counts) or 'no groups'}). Each subject "
        "enters with one value per figure, the mean of its stacks; of natural logarithms for "
        f"{logs}, whose differences are given as ratios of geometric means."
    )


def _tests(results: CohortResults) -> str:
    batches = results.table["batch"].replace("", pd.NA).dropna().nunique()
    within = (
        f" within batches (least squares of value on batch and group, {batches} batches, variance "
        "of MacKinnon and White, HC2, Satterthwaite's degrees of freedom)"
        if batches > 1
        else ""
    )
    inside = " inside batches" if batches > 1 else ""
    level = f"{100 * results.settings.level:g} %"
    return (
        f"Groups were compared by Welch's t test{within}, with {level} intervals, and by "
        f"permutation of the groups' labels{inside}: all arrangements up to "
        f"{results.settings.exact_limit:,}, else {results.settings.random_permutations:,} drawn "
        f"with seed {results.settings.seed}. "
        "Effect sizes are Hedges' g with intervals from the noncentral t distribution. Linear "
        "mixed models of the single stacks (random subject, restricted likelihood, degrees of "
        "freedom of the subjects) and comparisons weighted by measurement error (Paule and Mandel; "
        "Knapp and Hartung) stand beside as second opinions. The smallest detectable difference is "
        f"the one found with a chance of {100 * results.settings.power:g} %."
    )


def _families(results: CohortResults, settings: CohortSettings) -> str:
    tested = results.comparisons[results.comparisons["p"].notna()]
    counts = {role: int((tested["role"] == role).sum()) for role in ("primary", "secondary")}
    labels = ", ".join(FIGURES[name].label.lower() for name in settings.primary_figures)
    first = (
        f"P values of the primary figures, named in advance ({labels}), were adjusted by Holm's "
        f"method over {counts['primary']} tests"
        if settings.primary_figures
        else "No primary figure was named in advance"
    )
    return (
        f"{first}; the others by Benjamini and Hochberg's over {counts['secondary']} tests, and "
        "apart from them those that tell of the image alone. Outliers (modified z score above "
        f"{settings.outlier_limit:g}, Iglewicz and Hoaglin) were marked and none was removed."
    )


def _orders(results: CohortResults) -> str:
    if not len(results.cuts_um):
        return "No sample had vessels with an order."
    cuts = ", ".join(number(float(cut)) for cut in results.cuts_um)
    return (
        "Diameter-defined Strahler orders (Kassab) were found once on the vessels of all samples "
        f"and the cuts frozen, at diameters of {cuts} µm; each sample's own orders are in "
        "orders_long.csv beside them."
    )
