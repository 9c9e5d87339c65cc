"""``[refresh]`` of ``network.toml``: when a night may go into force by itself, and how long its parts may take."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["RefreshSettings"]

Share = Annotated[float, Field(ge=0, le=1, strict=True)]
Factor = Annotated[float, Field(gt=1, le=1000, strict=True)]


class RefreshSettings(BaseModel):
    """Limits of the checks that a night must pass, and limits of the work itself.

    Shares are of the legs that have not departed; comparisons with last night are over the legs of both nights. Every
    limit is the greatest figure that still passes.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    few_legs: Annotated[
        int,
        Field(
            ge=0,
            strict=True,
            description="Legs that may always exceed what a share of legs allows, so that small networks are not "
            "stopped by one leg; does not apply to bid prices above the highest fare.",
        ),
    ] = 2
    no_demand_share: Annotated[Share, Field(description="Greatest share of legs without any demand to come.")] = 0.3
    demand_total: Annotated[
        float,
        Field(
            ge=0,
            strict=True,
            description="Greatest move of all demand to come since last night, as a share of last night's.",
        ),
    ] = 0.25
    demand_factor: Annotated[
        Factor, Field(description="Factor beyond which the demand of one leg has moved, up or down.")
    ] = 2.5
    demand_least: Annotated[
        float,
        Field(ge=0, strict=True, description="Passengers by which it must have moved as well to count."),
    ] = 10.0
    demand_share: Annotated[Share, Field(description="Greatest share of legs whose demand has moved so.")] = 0.05
    capacity_total: Annotated[
        float,
        Field(
            ge=0,
            strict=True,
            description="Greatest move of all seats authorised since last night, as a share of last night's.",
        ),
    ] = 0.1
    capacity_factor: Annotated[
        Factor, Field(description="Factor beyond which the seats of one leg have moved, up or down.")
    ] = 2.0
    capacity_share: Annotated[Share, Field(description="Greatest share of legs whose seats have moved so.")] = 0.05
    price_factor: Annotated[
        Factor, Field(description="Factor beyond which the bid price of one leg has moved, up or down.")
    ] = 3.0
    price_least: Annotated[
        Share,
        Field(description="Share of the leg's highest fare by which it must have moved as well to count."),
    ] = 0.1
    price_share: Annotated[Share, Field(description="Greatest share of legs whose bid price has moved so.")] = 0.1
    above_fare_share: Annotated[
        Share,
        Field(description="Greatest share of legs whose bid price exceeds the highest fare of any product on it."),
    ] = 0.0
    zero_share: Annotated[Share, Field(description="Greatest share of legs with seats whose bid price is zero.")] = 0.95
    missing_share: Annotated[
        Share,
        Field(description="Greatest share of last night's legs, other than departed ones, that are missing tonight."),
    ] = 0.02
    older_hours: Annotated[
        float,
        Field(ge=0, strict=True, description="Hours by which the snapshot may be older than that of last night."),
    ] = 0.0
    part_seconds: Annotated[
        float,
        Field(gt=0, strict=True, description="Seconds that one part may take before its process is ended."),
    ] = 3600.0
