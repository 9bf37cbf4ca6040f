"""The figures of a sample that a cohort compares: what each is, its unit, its scale, its role."""

from dataclasses import dataclass
from difflib import get_close_matches
from typing import Literal

from ..errors import UnusableInputError

__all__ = ["FIGURES", "Figure", "checked_figures"]


@dataclass(frozen=True, slots=True)
class Figure:
    """One number of `summary.json`.

    Parameters
    ----------
    name : str
        Its key.
    label : str
        What it is, in words.
    unit : str
        Its unit as printed.
    scale : str
        "log" for lengths, diameters, flows, resistances and the ratios of orders (fitted as
        logarithms), whose errors and differences are ratios; else "linear".
    role : str
        "outcome", or "quality" for what tells of the image rather than of the vessels.
    """

    name: str
    label: str
    unit: str = ""
    scale: Literal["log", "linear"] = "linear"
    role: Literal["outcome", "quality"] = "outcome"


FIGURES: dict[str, Figure] = {
    figure.name: figure
    for figure in (
        Figure("network_resistance_pa_s_per_m3", "Network resistance", "Pa s/m³", "log"),
        Figure("network_hindrance_per_um3", "Network hindrance", "1/µm³", "log"),
        Figure("inlet_flow_um3_per_s", "Inlet flow", "µm³/s", "log"),
        Figure("junction_exponent", "Junction exponent"),
        Figure("junction_exponent_plain", "Junction exponent, not corrected for radius error"),
        Figure("cube_residual_median", "Cube-law residual, median"),
        Figure("area_ratio_median", "Area ratio at junctions, median"),
        Figure("murray_cost_excess", "Excess over Murray's least cost"),
        Figure("orders", "Orders"),
        Figure("branching_ratio", "Branching ratio", "", "log"),
        Figure("diameter_ratio", "Diameter ratio", "", "log"),
        Figure("length_ratio", "Length ratio", "", "log"),
        Figure("segments_per_element", "Segments per element"),
        Figure("trunk_taper_b", "Taper of the trunk, b"),
        Figure("radius_median_um", "Median radius", "µm", "log"),
        Figure("vessel_volume_fraction", "Vessel volume fraction"),
        Figure("total_length_um", "Total length", "µm", "log"),
        Figure("length_density_per_mm2", "Length density", "1/mm²", "log"),
        Figure("segments", "Segments"),
        Figure("junctions", "Junctions"),
        Figure("ends", "Blind ends"),
        Figure("loops", "Loops"),
        Figure("components", "Components"),
        Figure("effective_segments", "Effective number of resisting segments"),
        Figure("smallest_resolved_radius_um", "Smallest resolved radius", "µm", "log", "quality"),
        Figure("image_contrast_to_noise", "Contrast over noise", "", "log", "quality"),
        Figure("radius_correction", "Correction of the radii", role="quality"),
        Figure("ordered_fraction", "Share of the length with an order", role="quality"),
        Figure("junctions_used", "Junctions used", role="quality"),
        Figure("junctions_unsolvable", "Junctions without an exponent", role="quality"),
        Figure(
            "junctions_unsolvable_expected",
            "Junctions without an exponent, expected from radius error",
            role="quality",
        ),
        Figure("border_ends", "Ends cut by the volume's edge", role="quality"),
    )
}


def checked_figures(name: str, figures: tuple[str, ...]) -> tuple[str, ...]:
    """Return the names, each known and given once.

    Parameters
    ----------
    name : str
        The setting's name, for the message.
    figures : tuple of str
        Its value.

    Returns
    -------
    tuple of str
        The same.

    Raises
    ------
    UnusableInputError
        If one is unknown (with the nearest known names) or repeated.

    Examples
    --------
    >>> checked_figures("cohort.primary_figures", ("junction_exponent",))
    ('junction_exponent',)
    """
    for figure in figures:
        if figure not in FIGURES:
            near = get_close_matches(figure, FIGURES, n=3) or sorted(FIGURES)[:5]
            msg = f"{name}: {figure!r} is not a figure of a sample; near it: {', '.join(near)}"
            raise UnusableInputError(msg)
    if len(set(figures)) < len(figures):
        msg = f"{name}: found {figures!r}, expected each figure once"
        raise UnusableInputError(msg)
    return figures
