"""The TOML configuration: every key with unit, bounds, default and its origin.

``load_config`` reads the file into frozen sections. A stage never sees the file: it
receives its own section. Paths stay relative to the file's folder (``Config.base``).
"""

from __future__ import annotations

import difflib
import hashlib
import json
import tomllib
from pathlib import Path
from typing import Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator

from dq.errors import ConfigError

#: Families that may hold a real signal, or nothing known: no veto is made of them.
NEVER_VETOED = ("chirp_like", "unknown", "unsorted")


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class Site(_Section):
    """Who is observed."""

    name: str = Field(min_length=1, description="name of the site, for the page")
    strain: str = Field(
        pattern=r"^[A-Za-z0-9][A-Za-z0-9:_.\-]{0,254}$",
        description="name of the strain channel",
    )
    mains_hz: float = Field(
        default=50.0,
        ge=40.0,
        le=70.0,
        description="Hz; fundamental of the mains, 50 or 60 by country",
    )


class Layout(_Section):
    """Where another HDF5 layout keeps a channel and its times."""

    dataset: str = Field(description="path of the dataset inside each file")
    channel: str | None = Field(
        default=None,
        pattern=r"^[A-Za-z0-9][A-Za-z0-9:_.\-]{0,254}$",
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


class ReadyMask(_Section):
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


class Data(_Section):
    """Which files are read."""

    files: list[str] = Field(min_length=1, description="HDF5 paths or globs")
    channels: str = Field(description="the channel list, CSV")
    ready: str | None = Field(
        default=None, description="ready segments; absent = all recorded time"
    )
    injections: str | None = Field(default=None, description="test signals, CSV")
    layout: Layout | None = None
    ready_mask: ReadyMask | None = None


class Conditioning(_Section):
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


class Tiles(_Section):
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


class Transients(_Section):
    """From tiles to transients."""

    snr_threshold: float = Field(
        default=5.5,
        ge=3.5,
        le=1000.0,
        description="a tile counts from this SNR on; 5.5 is exp(-16.1) per tile",
    )


class Families(_Section):
    """The sorter."""

    model: str | None = Field(default=None, description="model file; absent = unsorted")
    features: bool = Field(
        default=False,
        description="write the strain's features also without a model",
    )


_CHANNEL = r"^[A-Za-z0-9][A-Za-z0-9:_.\-]{0,254}$"


class Product(_Section):
    """Two auxiliary channels whose product may be heard in the strain."""

    fast: str = Field(pattern=_CHANNEL, description="the channel with the higher rate")
    slow: str = Field(pattern=_CHANNEL, description="the channel that modulates it")


class Witnesses(_Section):
    """Which auxiliary channels explain the strain's transients."""

    snr_thresholds: list[float] = Field(
        default=[5.5, 7.0, 10.0, 15.0, 25.0, 50.0, 100.0],
        min_length=1,
        max_length=50,
        description="ladder of thresholds on the auxiliary channel, SNR (own choice: "
        "steps of about 1.5)",
    )
    half_windows_s: list[float] = Field(
        default=[0.05, 0.1, 0.2, 0.5, 1.0],
        min_length=1,
        max_length=50,
        description="s; ladder of half-widths around an auxiliary transient",
    )
    false_alarm_probability: float = Field(
        default=0.01,
        gt=0.0,
        le=0.5,
        description="chance of any false witness in a night, trials counted",
    )
    min_coincidences: int = Field(
        default=3,
        ge=1,
        le=1000,
        description="fewer coincidences never accept a channel (own choice)",
    )
    slides: int = Field(
        default=100,
        ge=0,
        le=100_000,
        description="circular slides of the strain that the highest score of all "
        "channels is held against; 100 resolve a chance of 1 %; 0 = none",
    )
    safety_window_s: float = Field(
        default=0.25,
        gt=0.0,
        le=10.0,
        description="s; a channel active within this of a test signal answers it, and "
        "a strain transient within it is the test signal itself (own choice: longer "
        "than delays across a site)",
    )
    safe_leak: float = Field(
        default=0.1,
        gt=0.0,
        le=1.0,
        description="a channel is safe when at most this share of signals could be "
        "heard in it at 95 % confidence (own choice; needs 36 unanswered test signals)",
    )
    slow_max_rate_hz: float = Field(
        default=256.0,
        ge=0.0,
        le=65536.0,
        description="Hz; channels up to this rate are watched for their level in "
        "octave bands; 0 = none (common practice: position and ground sensors are "
        "recorded at 16 to 256 Hz)",
    )
    rms_low_hz: float = Field(
        default=0.0625,
        ge=0.01,
        le=1000.0,
        description="Hz; the octave bands start here (own choice: 0.1 Hz, where motion "
        "begins to drive scattered light, lies inside the lowest)",
    )
    rms_high_hz: float = Field(
        default=16.0,
        ge=0.02,
        le=10000.0,
        description="Hz; and end here or below: 8 octaves. Above, the transient finder "
        "watches (own choice)",
    )
    rms_thresholds: list[float] = Field(
        default=[2.0, 3.0, 4.5, 6.5, 10.0, 15.0, 25.0, 50.0],
        min_length=1,
        max_length=50,
        description="ladder on a band's level over its running median (own choice: "
        "white noise is above 2 for one to three hundredths of the time)",
    )
    fringe_passes: list[int] = Field(
        default=[1, 2, 4],
        max_length=16,
        description="how often light may meet a moving surface, n of 2 n |v| / lambda; "
        "empty = no fringe frequency (own choice: doublings, the ladder lies between)",
    )
    fringe_thresholds: list[float] = Field(
        default=[1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 9.0],
        min_length=1,
        max_length=50,
        description="ladder on the predicted fringe frequency over the strain band's "
        "lower edge (own choice; 1 is the edge)",
    )
    wavelength_nm: float = Field(
        default=1064.0,
        ge=100.0,
        le=20000.0,
        description="nm; wavelength of the interferometer's light (common practice)",
    )
    products: list[Product] = Field(
        default=[],
        max_length=1000,
        description="pairs of channels whose product is searched as well",
    )

    def ladder(self, channel: str) -> list[float]:
        """Give the ladder of thresholds for a channel; derived ones have their own."""
        kind = channel.partition("@")[2].partition("-")[0]
        if kind == "rms":
            return self.rms_thresholds
        return self.fringe_thresholds if kind == "fringe" else self.snr_thresholds


class Vetoes(_Section):
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


class Config(_Section):
    """One configuration file."""

    site: Site
    data: Data
    conditioning: Conditioning = Conditioning()
    tiles: Tiles = Tiles()
    transients: Transients = Transients()
    families: Families = Families()
    witnesses: Witnesses = Witnesses()
    vetoes: Vetoes = Vetoes()
    base: Path = Field(default=Path("."), exclude=True)

    def path(self, relative: str) -> Path:
        """Resolve a path of the file against the file's folder."""
        return self.base / relative


def digest(*sections: BaseModel) -> str:
    """Give the sha256 of the sections' values as canonical JSON."""
    values = [s.model_dump(mode="json") for s in sections]
    text = json.dumps(values, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def load_config(path: str | Path) -> Config:
    """Read and check a configuration file.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Config

    Raises
    ------
    ConfigError
        The file cannot be read, is no TOML, or a key is unknown, missing or out of
        its bounds; the message names the key, the value, the bound and the remedy.
    """
    path = Path(path)
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise ConfigError(
            f"cannot read config {str(path)!r}: {error.strerror}; check the path"
        ) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ConfigError(f"config {str(path)!r} is not TOML: {error}") from error
    return parse_config(raw, base=path.parent, where=str(path))


def parse_config(raw: dict, *, base: Path = Path("."), where: str = "config") -> Config:
    """Turn a parsed TOML table into a checked ``Config``; errors as ``load_config``."""
    if "base" in raw:
        raise ConfigError(f"{where}: unknown key 'base'; remove it")
    try:
        config = Config(**raw, base=base)
    except ValidationError as error:
        raise ConfigError(f"{where}: {_one_line(error)}") from error
    _check_between(config, where)
    return config


#: Lists that must be positive and rising.
_LADDERS = (
    "snr_thresholds",
    "half_windows_s",
    "rms_thresholds",
    "fringe_passes",
    "fringe_thresholds",
)


def _check_between(config: Config, where: str) -> None:
    tiles = config.tiles
    if tiles.q_max <= tiles.q_min:
        raise ConfigError(
            f"{where}: tiles.q_max={tiles.q_max} must be above "
            f"tiles.q_min={tiles.q_min}; raise q_max"
        )
    if tiles.f_low_hz and tiles.f_high_hz and tiles.f_high_hz <= tiles.f_low_hz:
        raise ConfigError(
            f"{where}: tiles.f_high_hz={tiles.f_high_hz} must be above "
            f"tiles.f_low_hz={tiles.f_low_hz}"
        )
    for name in _LADDERS:
        values = getattr(config.witnesses, name)
        if any(v <= 0 for v in values) or sorted(set(values)) != values:
            raise ConfigError(
                f"{where}: witnesses.{name}={values} must be positive and rising"
            )
    pairs = [(p.fast, p.slow) for p in config.witnesses.products]
    for pair in pairs:
        if pair[0] == pair[1] or pairs.count(pair) > 1:
            raise ConfigError(
                f"{where}: witnesses.products fast={pair[0]!r} slow={pair[1]!r}: name "
                "two different channels, and each pair once"
            )
    layout = config.data.layout
    if layout and (layout.step_attribute is None) == (layout.rate_attribute is None):
        raise ConfigError(
            f"{where}: data.layout needs exactly one of step_attribute and "
            "rate_attribute; give the one that the files carry"
        )
    if config.data.ready and config.data.ready_mask:
        raise ConfigError(
            f"{where}: data.ready and data.ready_mask exclude each other; keep one"
        )


def _known_keys(location: tuple) -> list[str]:
    model: type[BaseModel] = Config
    for part in location:
        field = model.model_fields.get(str(part))
        if field is None:
            return []
        kinds = [field.annotation, *getattr(field.annotation, "__args__", ())]
        models = [k for k in kinds if isinstance(k, type) and issubclass(k, BaseModel)]
        if not models:
            return []
        model = models[0]
    return [k for k in model.model_fields if k != "base"]


def _one_line(error: ValidationError) -> str:
    first = error.errors()[0]
    location = tuple(first["loc"])
    key = ".".join(str(p) for p in location)
    if first["type"] == "extra_forbidden":
        known = _known_keys(location[:-1])
        near = difflib.get_close_matches(str(location[-1]), known, n=1, cutoff=0.0)
        hint = f"; nearest known key is {near[0]!r}" if near else ""
        return f"unknown key {key!r}{hint}"
    if first["type"] == "missing":
        return f"key {key!r} is required; add it"
    message = first["msg"].removeprefix("Value error, ")
    message = message[0].lower() + message[1:]
    value = repr(first["input"])
    value = value if len(value) < 80 else value[:77] + "..."
    return f"{key} = {value}: {message}"
