"""A cohort's results in one record, from the samples' folders to every table."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from .._cohort_settings import CohortSettings
from ..errors import WorkFailedError
from .diagnostics import batch_effects, outliers, plan, quality_links
from .figures import FIGURES
from .manifest import Manifest
from .pooled_orders import pooled_orders
from .run import Outcome
from .statistics import compare
from .tables import SampleResults, cohort_table, failures_table, long_table, read_results

__all__ = ["CohortResults", "gather"]


@dataclass(frozen=True, slots=True)
class CohortResults:
    """Everything that a cohort's files and page are made of.

    Parameters
    ----------
    manifest : Manifest
        The samples.
    settings : CohortSettings
        How groups are compared.
    table, comparisons, orders, junctions, failures : DataFrame
        As in the files of the same names.
    outliers, batches, links : DataFrame
        As `diagnostics` gives them.
    plans : dict
        By primary figure, what more subjects or stacks would find.
    flags : DataFrame
        `code, severity, message, samples`: each flag with the samples that raised it.
    cuts_um : (k,) float
        The diameters that part the pooled orders.
    note : str
        What the pooled ordering had to say.
    """

    manifest: Manifest
    settings: CohortSettings
    table: pd.DataFrame
    comparisons: pd.DataFrame
    orders: pd.DataFrame
    junctions: pd.DataFrame
    failures: pd.DataFrame
    outliers: pd.DataFrame
    batches: pd.DataFrame
    links: pd.DataFrame
    plans: dict[str, pd.DataFrame]
    flags: pd.DataFrame
    cuts_um: np.ndarray
    note: str


def gather(
    manifest: Manifest, outcomes: Sequence[Outcome], settings: CohortSettings
) -> CohortResults:
    """Read the finished samples and make every table; a folder that cannot be read is a failure.

    Parameters
    ----------
    manifest : Manifest
        The samples.
    outcomes : sequence of Outcome
        What became of each.
    settings : CohortSettings
        How groups are compared.

    Returns
    -------
    CohortResults
        All tables.
    """
    outcomes, results = _read(outcomes)
    table = cohort_table(manifest, outcomes, results)
    pooled = pooled_orders({name: found.segments for name, found in results.items()})
    own = {name: found.orders for name, found in results.items()}
    return CohortResults(
        manifest=manifest,
        settings=settings,
        table=table,
        comparisons=compare(table, settings),
        orders=_orders(manifest, {"own": own, "pooled": pooled.tables}),
        junctions=long_table(manifest, {n: found.junctions for n, found in results.items()}),
        failures=failures_table(manifest, outcomes),
        outliers=outliers(table, settings),
        batches=batch_effects(table, settings),
        links=quality_links(table, settings),
        plans={name: plan(table, FIGURES[name], settings) for name in settings.primary_figures},
        flags=_flags(results),
        cuts_um=pooled.cuts_um,
        note=pooled.note,
    )


def _read(outcomes: Sequence[Outcome]) -> tuple[list[Outcome], dict[str, SampleResults]]:
    kept, results = [], {}
    for outcome in outcomes:
        if outcome.folder is not None:
            try:
                results[outcome.sample] = read_results(outcome.folder)
            except WorkFailedError as failure:
                outcome = replace(outcome, folder=None, kind="work", reason=str(failure))  # noqa: PLW2901 - the same outcome, corrected
        kept.append(outcome)
    return kept, results


def _orders(manifest: Manifest, tables: Mapping[str, Mapping[str, pd.DataFrame]]) -> pd.DataFrame:
    """Stack the order tables: each sample's own orders, then those by the pooled cuts."""
    parts = []
    for ordering, by_sample in tables.items():
        part = long_table(manifest, by_sample)
        part.insert(4, "ordering", ordering)
        parts.append(part)
    filled = [part for part in parts if len(part)]
    return pd.concat(filled, ignore_index=True) if filled else parts[0]


def _flags(results: Mapping[str, SampleResults]) -> pd.DataFrame:
    """List each flag once, worst first, with the samples that raised it."""
    severities = ("reject", "check", "note")
    found: dict[tuple[str, str], list[str]] = {}
    messages: dict[tuple[str, str], str] = {}
    for sample, result in results.items():
        for flag in result.summary.get("flags", []):
            key = (str(flag.get("severity", "note")), str(flag.get("code", "")))
            found.setdefault(key, []).append(sample)
            messages.setdefault(key, str(flag.get("message", "")))
    rank = {name: k for k, name in enumerate(severities)}
    rows = [
        (code, severity, messages[severity, code], " ".join(found[severity, code]))
        for severity, code in sorted(found, key=lambda key: (rank.get(key[0], 9), key[1]))
    ]
    return pd.DataFrame(rows, columns=["code", "severity", "message", "samples"])
