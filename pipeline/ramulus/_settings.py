"""The base of every stage's settings: frozen, strict about unknown keys, each key explained."""

from typing import Any

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["Settings", "setting"]


class Settings(BaseModel):
    """Frozen settings of one stage; unknown keys are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


def setting(default: Any, meaning: str, *, unit: str = "", source: str = "", **limits: Any) -> Any:
    """Declare one key with its default, meaning, unit and the source of the default.

    `limits` are pydantic's (gt, ge, lt, le, min_length ...).
    """
    return Field(
        default, description=meaning, json_schema_extra={"unit": unit, "source": source}, **limits
    )
