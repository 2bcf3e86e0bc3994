"""Sections about the search: spectrum, tiles, transients, families."""

from __future__ import annotations

from pydantic import Field

from dq.config.section import Section


class Conditioning(Section):
    """Spectrum and whitening."""

    spectrum_segment_s: float = Field(
        default=4.0,
        ge=1.0,
        le=32.0,
        description="s; tapered segment of the spectrum. 4 s resolves lines to 0.5 Hz "
        "and leaves 32 half-overlapped segments in a frame (own choice)",
    )
    spectrum_frame_s: float = Field(
        default=64.0,
        ge=8.0,
        le=512.0,
        description="s; a spectrum is measured per frame on a fixed GPS grid "
        "(own choice: shorter than drifts of the level, common practice minutes)",
    )
    spectrum_span_s: float = Field(
        default=128.0,
        ge=0.0,
        le=1024.0,
        description="s; frames up to this far on both sides of a block are combined",
    )
    whitening_half_length_s: float = Field(
        default=2.0,
        ge=0.25,
        le=16.0,
        description="s; half-length of the whitening filter = its settling time",
    )


class Tiles(Section):
    """The multi-Q tile plan."""

    block_s: float = Field(
        default=64.0,
        ge=8.0,
        le=512.0,
        description="s; analysis blocks start at GPS multiples of this",
    )
    mismatch: float = Field(
        default=0.2,
        gt=0.0,
        le=0.5,
        description="worst-case fractional energy loss between tiles "
        "(Chatterji et al. 2004)",
    )
    q_min: float = Field(
        default=4.0, ge=3.3166248, le=200.0, description="lowest Q; bound is sqrt(11)"
    )
    q_max: float = Field(default=64.0, ge=3.3166248, le=500.0, description="highest Q")
    f_low_hz: float | None = Field(
        default=None,
        gt=0.0,
        le=32768.0,
        description="Hz; lower edge of the band; default sample_rate / 50 held within "
        "1..10 Hz, unless channels.csv says otherwise (own choice)",
    )
    f_high_hz: float | None = Field(
        default=None,
        gt=0.0,
        le=32768.0,
        description="Hz; upper edge; default and bound: what the rate carries",
    )


class Transients(Section):
    """From tiles to transients."""

    snr_threshold: float = Field(
        default=5.5,
        ge=3.5,
        le=1000.0,
        description="a tile counts from this SNR on; 5.5 is exp(-16.1) per tile",
    )


class Families(Section):
    """The sorter."""

    model: str | None = Field(default=None, description="model file; absent = unsorted")
    features: bool = Field(
        default=False,
        description="write the strain's features also without a model",
    )
