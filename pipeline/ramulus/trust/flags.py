"""QC flags: one table that the code, the report and the README read."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

__all__ = ["FLAG_RULES", "Flag", "FlagRule", "raise_flags"]

Severity = Literal["note", "check", "reject"]


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
    """When a flag is raised: the fact `fact` passes `limit` in the direction `side`."""

    code: str
    fact: str
    side: Literal["above", "below"]
    severity: Severity
    limit: float
    message: str
    source: str


_JUDGEMENT = "judgement, no source"
_STUDY = "own phantom study"

FLAG_RULES: tuple[FlagRule, ...] = (
    FlagRule("anisotropy", "anisotropy", "above", "check", 3.0, "the voxels are {value:.2g} times coarser along one axis; radii of thin vessels rest on the blur model", _JUDGEMENT),
    FlagRule("anisotropy_strong", "anisotropy", "above", "reject", 5.5, "the voxels are {value:.2g} times coarser along one axis", _JUDGEMENT),
    FlagRule("saturation", "saturated_share", "above", "check", 0.001, "{percent:.2g} % of all voxels have the largest grey value; radii of clipped vessels come out wide", _JUDGEMENT),
    FlagRule("noise", "contrast_to_noise", "below", "check", 4.0, "the vessels' contrast is {value:.2g} times the noise", _STUDY),
    FlagRule("attenuation", "attenuation_ratio", "below", "check", 0.4, "the dimmest planes have {value:.2g} of the brightest planes' vessel contrast", _JUDGEMENT),
    FlagRule("unresolved_length", "unresolved_share", "above", "check", 0.2, "{percent:.0f} % of the length is too thin for this image to size", _JUDGEMENT),
    FlagRule("unresolved_most", "unresolved_share", "above", "reject", 0.5, "{percent:.0f} % of the length is too thin for this image to size", _JUDGEMENT),
    FlagRule("unfitted", "unfitted_share", "above", "check", 0.2, "at {percent:.0f} % of the places no radius could be fitted to the grey values", _STUDY),
    FlagRule("blur_assumed", "blur_assumed", "above", "note", 0.5, "too few wide vessels to estimate the blur; an assumed one is used, give gauge.blur_sigma_um", _STUDY),
    FlagRule("thin_parts", "largest_part_share", "below", "check", 0.8, "the largest connected part holds {percent:.0f} % of the length", _JUDGEMENT),
    FlagRule("blind_ends", "blind_end_share", "above", "note", 0.05, "{percent:.0f} % of the segments end blind inside the volume; in a complete bed that points to gaps", _JUDGEMENT),
    FlagRule("border_cut", "border_end_share", "above", "note", 0.5, "{percent:.0f} % of the free ends are cut by the volume's edge", _JUDGEMENT),
    FlagRule("bridges", "bridged", "above", "check", 0.5, "{value:.0f} gaps were bridged; see edits.jsonl", _JUDGEMENT),
    FlagRule("kissing", "crossing_share", "above", "check", 0.05, "{percent:.0f} % of the junctions join four or more vessels: look for vessels that only touch", _JUDGEMENT),
    FlagRule("mask_unstable", "threshold_change", "above", "check", 0.25, "the vessel volume changes by {percent:.0f} % when the threshold moves by 10 %", _JUDGEMENT),
    FlagRule("mesh", "loop_share", "above", "note", 0.2, "{percent:.0f} % of the length lies on loops: orders and an inlet-to-outlet resistance say little about a mesh", "data contract"),
    FlagRule("loops_in_tree", "loops_in_tree", "above", "note", 0.5, "{value:.0f} loops in a tree-like network; inside them the solved flow gives the direction", _JUDGEMENT),
    FlagRule("junctions_few", "junctions_used", "below", "note", 10.0, "{value:.0f} junctions enter the pooled exponent", _JUDGEMENT),
    FlagRule("junctions_unsolvable", "junctions_unsolvable", "above", "check", 0.25, "{percent:.0f} % of the junctions have no exponent", "methods study: 19 % corresponds to 10 % radius error"),
    FlagRule("orders_not_converged", "orders_not_converged", "above", "check", 0.5, "the diameter-defined orders did not reach a fixed point", "Kassab 1993"),
    FlagRule("few_decide", "effective_segments", "below", "check", 5.0, "the resistance rests on {value:.2g} segments", _JUDGEMENT),
    FlagRule("poor_radius_decides", "poor_resistance_share", "above", "check", 0.1, "{percent:.0f} % of the resistance lies in segments that are not resolved or were bridged", _JUDGEMENT),
    FlagRule("poor_radius_decides_most", "poor_resistance_share", "above", "reject", 0.5, "{percent:.0f} % of the resistance lies in segments that are not resolved or were bridged", _JUDGEMENT),
    FlagRule("resistance_uncertain", "log_resistance_sd", "above", "check", 0.2, "the random error of the resistance is {percent:.0f} %", _JUDGEMENT),
    FlagRule("outlet_rule_decides", "outlet_rule_ratio", "above", "check", 3.0, "the choice of outlets changes the resistance {value:.2g} times", _JUDGEMENT),
    FlagRule("flow_not_laminar", "reynolds_max", "above", "check", 2000.0, "Reynolds number {value:.0f}: the law of laminar flow does not hold", "Reynolds 1883; common practice"),
    FlagRule("twin_bias", "twin_radius_bias", "above", "check", 0.05, "the twin's median radius error is {percent:.1f} %", _STUDY),
    FlagRule("twin_lost", "twin_junction_recall_lost", "above", "check", 0.1, "{percent:.0f} % of the twin's junctions were not found", _STUDY),
)  # fmt: skip


def raise_flags(facts: Mapping[str, float | None]) -> list[Flag]:
    """Return the flags whose limits the facts pass; of one fact only the most severe.

    Facts that are absent or None raise nothing.
    """
    rank = {"note": 0, "check": 1, "reject": 2}
    worst: dict[str, Flag] = {}
    for rule in FLAG_RULES:
        value = facts.get(rule.fact)
        if value is None or value != value:  # noqa: PLR0124 - NaN
            continue
        passed = value > rule.limit if rule.side == "above" else value < rule.limit
        if not passed:
            continue
        message = rule.message.format(value=value, percent=100 * value)
        flag = Flag(rule.code, rule.severity, float(value), rule.limit, message)
        held = worst.get(rule.fact)
        if held is None or rank[flag.severity] > rank[held.severity]:
            worst[rule.fact] = flag
    return sorted(worst.values(), key=lambda f: (-rank[f.severity], f.code))
