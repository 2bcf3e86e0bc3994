"""When what happens: faults, events, their loudness, and who sees them."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from dq.observatory import bilinear
from dq.observatory.channels import (
    AUXILIARY,
    NOT_FINITE,
    STRAIN,
    ChannelSpec,
    spare_channel,
    strain_seen,
)
from dq.observatory.families import DRAW, Source, sine_gaussian
from dq.observatory.noise import LevelDrift, stream
from dq.observatory.settings import (
    SATURATION,
    TEST_SIGNAL,
    Coupling,
    SiteSettings,
)
from dq.observatory.snr import Measured, NoiseModel

#: Strain energy below this frequency counts for no SNR, Hz: the seismic wall begins.
STRAIN_LOW_HZ = 10.0

#: Arches of scattered light, and what the beam hears of a mirror's pitch, fainter than
#: this are no transients of the truth table.
FAINTEST = 5.0

#: Events keep this far from the ends of the night, s.
_MARGIN_S = 4.0

#: SNR of the actuated chirps.
_TEST_SNR = (12.0, 60.0)

_TRIES = 400


@dataclass(frozen=True)
class Contribution:
    """A source as one channel holds it: ``amplitude`` in the channel's unit."""

    time_s: float
    source: Source
    amplitude: float
    quantity: bool = False


@dataclass(frozen=True)
class Transient:
    """A row of the truth table; times in s from the start of the night."""

    family: str
    measured: Measured
    witness: str
    seen_by: tuple[str, ...]
    event: int


@dataclass(frozen=True)
class OwnGlitch:
    """A glitch that stays in its auxiliary channel."""

    channel: str
    family: str
    measured: Measured


@dataclass(frozen=True)
class Fault:
    """A planted data fault, in samples of its channel."""

    channel: str
    kind: str
    first: int
    end: int


@dataclass
class Night:
    """All that happens in an invented night.

    Attributes
    ----------
    contributions : dict of str to list of Contribution
        By channel; the strain's, too.
    transients, own : list
        The truth: strain transients, glitches of single channels.
    injections : list of (time_s, snr)
    gap, strain_nan, auxiliary_nan : Fault or None
    ready_s : list of (start, end)
        Ready time in s from the start.
    """

    settings: SiteSettings
    channels: list[ChannelSpec]
    drift: LevelDrift
    contributions: dict[str, list[Contribution]] = field(default_factory=dict)
    transients: list[Transient] = field(default_factory=list)
    own: list[OwnGlitch] = field(default_factory=list)
    injections: list[tuple[float, float]] = field(default_factory=list)
    gap: Fault | None = None
    strain_nan: Fault | None = None
    auxiliary_nan: Fault | None = None
    ready_s: list[tuple[float, float]] = field(default_factory=list)

    def add(self, channel: str, item: Contribution) -> None:
        """Put a source into a channel."""
        self.contributions.setdefault(channel, []).append(item)


def plan_night(settings: SiteSettings) -> Night:
    """Draw a night from its seed."""
    spares = [spare_channel(n + 1) for n in range(settings.spare_channels)]
    beam = bilinear.CHANNELS if settings.pitch_bursts_per_hour else ()
    phase = stream(settings.seed, "drift").uniform(0, 2 * np.pi)
    night = Night(
        settings=settings,
        channels=[*AUXILIARY, *beam, *spares],
        drift=LevelDrift(
            settings.noise_level, settings.level_drift, settings.drift_period_s, phase
        ),
    )
    calendar = Calendar(settings)
    _plan_faults(night, calendar)
    planner = _Planner(night, calendar)
    planner.saturations()
    planner.test_signals()
    for rate in settings.families:
        planner.family(rate)
    if beam:
        planner.pitch_bursts()
    for spec in night.channels:
        if spec.own is not None:
            planner.own_glitches(spec)
    night.transients.sort(key=lambda t: t.measured.peak_s)
    night.injections.sort()
    return night


