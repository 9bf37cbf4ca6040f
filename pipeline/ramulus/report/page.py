"""`report.html`: one file that opens with no network, and the figures it shows."""

from base64 import b64encode
from collections.abc import Mapping, Sequence
from functools import cache
from typing import TYPE_CHECKING, Any

from ..trust.flags import Flag
from .content import ReportContent
from .figures import figures
from .scene import plotly_script, scene_text
from .views import MOST_SEGMENTS, shown_segments
from .wording import (
    CAUTION,
    DEFINITIONS,
    by_axis,
    dominant_rows,
    edit_rows,
    figure_groups,
    flag_rows,
    headline,
    resistance_rows,
    rule_rows,
    subtitle,
    verdict,
)

if TYPE_CHECKING:
    from ..line import Results

__all__ = ["CAUTION", "report_html", "write_report"]


def write_report(
    results: "Results",
    *,
    summary: Mapping[str, Any],
    flags: Sequence[Flag],
    twin: Mapping[str, Any] | None,
    title: str,
    settings: str,
    provenance: Mapping[str, Any] | None = None,
) -> dict[str, bytes]:
    """Return `report.html` and the figures as file contents, by their names in the sample's folder.

    Parameters
    ----------
    results : Results
        What the line found.
    summary : mapping
        As in summary.json.
    flags : sequence of Flag
        QC flags, the most severe first.
    twin : mapping, optional
        The twin's record.
    title : str
        Heading; empty: the sample's name.
    settings : str
        The configuration as TOML.
    provenance : mapping, optional
        Names and values that tell where the figures come from: input, checksum, versions.

    Returns
    -------
    dict of str to bytes
        The same results give the same bytes.
    """
    content = ReportContent(
        title=title or str(summary.get("sample", "")), graph=results.graph, tables=results.tables,
        summary=summary, flags=flags, projections=results.projections, profiles=results.profiles,
        twin=twin, edits=results.edits, settings=settings, provenance=provenance or {},
    )  # fmt: skip
    drawn, left_out = figures(content)
    page = report_html(content, drawn, left_out)
    return {"report.html": page.encode()} | {f"figures/{name}": png for name, png in drawn.items()}


def report_html(
    content: ReportContent, drawn: Mapping[str, bytes], left_out: Mapping[str, str]
) -> str:
    """Return the page.

    Parameters
    ----------
    content : ReportContent
        The sample's results.
    drawn, left_out : mapping
        As `figures` returns them.

    Returns
    -------
    str
        HTML that holds all it shows; names and words from the data are escaped.
    """
    groups = figure_groups(content)
    page: str = _template().render(
        title=content.title or "Vessel report",
        caution=CAUTION,
        subtitle=subtitle(content),
        verdict=verdict(content.flags),
        flags=list(flag_rows(content.flags)),
        rules=list(rule_rows(content.summary.get("image") or {})),
        headline=headline(groups),
        groups=groups,
        summary=content.summary,
        figures={_stem(name): b64encode(png).decode() for name, png in drawn.items()},
        reasons={_stem(name): reason for name, reason in left_out.items()},
        has_image=bool(content.projections),
        n_drawn=len(shown_segments(content.graph, MOST_SEGMENTS)),
        n_segments=content.graph.n_segments,
        twin=_twin(content.twin),
        resistance=list(resistance_rows(content)),
        dominant=list(dominant_rows(content)),
        edits=edit_rows(content.edits),
        definitions=DEFINITIONS,
        settings=content.settings,
        provenance=content.provenance,
        scene=scene_text(content),
        plotly=plotly_script(),
    )
    return page


@cache
def _template() -> Any:
    from jinja2 import Environment, PackageLoader, StrictUndefined  # noqa: PLC0415 - start-up time

    environment = Environment(
        loader=PackageLoader("ramulus.report"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    return environment.get_template("report.html.j2")


def _stem(name: str) -> str:
    return name.removesuffix(".png")


def _twin(twin: Mapping[str, Any] | None) -> dict[str, str]:
    """Return the twin's sentence, or why there is none."""
    if twin is None:
        return {"reason": "a twin is made for a stack of grey values alone"}
    if twin.get("reason"):
        return {"reason": str(twin["reason"])}
    start = (
        f"A synthetic stack of {by_axis(twin.get('shape') or [])} voxels, drawn"
        f" {twin.get('draws')} times from this graph with the blur, contrast and noise of this"
        " image and measured by the same settings"
    )
    parts = []
    for key, text in (
        ("radius_bias", "median error of the radii {:.1f} %"),
        ("radius_spread", "90 % of the radii within {:.1f} %"),
        ("length_ratio", "{:.0f} % of the true length"),
        ("junction_recall", "{:.0f} % of the true junctions found"),
        ("junction_precision", "{:.0f} % of the junctions found are true"),
    ):
        if twin.get(key) is not None:
            parts.append(text.format(100 * twin[key]))
    return {"sentence": f"{start}: {'; '.join(parts)}." if parts else f"{start}."}
