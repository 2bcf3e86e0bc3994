"""The section about witnesses."""

from __future__ import annotations

from pydantic import Field

from dq.config.section import CHANNEL, Section


class Product(Section):
    """Two auxiliary channels whose product may be heard in the strain."""

    fast: str = Field(pattern=CHANNEL, description="the channel with the higher rate")
    slow: str = Field(pattern=CHANNEL, description="the channel that modulates it")


class Witnesses(Section):
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