class Calendar:
    """The taken time of a night; nothing is placed on top of anything else."""

    def __init__(self, settings: SiteSettings):
        self._clearance = settings.clearance_s
        self._duration = settings.duration_s
        self._taken: list[tuple[float, float]] = []

    def block(self, start_s: float, end_s: float) -> None:
        """Take a stretch of time."""
        self._taken.append((start_s, end_s))

    def place(
        self, rng: np.random.Generator, before_s: float, after_s: float
    ) -> float | None:
        """Take room for an event and give its anchor; None when the night is full."""
        low, high = _MARGIN_S + before_s, self._duration - _MARGIN_S - after_s
        if high <= low:
            return None
        for _ in range(_TRIES):
            anchor = rng.uniform(low, high)
            start = anchor - before_s - self._clearance
            end = anchor + after_s + self._clearance
            if all(end <= s or start >= e for s, e in self._taken):
                self.block(anchor - before_s, anchor + after_s)
                return anchor
        return None


def _plan_faults(night: Night, calendar: Calendar) -> None:
    settings = night.settings
    seconds, rate = settings.duration_s, settings.strain_rate

    def stretch(channel, kind, at, length_s, rate):
        if length_s <= 0:
            return None
        first = round(8 * at * seconds) * rate // 8
        fault = Fault(channel, kind, first, first + round(length_s * rate))
        if channel == STRAIN:
            calendar.block(fault.first / rate - 1.0, fault.end / rate + 1.0)
        return fault

    night.gap = stretch(STRAIN, "gap", 0.5621, settings.fault_length("gap_s"), rate)
    length = settings.fault_length("strain_nan_s")
    night.strain_nan = stretch(STRAIN, "not_finite", 0.3137, length, rate)
    spec = next(c for c in night.channels if c.name == NOT_FINITE)
    length = settings.fault_length("auxiliary_nan_s")
    night.auxiliary_nan = stretch(NOT_FINITE, "not_finite", 0.7262, length, spec.rate)
    pause = round(0.45 * seconds)
    night.ready_s = [(0.0, float(seconds))]
    if settings.not_ready_s > 0:
        end = pause + max(1.0, int(settings.fault_length("not_ready_s")))
        night.ready_s = [(0.0, float(pause)), (end, float(seconds))]


def heavy_tail(
    rng: np.random.Generator, low: float, high: float, index: float
) -> float:
    """Draw from a Pareto law of the index, cut to [low, high]."""
    u = rng.uniform()
    cut = (low / high) ** index
    return float(low * (1.0 - u * (1.0 - cut)) ** (-1.0 / index))


def sample(source: Source, rate: int, top_hz: float) -> tuple[np.ndarray, float]:
    """Sample a source on its own clock; give the values and the first sample's time."""
    first = int(np.floor(-source.before_s * rate))
    last = int(np.ceil(source.after_s * rate))
    times = np.arange(first, last + 1) / rate
    inside = (times >= -source.before_s) & (times <= source.after_s)
    return np.where(inside, source.wave(times, top_hz), 0.0), first / rate


