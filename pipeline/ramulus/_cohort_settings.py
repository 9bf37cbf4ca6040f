"""The settings of a cohort; apart from its layer, so that `config.py` can compose them."""

from typing import Literal

from ._settings import Settings, setting

__all__ = ["CohortSettings"]


class CohortSettings(Settings):
    """How the groups of a cohort are compared."""

    primary_figures: tuple[str, ...] = setting(
        (),
        "the one to three figures that the study is about, named before it is run (Holm)",
        source="Holm 1979; naming them in advance is common practice",
        max_length=3,
    )
    reference_group: str = setting(
        "", "the group that the others are compared with; empty: the manifest's first"
    )
    level: float = setting(0.95, "level of the intervals; 1 - level is the size of the tests",
                           source="common practice, no source", gt=0.5, lt=1.0)  # fmt: skip
    power: float = setting(0.8, "chance with which the smallest detectable effect is found",
                           source="Cohen 1988", gt=0.5, lt=1.0)  # fmt: skip
    rejected: Literal["exclude", "include"] = setting(
        "exclude", "what becomes of samples with a flag of severity reject in the comparisons"
    )
    exact_limit: int = setting(
        200_000, "most arrangements that a permutation test lists one by one",
        source="a test takes well under a second", ge=1, le=10_000_000)  # fmt: skip
    random_permutations: int = setting(
        20_000, "arrangements drawn where listing all would pass the limit",
        source="standard error of p near 0.05 is 0.0015", ge=999, le=1_000_000)  # fmt: skip
    seed: int = setting(1, "seed of the drawn arrangements", ge=0)
    outlier_limit: float = setting(
        3.5, "modified z-score from which a subject is shown as an outlier; none is removed",
        source="Iglewicz & Hoaglin 1993", gt=0.0)  # fmt: skip
