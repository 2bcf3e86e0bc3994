"""The section about vetoes."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, field_validator

from dq.config.section import Section

#: Families that may hold a real signal, or nothing known: no veto is made of them.
NEVER_VETOED = ("chirp_like", "unknown", "unsorted")


class Vetoes(Section):
    """Which time is left out."""

    max_dead_time: float = Field(
        default=0.05,
        ge=0.0,
        le=1.0,
        description="fraction of analysed time that all vetoes together may remove",
    )
    fault_padding_s: float = Field(
        default=0.1,
        ge=0.0,
        le=10.0,
        description="s; added on both sides of a data fault",
    )
    whole_seconds: bool = Field(
        default=False,
        description="move the borders of every veto outward to whole GPS seconds",
    )
    strain_families: list[str] = Field(
        default=[],
        max_length=100,
        description="families seen in the strain itself whose transients are vetoed; "
        "empty: none. chirp_like, unknown and unsorted are never vetoed",
    )
    family_padding_s: float = Field(
        default=0.1,
        ge=0.0,
        le=10.0,
        description="s; added on both sides of a transient of such a family",
    )
    weights: Literal["count", "snr"] = Field(
        default="count",
        description="what a removed transient is worth when vetoes are chosen: 1 each, "
        "or its SNR",
    )
    family_weights: dict[str, float] = Field(
        default={},
        description="factor on that worth by family, at least 0; families not named "
        "count 1, chirp_like always 0",
    )
    held_out_block_s: float = Field(
        default=128.0,
        ge=0.0,
        le=86400.0,
        description="s; vetoes chosen on every other block of this length are measured "
        "on the blocks between; 0: not measured (own choice: longer than windows and "
        "most bursts of transients, short enough for many blocks in an hour)",
    )
    signal_times: int = Field(
        default=2000,
        ge=0,
        le=1_000_000,
        description="random times held against the vetoes as a signal's; 2000 give a "
        "dead time of 1 % to half a percent; 0: none",
    )
    signal_loss_plants: int = Field(
        default=32,
        ge=0,
        le=10_000,
        description="simulated chirps and bursts added to the strain in memory and "
        "searched for, where strain_families are vetoed; one in 32 s; 0: none (own "
        "choice: a thousand seconds of one channel more)",
    )
    false_alarm_rate_hz: float = Field(
        default=1e-3,
        gt=0.0,
        le=1.0,
        description="Hz; background rate at which the volume-time ratio is taken, "
        "raised to 10 transients in the analysed time where that is more (own choice: "
        "below it no loudness can be read off a night)",
    )

    @field_validator("strain_families")
    @classmethod
    def _may_be_vetoed(cls, names: list[str]) -> list[str]:
        for name in names:
            if name in NEVER_VETOED:
                raise ValueError(
                    f"family {name!r} is never vetoed, since a signal may be sorted "
                    "into it; remove it"
                )
        if len(set(names)) != len(names):
            raise ValueError("a family is named twice; remove one")
        return names

    @field_validator("family_weights")
    @classmethod
    def _not_negative(cls, weights: dict[str, float]) -> dict[str, float]:
        for name, weight in weights.items():
            if not 0.0 <= weight <= 1e6:
                raise ValueError(f"weight {weight:g} of {name!r} must lie in 0..1e6")
        return weights