class _Planner:
    """Places events and gives them their strengths."""

    def __init__(self, night: Night, calendar: Calendar):
        self.night = night
        self.settings = night.settings
        self.calendar = calendar
        self.strain = NoiseModel(
            strain_seen,
            sample_rate=self.settings.strain_rate,
            f_low_hz=STRAIN_LOW_HZ,
        )
        self.models = {
            c.name: NoiseModel(c.seen, sample_rate=c.rate, f_low_hz=c.f_low_hz)
            for c in night.channels
            if c.noise is not None
        }
        self.events = 0

    def _count(self, rng, per_hour: float, *, fixed: bool = False) -> int:
        expected = per_hour * self.settings.duration_s / 3600.0
        return round(expected) if fixed else int(rng.poisson(expected))

    def _measure(self, source: Source, wanted: float) -> tuple[float, list[Measured]]:
        """Give the amplitude that brings the loudest part to an SNR, and all parts."""
        rate = self.settings.strain_rate
        values, first_s = sample(source, rate, 0.45 * rate)
        if not source.cuts_s:
            found = self.strain.measure(values, first_s=first_s)
            return wanted / found.snr, [_louder(found, wanted / found.snr)]
        u, _ = self.strain.whitened(values)
        edges = [round((c - first_s) * rate) for c in source.cuts_s]
        parts = []
        for low, high in zip([0, *edges], [*edges, len(u)], strict=True):
            total = float(np.sum(np.abs(u[low:high]) ** 2))
            if total > 0:
                begin = first_s + low / rate
                parts.append(self.strain.describe(u[low:high], total, first_s=begin))
        factor = wanted / max(p.snr for p in parts)
        return factor, [_louder(p, factor) for p in parts]

    def saturations(self) -> None:
        """Place the upsets that drive the converter to its rail."""
        rng = stream(self.settings.seed, SATURATION)
        for _ in range(
            self._count(rng, self.settings.saturations_per_hour, fixed=True)
        ):
            source = DRAW[SATURATION](rng)
            at = self.calendar.place(rng, 1.0, source.after_s)
            if at is None:
                continue
            amplitude = self.settings.rail * rng.uniform(2.5, 6.0)
            rate = self.settings.strain_rate
            values, first_s = sample(source, rate, 0.45 * rate)
            clipped = np.clip(
                values * amplitude, -self.settings.rail, self.settings.rail
            )
            found = self.strain.measure(clipped, first_s=first_s)
            found = _louder(found, 1.0 / float(self.night.drift(at)))
            self.night.add(STRAIN, Contribution(at, source, amplitude))
            self._note(SATURATION, at, [found], "", ())

    def test_signals(self) -> None:
        """Place the actuated chirps."""
        rng = stream(self.settings.seed, TEST_SIGNAL)
        for _ in range(self._count(rng, self.settings.injections_per_hour, fixed=True)):
            source = DRAW[TEST_SIGNAL](rng)
            wanted = float(rng.uniform(*_TEST_SNR))
            at = self.calendar.place(rng, source.before_s, source.after_s + 0.1)
            if at is None:
                continue
            factor, parts = self._measure(source, wanted)
            factor *= float(self.night.drift(at))
            self.night.add(STRAIN, Contribution(at, source, factor))
            self.night.injections.append((at, wanted))
            self._note(TEST_SIGNAL, at, parts, "", ())

    def family(self, rate) -> None:
        """Place a family's events in the strain and in its witnesses."""
        rng = stream(self.settings.seed, "family", rate.family)
        couplings = [c for c in self.settings.couplings if c.family == rate.family]
        witness = couplings[0].witness if couplings else ""
        for _ in range(self._count(rng, rate.per_hour * self.settings.rate_scale)):
            source = DRAW[rate.family](rng)
            wanted = heavy_tail(rng, rate.snr_low, rate.snr_high, rate.snr_index)
            draws = rng.uniform(size=len(couplings)), rng.normal(size=len(couplings))
            at = self.calendar.place(rng, source.before_s, source.after_s)
            if at is None:
                continue
            factor, parts = self._measure(source, wanted)
            factor *= float(self.night.drift(at))
            self.night.add(STRAIN, Contribution(at, source, factor))
            seen = self._couple(source, at, wanted, couplings, draws)
            if source.cuts_s:
                parts = [p for p in parts if p.snr >= FAINTEST]
            self._note(rate.family, at, parts, witness, seen)

    def pitch_bursts(self) -> None:
        """Place bursts of a mirror's pitch, and what a beam beside its centre hears."""
        rng = stream(self.settings.seed, "family", bilinear.FAMILY)
        spot = bilinear.spot_motion(rng, self.settings.duration_s)
        whole = Contribution(0.0, spot, 1.0, quantity=True)
        self.night.add(bilinear.SPOT, whole)
        for _ in range(self._count(rng, self.settings.pitch_bursts_per_hour)):
            burst = bilinear.pitch_burst(rng)
            wanted = heavy_tail(rng, *bilinear.PITCH_SNR, bilinear.PITCH_SNR_INDEX)
            at = self.calendar.place(rng, burst.before_s, burst.after_s)
            if at is None:
                continue
            amplitude = self._plant(bilinear.PITCH, burst, at, wanted)[1]
            heard = bilinear.under_beam(burst, spot, at)
            strain = amplitude * bilinear.STRAIN_PER_PRAD_MM
            self.night.add(STRAIN, Contribution(at, heard, strain))
            rate = self.settings.strain_rate
            values, first_s = sample(heard, rate, 0.45 * rate)
            found = self.strain.measure(strain * values, first_s=first_s)
            found = _louder(found, 1.0 / float(self.night.drift(at)))
            if found.snr >= FAINTEST:
                seen = (bilinear.PRODUCT,)
                self._note(bilinear.FAMILY, at, [found], bilinear.PRODUCT, seen)

    def _couple(
        self, source: Source, at: float, snr: float, couplings: list[Coupling], draws
    ) -> tuple[str, ...]:
        chance = dict(zip((c.witness for c in couplings), draws[0], strict=True))
        seen = []
        for coupling, scatter in zip(couplings, draws[1], strict=True):
            name = coupling.witness
            drawn = chance[coupling.follows or name]
            if drawn >= coupling.probability * self.settings.coupling_scale:
                continue
            if name not in self.models:
                continue
            time = at - coupling.delay_s
            if coupling.snr_ratio is None:
                self.night.add(name, Contribution(time, source, 1.0, quantity=True))
            else:
                wanted = snr * coupling.snr_ratio * float(np.exp(0.2 * scatter))
                self._plant(name, source, time, wanted)
            seen.append(name)
        return tuple(seen)

    def _plant(
        self, name: str, source: Source, time: float, snr: float
    ) -> tuple[Measured, float]:
        """Put a source into a channel; give what it is there and its amplitude."""
        model = self.models[name]
        values, first_s = sample(source, model.sample_rate, 0.45 * model.sample_rate)
        found = model.measure(values, first_s=first_s)
        factor = snr / found.snr
        self.night.add(name, Contribution(time, source, factor))
        return _louder(found, factor), factor

    def own_glitches(self, spec: ChannelSpec) -> None:
        """Place the glitches that stay in a channel."""
        rng = stream(self.settings.seed, "own", spec.name)
        own = spec.own
        for time in self._own_times(rng, own):
            if own.family:
                source = DRAW[own.family](rng)
            else:
                source = sine_gaussian(
                    rng, f_low_hz=1.5 * spec.f_low_hz, f_high_hz=0.3 * spec.rate
                )
            snr = heavy_tail(rng, own.snr_low, own.snr_high, 1.2)
            reach = max(source.before_s, source.after_s) + 1.0
            if not reach < time < self.settings.duration_s - reach:
                continue
            found, _ = self._plant(spec.name, source, time, snr)
            self.night.own.append(OwnGlitch(spec.name, own.family, _later(found, time)))

    def _own_times(self, rng, own) -> np.ndarray:
        seconds = self.settings.duration_s
        if own.kind == "periodic":
            times = np.arange(rng.uniform(0, own.period_s), seconds, own.period_s)
            return times + rng.normal(0.0, 0.01, len(times))
        count = self._count(rng, own.per_hour * self.settings.own_glitch_scale)
        if own.kind == "poisson":
            return np.sort(rng.uniform(0, seconds, count))
        centres = rng.uniform(0, seconds, max(1, count // 8))
        return np.sort(rng.choice(centres, count) + rng.exponential(3.0, count))

    def _note(self, family, at, parts, witness, seen) -> None:
        for found in parts:
            self.night.transients.append(
                Transient(family, _later(found, at), witness, seen, self.events)
            )
        self.events += 1


def _louder(found: Measured, factor: float) -> Measured:
    return Measured(
        found.snr * factor,
        found.peak_s,
        found.start_s,
        found.end_s,
        found.frequency_hz,
    )


def _later(found: Measured, seconds: float) -> Measured:
    return Measured(
        found.snr,
        found.peak_s + seconds,
        found.start_s + seconds,
        found.end_s + seconds,
        found.frequency_hz,
    )
