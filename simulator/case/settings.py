"""case.toml as typed, frozen settings.

Public names: `Settings`, its sections `Commitment`, `Emissions`, `Horizon`, `Network`, `Penalties`,
and `known_zones`.
"""

from functools import cache
from typing import Annotated, Literal
from zoneinfo import available_timezones

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, model_validator

__all__ = ["Commitment", "Emissions", "Horizon", "Network", "Penalties", "Settings", "known_zones"]


@cache
def known_zones() -> frozenset[str]:
    """Return the IANA time zones, which are files that are best looked up once."""
    return frozenset(available_timezones())


def _known_zone(name: str) -> str:
    if name not in known_zones():
        raise ValueError("must be an IANA time zone")
    return name


Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Horizon(_Section):
    """What one optimisation sees and what is kept of it, h."""

    window_hours: Positive = 48.0
    keep_hours: Positive = 24.0

    @model_validator(mode="after")
    def _keep_within_window(self) -> "Horizon":
        if self.keep_hours > self.window_hours:
            raise ValueError("keep_hours must be at most window_hours")
        return self


class Penalties(_Section):
    """Prices of what should not happen, currency per MWh."""

    unserved: NotNegative = 10000.0
    surplus: NotNegative = 1000.0


class Commitment(_Section):
    """How on/off decisions are made (formulation.md 2.3)."""

    mode: Literal["given", "relaxed", "optimal"] = "optimal"
    mip_gap: NotNegative = 0.001
    seconds: Positive = 120.0


class Network(_Section):
    """Which network limits hold (formulation.md 2.6)."""

    limits: Literal["none", "lines", "secure"] = "lines"
    losses: bool = False


class Emissions(_Section):
    """What carbon costs, currency per t."""

    carbon_price_per_t: NotNegative = 0.0


class Settings(_Section):
    """case.toml, defaults filled in."""

    format: Literal[1]
    name: Annotated[str, Field(min_length=1)]
    currency: Annotated[str, Field(min_length=1)] = "EUR"
    time_zone: Annotated[str, AfterValidator(_known_zone)] = "UTC"
    base_mva: Positive = 100.0
    horizon: Horizon = Horizon()
    penalties: Penalties = Penalties()
    commitment: Commitment = Commitment()
    network: Network = Network()
    emissions: Emissions = Emissions()
