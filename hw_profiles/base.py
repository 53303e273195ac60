"""The strict, frozen base of every profile type."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, StringConstraints
from pydantic_core import PydanticCustomError

Positive = Annotated[float, Field(gt=0)]
NonNegative = Annotated[float, Field(ge=0)]
Name = Annotated[str, StringConstraints(pattern=r"^[a-z0-9][a-z0-9-]{0,39}$")]


class Profile(BaseModel):
    """Frozen; no extra keys, no type coercion, no inf or nan."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


def refuse(message: str) -> PydanticCustomError:
    """The error of a cross-check; `message` names the keys, their values and what is allowed."""
    return PydanticCustomError("cross_check", "{message}", {"message": message})
