"""Known waveforms of the invented families in its strain noise, in memory."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.night.channel import analyse_channel
from dq.night.strain_features import measure_transients
from dq.observatory import SiteSettings
from dq.observatory.families import DRAW, Source
from dq.observatory.recording import record_strain
from dq.observatory.schedule import Contribution, Night, plan_night, sample
from dq.observatory.snr import NoiseModel

START = 1_420_000_000 - 1_420_000_000 % 64

#: Families whose members are one transient each.
FAMILIES = (
    "beat_note",
    "mains_burst",
    "impact",
    "ground_motion",
    "acoustic",
    "violin_ringdown",
    "short_burst",
    "test_signal",
)


def config(**sections):
    """Give a configuration without files."""
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            **sections,
        }
    )


def quiet_night(seed: int, seconds: int, rate: int = 4096, **changes) -> Night:
    """Plan a night of noise alone."""
    settings = SiteSettings(
        seed=seed,
        start=START,
        duration_s=seconds,
        strain_rate=rate,
        injections_per_hour=0,
        saturations_per_hour=0,
        rate_scale=0,
        own_glitch_scale=0,
        gap_s=0,
        strain_nan_s=0,
        auxiliary_nan_s=0,
        not_ready_s=0,
    )
    return plan_night(replace(settings, **changes))


def draw_sources(seed: int, each: int) -> list[tuple[str, Source]]:
    """Draw members of every family."""
    rng = np.random.default_rng(seed)
    return [(name, DRAW[name](rng)) for name in FAMILIES for _ in range(each)]


def noise_model(rate: int = 4096) -> NoiseModel:
    """Give the strain's true noise, against which SNR is measured."""
    from dq.observatory.channels import strain_seen

    return NoiseModel(strain_seen, sample_rate=rate, f_low_hz=10)


def plant(
    sources, snrs, *, seed: int, spacing_s: float = 8.0, rate: int = 4096
) -> tuple[MemoryChannel, np.ndarray]:
    """Plant sources, one after the other; give the channel and their times."""
    margin = 64.0
    times = margin + spacing_s * np.arange(len(sources))
    seconds = 64 * int(np.ceil((times[-1] + margin) / 64))
    night = quiet_night(seed, max(seconds, 512), rate)
    model = noise_model(rate)
    for (_, source), snr, time in zip(sources, snrs, times, strict=True):
        values, _ = sample(source, rate, 0.45 * rate)
        amplitude = snr / model.snr(values) * float(night.drift(time))
        night.add("OV-STRAIN", Contribution(time, source, amplitude))
    strain = record_strain(night)[0]
    return MemoryChannel("OV-STRAIN", rate, START * NS, strain), START + times


def find(data: MemoryChannel) -> pd.DataFrame:
    """Find the transients of a planted channel."""
    return analyse_channel(
        data,
        ready=None,
        start_ns=data.start_ns,
        end_ns=int(data.recorded.ends[-1]),
        config=config(),
        f_low_hz=10.0,
    ).transients


def measured(data: MemoryChannel, transients: pd.DataFrame, **options) -> pd.DataFrame:
    """Measure transients of a planted channel."""
    return measure_transients(
        data, transients, ready=None, config=config(), f_low_hz=10.0, **options
    ).table


def loudest_near(table: pd.DataFrame, sources, times) -> list[int | None]:
    """Give the row of the loudest transient that meets each source."""
    rows = []
    for (_, source), time in zip(sources, times, strict=True):
        near = (table.gps_end > time - source.before_s) & (
            table.gps_start < time + source.after_s
        )
        rows.append(int(table.snr[near].idxmax()) if near.any() else None)
    return rows
