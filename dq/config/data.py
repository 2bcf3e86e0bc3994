"""Sections about the site and its data."""

from __future__ import annotations

from pydantic import Field, field_validator

from dq.config.section import CHANNEL, Section


class Site(Section):
    """Who is observed."""

    name: str = Field(min_length=1, description="name of the site, for the page")
    strain: str = Field(
        pattern=CHANNEL,
        description="name of the strain channel",
    )
    mains_hz: float = Field(
        default=50.0,
        ge=40.0,
        le=70.0,
        description="Hz; fundamental of the mains, 50 or 60 by country",
    )


class Layout(Section):
    """Where another HDF5 layout keeps a channel and its times."""

    dataset: str = Field(description="path of the dataset inside each file")
    channel: str | None = Field(
        default=None,
        pattern=CHANNEL,
        description="channel name when the file does not carry it",
    )
    start_attribute: str = Field(
        default="gps_start", description="attribute with the first sample's GPS second"
    )
    step_attribute: str | None = Field(
        default=None, description="attribute with the seconds per sample"
    )
    rate_attribute: str | None = Field(
        default=None, description="attribute with the samples per second"
    )


class ReadyMask(Section):
    """A 1 Hz bit mask inside the data files that says when data are ready."""

    dataset: str = Field(description="path of the mask dataset inside each file")
    bits: list[int] = Field(
        min_length=1, description="bits (0 = lowest) that must all be set"
    )

    @field_validator("bits")
    @classmethod
    def _bits_in_range(cls, bits: list[int]) -> list[int]:
        if any(b < 0 or b > 62 for b in bits):
            raise ValueError("bits must lie in 0..62")
        return bits


class Data(Section):
    """Which files are read."""

    files: list[str] = Field(min_length=1, description="HDF5 paths or globs")
    channels: str = Field(description="the channel list, CSV")
    ready: str | None = Field(
        default=None, description="ready segments; absent = all recorded time"
    )
    injections: str | None = Field(default=None, description="test signals, CSV")
    layout: Layout | None = None
    ready_mask: ReadyMask | None = None
