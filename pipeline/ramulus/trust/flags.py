"""QC flags: one table that the code, the report and the README read.

A rule compares one fact about a sample with one or more limits. Where a limit has no source it says
so; none is a law of nature, and a laboratory may hold itself to other ones.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from math import isfinite
from numbers import Real
from typing import Any, Literal

__all__ = ["FLAG_RULES", "SEVERITIES", "Flag", "FlagRule", "raise_flags", "rule_of"]

Severity = Literal["note", "check", "reject"]
SEVERITIES: tuple[Severity, ...] = ("note", "check", "reject")


@dataclass(frozen=True, slots=True)
class Flag:
    """A flag as raised: what was found, against which limit."""

    code: str
    severity: Severity
    value: float
    limit: float
    message: str

    def to_json(self) -> dict[str, Any]:
        """Return the object that the data contract prescribes."""
        return {
            "code": self.code, "severity": self.severity, "value": self.value, "limit": self.limit,
            "message": self.message,
        }  # fmt: skip


@dataclass(frozen=True, slots=True)
class FlagRule:
    """When a flag is raised: the fact passes a limit on the given side.

    Parameters
    ----------
    code : str
        The flag's name, stable across versions.
    fact : str
        Key of the value that is judged.
    side : {"above", "below"}
        Where the value counts as passing.
    limits : tuple of (severity, float)
        From the mildest to the most severe.
    unit : str
        Unit of value and limits: "share" (of 1), "times", "count", "yes or no" or a ratio's name.
    message : str
        What a reader is told; `{value}` and `{percent}` are filled in.
    source : str
        Where the limits come from.
    section : str
        The part of the report with the picture or table that shows it.
    """

    code: str
    fact: str
    side: Literal["above", "below"]
    limits: tuple[tuple[Severity, float], ...]
    unit: str
    message: str
    source: str
    section: str

    def judged(self, value: float) -> Flag | None:
        """Return the most severe flag that the value raises, None if it passes no limit.

        Examples
        --------
        >>> rule_of("anisotropy").judged(4.0).severity
        'check'
        """
        beyond = [
            (severity, limit)
            for severity, limit in self.limits
            if (value > limit if self.side == "above" else value < limit)
        ]
        if not beyond:
            return None
        severity, limit = beyond[-1]
        message = self.message.format(value=value, percent=100 * value)
        return Flag(self.code, severity, float(value), limit, message)


_JUDGEMENT = "judgement, no source"
_PHANTOMS = "limit of the phantoms on which accuracy is judged"

FLAG_RULES: tuple[FlagRule, ...] = (
    FlagRule(
        "anisotropy", "anisotropy", "above", (("check", 3.0), ("reject", 5.5)), "times",
        "the voxels are {value:.2g} times longer along one axis than along another; radii of thin"
        " vessels rest on the model of the blur",
        f"{_PHANTOMS} (up to 5 to 1) for reject; 3: {_JUDGEMENT}", "image",
    ),
    FlagRule(
        "saturation", "saturated_share", "above", (("check", 0.001), ("reject", 0.01)), "share",
        "{percent:.2g} % of all voxels have the largest grey value; clipped vessels come out wide",
        _JUDGEMENT, "planes",
    ),
    FlagRule(
        "noise", "contrast_to_noise", "below", (("check", 4.0),), "times",
        "the vessels' contrast is only {value:.2g} times the noise",
        f"{_PHANTOMS} (signal to noise from 4 up)", "image",
    ),
    FlagRule(
        "attenuation", "attenuation_ratio", "below", (("check", 0.4),), "share",
        "the dimmest planes have {percent:.0f} % of the brightest planes' vessel contrast; thin"
        " vessels may be missing there",
        _JUDGEMENT, "planes",
    ),
    FlagRule(
        "mask_unstable", "threshold_change", "above", (("check", 0.25),), "share",
        "the vessel volume changes by {percent:.0f} % when the threshold moves by 10 %",
        _JUDGEMENT, "image",
    ),
    FlagRule(
        "unresolved_length", "unresolved_share", "above",
        (("check", 0.2), ("reject", 0.5)), "share",
        "{percent:.0f} % of the length is too thin for this image to size", _JUDGEMENT, "radii",
    ),
    FlagRule(
        "unfitted", "unfitted_share", "above", (("check", 0.2),), "share",
        "at {percent:.0f} % of the places no radius could be fitted to the grey values; neighbours"
        " or the mask stand in",
        _JUDGEMENT, "radii",
    ),
    FlagRule(
        "blur_assumed", "blur_assumed", "above", (("note", 0.0),), "yes or no",
        "too few wide vessels to estimate the blur; an assumed one is used, gauge.blur_sigma_um"
        " gives a measured one",
        _JUDGEMENT, "radii",
    ),
    FlagRule(
        "parts", "largest_part_share", "below", (("check", 0.8),), "share",
        "the largest connected part holds only {percent:.0f} % of the length", _JUDGEMENT, "image",
    ),
    FlagRule(
        "blind_ends", "blind_end_share", "above", (("note", 0.05),), "share",
        "{percent:.0f} % of the segments end blind inside the volume; in a complete bed that points"
        " to gaps",
        _JUDGEMENT, "image",
    ),
    FlagRule(
        "border_cut", "border_end_share", "above", (("note", 0.5),), "share",
        "{percent:.0f} % of the free ends are cut by the volume's edge", _JUDGEMENT, "image",
    ),
    FlagRule(
        "spurs", "spur_share", "above", (("note", 0.2), ("check", 0.5)), "share",
        "{percent:.0f} removed spurs for every 100 segments kept: the mask's surface is rough",
        _JUDGEMENT, "edits",
    ),
    FlagRule(
        "bridges", "bridged", "above", (("check", 0.0),), "count",
        "gaps were bridged: {value:.0f}; look at each before its resistance is trusted",
        _JUDGEMENT, "edits",
    ),
    FlagRule(
        "kissing", "crossing_share", "above", (("check", 0.05),), "share",
        "{percent:.0f} % of the junctions join four or more vessels: look for vessels that only"
        " touch",
        _JUDGEMENT, "image",
    ),
    FlagRule(
        "mesh", "loop_share", "above", (("note", 0.2),), "share",
        "{percent:.0f} % of the length lies on loops: orders and an inlet-to-outlet resistance say"
        " little about a mesh",
        "data contract", "orders",
    ),
    FlagRule(
        "loops_in_tree", "loops_in_tree", "above", (("note", 0.0),), "count",
        "loops in a tree-like network: {value:.0f}; in them the solved flow gives the direction",
        _JUDGEMENT, "orders",
    ),
    FlagRule(
        "orders_not_converged", "orders_not_converged", "above", (("check", 0.0),), "yes or no",
        "the diameter-defined orders did not reach a fixed point",
        "Kassab et al. 1993, Am J Physiol 265:H350: orders are iterated until they stay", "orders",
    ),
    FlagRule(
        "junctions_few", "junctions_used", "below", (("note", 10.0),), "count",
        "junctions that enter the pooled exponent: only {value:.0f}", _JUDGEMENT, "cube",
    ),
    FlagRule(
        "junctions_unsolvable", "junctions_unsolvable", "above", (("check", 0.25),), "share",
        "{percent:.0f} % of the junctions have no exponent",
        "own simulation: 19 % corresponds to radius errors of 10 %, 29 % to 15 %", "cube",
    ),
    FlagRule(
        "few_decide", "effective_segments", "below", (("check", 5.0),), "count",
        "the resistance rests on {value:.2g} segments", _JUDGEMENT, "decide",
    ),
    FlagRule(
        "poor_radius_decides", "poor_resistance_share", "above",
        (("check", 0.1), ("reject", 0.5)), "share",
        "{percent:.0f} % of the resistance lies in segments that are not resolved or were bridged",
        _JUDGEMENT, "decide",
    ),
    FlagRule(
        "resistance_uncertain", "log_resistance_sd", "above", (("check", 0.2),), "share",
        "the random error of the resistance is {percent:.0f} %", _JUDGEMENT, "flow",
    ),
    FlagRule(
        "outlet_rule_decides", "outlet_rule_ratio", "above", (("check", 3.0),), "times",
        "the choice of outlets changes the resistance {value:.2g} times", _JUDGEMENT, "flow",
    ),
    FlagRule(
        "flow_not_laminar", "reynolds_max", "above", (("check", 2000.0),), "Reynolds number",
        "the Reynolds number reaches {value:.0f}: the law of laminar flow does not hold",
        "Reynolds 1883, Phil Trans 174:935; the round figure is common practice", "flow",
    ),
    FlagRule(
        "twin_bias", "twin_radius_bias", "above", (("check", 0.05),), "share",
        "the twin's radii are off by {percent:.1f} % on the median", _JUDGEMENT, "twin",
    ),
    FlagRule(
        "twin_lost", "twin_junction_recall_lost", "above", (("check", 0.1),), "share",
        "{percent:.0f} % of the twin's junctions were not found", _JUDGEMENT, "twin",
    ),
)  # fmt: skip


def rule_of(code: str) -> FlagRule:
    """Return the rule with a code.

    Raises
    ------
    KeyError
        If there is none.
    """
    return {rule.code: rule for rule in FLAG_RULES}[code]


def raise_flags(facts: Mapping[str, Any]) -> list[Flag]:
    """Return the flags whose limits the facts pass, the most severe first.

    Parameters
    ----------
    facts : mapping
        Values by the names of the rules' facts. What is absent, None, no number or not finite
        raises nothing.

    Returns
    -------
    list of Flag
        At most one for each rule; in the table's order within a severity.

    Examples
    --------
    >>> [flag.code for flag in raise_flags({"saturated_share": 0.02, "anisotropy": 5.0})]
    ['saturation', 'anisotropy']
    """
    found = [
        rule.judged(float(facts[rule.fact]))
        for rule in FLAG_RULES
        if isinstance(facts.get(rule.fact), Real) and isfinite(facts[rule.fact])
    ]
    flags = [flag for flag in found if flag is not None]
    return sorted(flags, key=lambda flag: -SEVERITIES.index(flag.severity))
