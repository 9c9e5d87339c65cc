"""Section ``[store]`` of ``network.toml``: which nights are kept."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["StoreSettings"]


class StoreSettings(BaseModel):
    """How many nights the store keeps; the night in force, the one before it and the newest are always kept."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    keep_newest: Annotated[
        int, Field(ge=1, le=100_000, strict=True, description="Newest nights kept, by date of their snapshot.")
    ] = 14
    keep_weeks: Annotated[
        int,
        Field(
            ge=0,
            le=10_000,
            strict=True,
            description="Weeks before these of which the first night is kept, latest first.",
        ),
    ] = 8
    keep_months: Annotated[
        int,
        Field(
            ge=0,
            le=10_000,
            strict=True,
            description="Months before these of which the first night is kept, latest first.",
        ),
    ] = 13
