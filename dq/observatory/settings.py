"""What an invented night is made of: every rate, strength and coupling in one place."""

from __future__ import annotations

from dataclasses import dataclass, replace

from dq.errors import InputError

#: Family of the actuated chirps in the truth tables.
TEST_SIGNAL = "test_signal"
SATURATION = "saturation"


@dataclass(frozen=True)
class FamilyRate:
    """How often a family disturbs the strain, and how loudly.

    SNR follows a Pareto law of index ``snr_index`` cut to [``snr_low``, ``snr_high``].
    For scattered light an event is an epoch of many arches, and the SNR is that of the
    loudest arch.
    """

    family: str
    per_hour: float
    snr_low: float
    snr_high: float = 400.0
    snr_index: float = 1.2


@dataclass(frozen=True)
class Coupling:
    """Which channel sees a family, how surely, how late and how well.

    Attributes
    ----------
    family, witness : str
    delay_s : float
        Time in the strain minus time in the witness.
    probability : float
        That the witness sees an event at all.
    snr_ratio : float or None
        Witness SNR over strain SNR, before a scatter of 20 %; None where the witness
        records the source's own quantity and no SNR is asked for.
    follows : str
        Name of a witness whose draw this one shares (a redundant sensor).
    """

    family: str
    witness: str
    delay_s: float
    probability: float
    snr_ratio: float | None
    follows: str = ""


FAMILY_RATES: tuple[FamilyRate, ...] = (
    FamilyRate("scattered_light", 10, 25.0, 120.0),
    FamilyRate("beat_note", 42, 20.0),
    FamilyRate("mains_burst", 34, 14.0),
    FamilyRate("impact", 46, 9.0),
    FamilyRate("ground_motion", 26, 9.0),
    FamilyRate("acoustic", 40, 14.0),
    FamilyRate("violin_ringdown", 18, 18.0),
    FamilyRate("short_burst", 55, 7.0),
)

#: The first coupling of a family names its witness in the truth tables.
COUPLINGS: tuple[Coupling, ...] = (
    Coupling("scattered_light", "OV-BAFFLE-PD", 0.0, 1.0, 3.0),
    Coupling("scattered_light", "OV-BAFFLE-POS", 0.0, 1.0, None),
    Coupling("beat_note", "OV-RF-BEAT", 0.0, 0.9, 2.0),
    Coupling("mains_burst", "OV-MAINS-VOLT", 0.0, 0.95, 2.5),
    Coupling("mains_burst", "OV-MAGNET-HALL", 0.0, 0.6, 1.0),
    Coupling("impact", "OV-BENCH-ACC-1", 0.004, 0.9, 2.0),
    Coupling("impact", "OV-BENCH-ACC-2", 0.004, 0.9, 1.7, follows="OV-BENCH-ACC-1"),
    Coupling("ground_motion", "OV-GROUND-Z", 0.15, 0.95, 2.0),
    Coupling("ground_motion", "OV-GROUND-X", 0.12, 0.7, 1.0),
    Coupling("ground_motion", "OV-GROUND-Y", 0.10, 0.4, 0.8),
    Coupling("acoustic", "OV-MIC-HALL", 0.030, 0.7, 1.8),
    Coupling("violin_ringdown", "OV-FIBRE-SENSE", 0.0, 0.35, 0.9),
)


