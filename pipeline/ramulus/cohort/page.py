"""The cohort's page: one file that opens with no network, and prints."""

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from ..report.page import CAUTION
from .charts import Dot, Line, legend, line_chart, number, strip_chart
from .figures import FIGURES, Figure
from .study import CohortResults
from .values import by_subject, figures_of, group_names, numbers, stack_values
from .wording import finding, methods_text, p_value, records, warnings_of

__all__ = ["cohort_page"]

_ORDER_CHARTS = (
    ("n_elements", "Elements", "", "log"),
    ("diameter_um_mean", "Diameter", "µm", "log"),
    ("element_length_um_mean", "Length of elements", "µm", "log"),
    ("cross_section_um2", "Cross-section of the order", "µm²", "log"),
    ("resistance_share", "Share of the resistance", "", "linear"),
)


@dataclass(frozen=True, slots=True)
class _Panel:
    """One figure: its heading, its drawing, what was found."""

    name: str
    heading: str
    chart: Any
    findings: list[str]


def cohort_page(results: CohortResults, versions: Mapping[str, str]) -> str:
    """Make `cohort.html`.

    Parameters
    ----------
    results : CohortResults
        The cohort.
    versions : mapping
        Versions by package, for the methods text.

    Returns
    -------
    str
        The page; the same results give the same text.
    """
    from jinja2 import Environment, PackageLoader, StrictUndefined  # noqa: PLC0415 - costs start-up

    environment = Environment(
        loader=PackageLoader("ramulus.cohort"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= {"number": _shown, "p": p_value}
    settings = results.settings
    panels = [_panel(results, figure) for figure in figures_of(results.table, settings)]
    primary = [panel for panel in panels if panel.name in settings.primary_figures]
    quality = [panel for panel in panels if FIGURES[panel.name].role == "quality"]
    rest = [panel for panel in panels if panel not in primary and panel not in quality]
    return environment.get_template("cohort.html").render(
        title=results.manifest.path.stem,
        caution=CAUTION,
        counts=_counts(results),
        groups=_group_rows(results),
        legend=_safe(legend(group_names(results.table, settings) or ["all samples"])),
        warnings=warnings_of(results),
        primary=primary,
        sections=[("Outcomes", rest), ("Image quality", quality)],
        order_charts=_order_charts(results),
        comparisons=[_comparison(row) for row in records(results.comparisons)],
        failures=records(results.failures),
        flags=records(results.flags),
        outliers=[_labelled(row) for row in records(results.outliers)],
        batches=[_labelled(row) for row in records(results.batches)],
        links=[_labelled(row) for row in records(results.links)],
        plans=[_plan(name, table) for name, table in results.plans.items() if len(table)],
        methods=methods_text(results, versions),
        settings=_settings(results),
    )


def _safe(svg: str) -> Any:
    """Mark our own drawing as markup; its words are escaped where they are drawn."""
    from markupsafe import Markup  # noqa: PLC0415 - comes with Jinja2

    return Markup(svg)  # noqa: S704 - see above


def _shown(value: Any) -> str:
    """Return a number for reading, nothing for a missing one."""
    if value is None or value is pd.NA or (isinstance(value, float) and math.isnan(value)):
        return ""
    return number(float(value)) if isinstance(value, int | float | np.number) else str(value)


def _counts(results: CohortResults) -> dict[str, int]:
    table = results.table
    return {
        "samples": len(table),
        "done": int((table["status"] == "done").sum()),
        "failed": int((table["status"] == "failed").sum()),
        "rejected": int((table["rejected_by"] != "").sum()),
        "subjects": int(table["subject"].nunique()),
        "batches": int(table["batch"].replace("", pd.NA).dropna().nunique()),
    }


def _group_rows(results: CohortResults) -> list[dict[str, Any]]:
    """Count subjects and stacks of each group, and say in which batches they are."""
    rows = []
    for name in group_names(results.table, results.settings):
        of_group = results.table[results.table["group"] == name]
        rows.append(
            {
                "name": name,
                "subjects": of_group["subject"].nunique(),
                "stacks": len(of_group),
                "done": int((of_group["status"] == "done").sum()),
                "rejected": int((of_group["rejected_by"] != "").sum()),
                "batches": ", ".join(sorted({str(b) for b in of_group["batch"] if b})),
            }
        )
    return rows


def _panel(results: CohortResults, figure: Figure) -> _Panel:
    """Draw one figure by group, with what the comparisons say of it."""
    settings, table = results.settings, results.table
    subjects = by_subject(stack_values(table, figure, settings))
    groups = group_names(table, settings) or [""]
    chart = strip_chart(
        [(name or "all samples", list(_dots(results, figure, name))) for name in groups],
        [_centre(subjects.value[subjects.group == name], subjects.scale, settings.level)
         for name in groups],
        title=f"{figure.label} by group, a dot a sample",
        unit=figure.unit,
        scale=figure.scale if subjects.scale == "log" else "linear",
    )  # fmt: skip
    rows = records(results.comparisons[results.comparisons["figure"] == figure.name])
    return _Panel(figure.name, figure.label, _safe(chart), [finding(row) for row in rows])


def _dots(results: CohortResults, figure: Figure, group: str) -> Iterator[Dot]:
    table, settings = results.table, results.settings
    value = numbers(table, figure.name)
    low, high = (numbers(table, f"{figure.name}_{end}") for end in ("low", "high"))
    of_group = table["group"].fillna("").to_numpy() == group
    counted = (table["rejected_by"].fillna("") == "").to_numpy() | (settings.rejected == "include")
    for k in np.flatnonzero(of_group & np.isfinite(value)):
        name = str(table["sample"].iloc[k])
        yield Dot(name, float(value[k]), float(low[k]), float(high[k]), bool(counted[k]))


def _centre(value: np.ndarray, scale: str, level: float) -> tuple[float, float, float]:
    """Return the subjects' mean with its t interval, back on the scale of the figure."""
    from scipy.stats import t  # noqa: PLC0415 - scipy.stats costs a second at start-up

    if not len(value):
        return math.nan, math.nan, math.nan
    mean, reach = float(value.mean()), math.nan
    if len(value) > 1:
        reach = float(
            t.ppf(0.5 + level / 2, len(value) - 1) * value.std(ddof=1) / len(value) ** 0.5
        )
    found = (mean, mean - reach, mean + reach)
    return tuple(math.exp(v) for v in found) if scale == "log" else found  # type: ignore[return-value]


def _order_charts(results: CohortResults) -> list[dict[str, Any]]:
    """Draw the pooled orders: each sample a thin line, each group's mean a strong one."""
    orders = results.orders
    if "ordering" not in orders or "order" not in orders:
        return []
    pooled = orders[orders["ordering"] == "pooled"]
    charts = []
    for column, label, unit, scale in _ORDER_CHARTS:
        if not len(pooled) or not np.isfinite(numbers(pooled, column)).any():
            continue
        lines = list(_order_lines(results, pooled, column, scale))
        chart = line_chart(
            lines, title=f"{label} by order and group", unit=unit, scale=scale, x_label="order"
        )
        charts.append({"heading": label, "chart": _safe(chart)})
    return charts


def _order_lines(
    results: CohortResults, pooled: pd.DataFrame, column: str, scale: str
) -> Iterator[Line]:
    names = group_names(results.table, results.settings) or [""]
    for k, name in enumerate(names):
        of_group = pooled[pooled["group"].fillna("") == name]
        frame = pd.DataFrame(
            {"sample": of_group["sample"], "order": numbers(of_group, "order"),
             "y": numbers(of_group, column)}
        ).dropna()  # fmt: skip
        if scale == "log":
            frame = frame[frame["y"] > 0]
        for sample, own in frame.groupby("sample", sort=False):
            yield Line(str(sample), own["order"].tolist(), own["y"].tolist(), k)
        if len(frame):
            mean = frame["y"].map(math.log) if scale == "log" else frame["y"]
            mean = mean.groupby(frame["order"]).mean()
            y = [math.exp(v) if scale == "log" else v for v in mean]
            yield Line(f"{name or 'all samples'}: mean", mean.index.tolist(), y, k, strong=True)


def _comparison(row: Mapping[str, Any]) -> dict[str, Any]:
    """Prepare a row of the comparisons for the table."""

    def interval(name: str) -> str:
        if pd.isna(row[name]):
            return ""
        ends = f"{number(row[f'{name}_low'])} to {number(row[f'{name}_high'])}"
        return f"{number(row[name])} ({ends})"

    texts = {name: row[name] if isinstance(row[name], str) else "" for name in ("reason", "notes")}
    return dict(row) | texts | {
        "label": FIGURES[row["figure"]].label,
        "unit": "" if row["estimate_kind"] == "ratio b/a" else FIGURES[row["figure"]].unit,
        "kind": "ratio" if row["estimate_kind"] == "ratio b/a" else "difference",
        "shown": interval("estimate"),
        "g": interval("effect_size"),
        "compared": not pd.isna(row["p"]),
    }  # fmt: skip


def _labelled(row: Mapping[str, Any]) -> dict[str, Any]:
    return dict(row) | {"label": FIGURES[row["figure"]].label, "unit": FIGURES[row["figure"]].unit}


def _plan(name: str, table: pd.DataFrame) -> dict[str, Any]:
    """Arrange a plan with subjects down and stacks across."""
    wide = table.pivot_table(index="n_subjects", columns="n_stacks", values="smallest_estimate")
    kind = "ratio" if FIGURES[name].scale == "log" else "difference"
    return {
        "label": FIGURES[name].label,
        "kind": kind,
        "stacks": list(wide.columns),
        "rows": [(subjects, list(cells)) for subjects, cells in zip(wide.index, wide.to_numpy(),
                                                                    strict=True)],
    }  # fmt: skip


def _settings(results: CohortResults) -> list[tuple[str, str, str]]:
    """List each setting with its value and meaning."""
    fields = type(results.settings).model_fields
    shown = []
    for name, field in fields.items():
        value = getattr(results.settings, name)
        words = ", ".join(value) if isinstance(value, tuple) else str(value)
        shown.append((f"cohort.{name}", words or "(none)", field.description or ""))
    return shown
