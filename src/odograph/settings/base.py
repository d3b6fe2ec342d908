"""What every settings model shares: unknown keys refused, values frozen, units and descriptions required."""

from __future__ import annotations

from typing import Any

from pydantic import BaseModel, ConfigDict, Field


class StageSettings(BaseModel):
    """Base of the settings of one stage: frozen, and closed to keys it does not know."""

    model_config = ConfigDict(extra="forbid", frozen=True)


def setting(default: Any, description: str, *, unit: str | None = None, **bounds: Any) -> Any:
    """Declare one setting.

    Parameters
    ----------
    default : Any
        The value used when the configuration does not name the setting.
    description : str
        One line for the user: what it does.
    unit : str, optional
        Unit of the value, as written in the configuration's comment.
    **bounds
        pydantic's bounds (`ge`, `gt`, `le`, `lt`, `min_length`, ...).
    """
    return Field(default, description=description, json_schema_extra={"unit": unit}, **bounds)