@dataclass(frozen=True)
class SiteSettings:
    """An invented night.

    Attributes
    ----------
    seed : int
        Everything random follows from it.
    start : int
        GPS second of the first sample.
    duration_s : int
        At least 128 s.
    strain_rate : int
        Hz.
    noise_level, level_drift, drift_period_s : float
        Factor on the strain's noise amplitude, and its slow change.
    families, couplings : tuple
    rate_scale, coupling_scale, own_glitch_scale : float
        Factors on every family's rate, every coupling's probability (held at 1) and
        the rate of glitches that stay in their own channel.
    injections_per_hour, saturations_per_hour : float
        Rounded to a whole number for the night.
    gap_s, strain_nan_s, auxiliary_nan_s, not_ready_s : float
        Lengths of the recording gap, the not-finite stretches, and the pause of the
        ready time; 0 leaves each out. None takes more than a twentieth of the night.
    rail : float
        Strain at which the converter saturates.
    pitch_bursts_per_hour : float
        Bursts of a mirror's pitch, heard in the strain as far as the beam lies beside
        its centre (``dq.observatory.bilinear``). At 0 the two channels are left out.
    spare_channels : int
        Further quiet auxiliary channels.
    strain_file_s : int
        Length of a strain file.
    clearance_s : float
        Smallest time between one disturbance's end and the next one's start.
    """

    seed: int = 0
    start: int = 1_420_000_037
    duration_s: int = 3600
    strain_rate: int = 4096
    noise_level: float = 1.0
    level_drift: float = 0.15
    drift_period_s: float = 2400.0
    families: tuple[FamilyRate, ...] = FAMILY_RATES
    couplings: tuple[Coupling, ...] = COUPLINGS
    rate_scale: float = 1.0
    coupling_scale: float = 1.0
    own_glitch_scale: float = 1.0
    injections_per_hour: float = 12.0
    saturations_per_hour: float = 3.0
    pitch_bursts_per_hour: float = 0.0
    gap_s: float = 20.0
    strain_nan_s: float = 0.5
    auxiliary_nan_s: float = 45.0
    not_ready_s: float = 30.0
    rail: float = 1e-18
    spare_channels: int = 0
    strain_file_s: int = 900
    clearance_s: float = 0.3

    def __post_init__(self):
        """Refuse impossible settings.

        Raises
        ------
        InputError
            A value is out of its bounds.
        """
        _within("duration_s", self.duration_s, 128, 86400)
        _within("seed", self.seed, 0, 2**63 - 1)
        _within("start", self.start, 0, 9_000_000_000)
        _within("strain_rate", self.strain_rate, 1024, 16384)
        _within("noise_level", self.noise_level, 1e-3, 1e3)
        _within("level_drift", self.level_drift, 0.0, 0.9)
        _within("drift_period_s", self.drift_period_s, 60.0, 1e6)
        _within("rate_scale", self.rate_scale, 0.0, 10.0)
        _within("coupling_scale", self.coupling_scale, 0.0, 10.0)
        _within("own_glitch_scale", self.own_glitch_scale, 0.0, 10.0)
        _within("pitch_bursts_per_hour", self.pitch_bursts_per_hour, 0.0, 2000.0)
        _within("spare_channels", self.spare_channels, 0, 10_000)
        _within("strain_file_s", self.strain_file_s, 16, 86400)
        for name in ("gap_s", "strain_nan_s", "auxiliary_nan_s", "not_ready_s"):
            _within(name, getattr(self, name), 0.0, 3600.0)

    def fault_length(self, name: str) -> float:
        """Give the length in s that a fault of the settings has in this night.

        Whole eighths of a second, which are whole samples at every rate of the site.
        """
        wanted = min(getattr(self, name), self.duration_s / 20)
        return int(8 * wanted) / 8

    def with_rates(self, **per_hour: float) -> SiteSettings:
        """Give the settings with other rates, as in ``with_rates(impact=0)``.

        Raises
        ------
        InputError
            A family is unknown.
        """
        known = {f.family for f in self.families}
        unknown = sorted(set(per_hour) - known)
        if unknown:
            raise InputError(
                f"family {unknown[0]!r} is unknown; known are "
                + ", ".join(sorted(known))
            )
        families = tuple(
            replace(f, per_hour=per_hour.get(f.family, f.per_hour))
            for f in self.families
        )
        return replace(self, families=families)


def _within(name: str, value: float, low: float, high: float) -> None:
    if not low <= value <= high:
        raise InputError(f"{name}={value} must lie within {low:g}..{high:g}")
