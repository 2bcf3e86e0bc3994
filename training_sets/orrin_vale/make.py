"""Make the invented site's training set, or another one of its kind to test on.

``python training_sets/orrin_vale/make.py DIR [--seeds 1000-1007] [--noise 1.0]
[--truth]`` makes one hour of the invented strain per seed, finds and measures its
transients with the tool itself, and writes ``features.csv`` and ``labels.csv`` to DIR.

Two invented analysts label: the first looks at nearly all transients and errs in 2 of
100, the second at a quarter and errs in 4. ``--truth`` writes one right label for each.
Simulated chirps of 5 to 60 solar masses are planted between the transients and labelled
``chirp_like`` by ``simulation``. Quieter copies of the transients, planted into other
noise, follow them in the table and name their ``parent``; ``--truth`` makes none.
"""

from __future__ import annotations

import argparse
import io
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd

from dq.chirp import chirp_mass, chirp_waveform, time_to_coalescence
from dq.config import load_config
from dq.families import CHIRP_LIKE, draw_chirps
from dq.features import NAMES
from dq.night.copies import measure_copies
from dq.night.find import find_in_channel
from dq.night.inputs import read_inputs
from dq.night.judge import transient_ids
from dq.night.labelled import COPIES, copy_rows
from dq.night.strain_features import measure_transients
from dq.observatory import SiteSettings
from dq.observatory.families import Source
from dq.observatory.listing import transient_truth
from dq.observatory.recording import record_strain, write_strain
from dq.observatory.schedule import Contribution, Night, plan_night, sample
from dq.observatory.snr import NoiseModel

STRAIN = "OV-STRAIN"

#: Nobody labels what hardly shows.
LEAST_SNR = 5.8

#: The invented analysts: share of the transients they look at, share named wrongly.
LABELLERS = {"analyst-1": (0.98, 0.02), "analyst-2": (0.25, 0.04)}

CHIRPS_PER_HOUR = 36
START_HZ = 20.0

_CONFIG = """[site]
name = "Orrin Vale"
strain = "OV-STRAIN"
[data]
files = ["*.h5"]
channels = "channels.csv"
"""


def settings_of(seed: int, noise: float) -> SiteSettings:
    """Give a night's settings: many transients, no recording faults."""
    start = 1_421_000_000 + 7200 * (seed % 10_000)
    settings = SiteSettings(
        seed=seed,
        start=start,
        noise_level=noise,
        rate_scale=1.3,
        injections_per_hour=0,
        saturations_per_hour=24,
        gap_s=0,
        strain_nan_s=0,
        auxiliary_nan_s=0,
        not_ready_s=0,
    )
    return settings.with_rates(violin_ringdown=26, scattered_light=9)


def add_chirps(night: Night, rng: np.random.Generator) -> list[float]:
    """Plant chirps where nothing else happens; give their times of coalescence, s."""
    from dq.observatory.channels import strain_seen

    settings = night.settings
    rate = settings.strain_rate
    model = NoiseModel(strain_seen, sample_rate=rate, f_low_hz=10)
    busy = [(t.measured.start_s, t.measured.end_s) for t in night.transients]
    times: list[float] = []
    for first, second, phase in draw_chirps(20 * CHIRPS_PER_HOUR, rng=rng):
        mass = float(chirp_mass(first, second))
        before = float(time_to_coalescence(START_HZ, mass=mass)) + 0.2
        at = float(rng.uniform(40, settings.duration_s - 40))
        free = all(e < at - before - 0.5 or s > at + 0.5 for s, e in busy)
        if not free or len(times) == CHIRPS_PER_HOUR:
            continue

        def wave(t, top_hz, pair=(first, second), phase=phase):
            return chirp_waveform(
                t, mass_1=pair[0], mass_2=pair[1], start_hz=START_HZ, phase=phase
            )

        source = Source(wave, before, 0.02)
        values, _ = sample(source, rate, 0.45 * rate)
        snr = float(np.exp(rng.uniform(np.log(8), np.log(40))))
        amplitude = snr / model.snr(values) * float(night.drift(at))
        night.add(STRAIN, Contribution(at, source, amplitude))
        busy.append((at - before, at))
        times.append(at)
    return times


def truth_of(night: Night, chirps: list[float]) -> pd.DataFrame:
    """Give families and extents of all that was planted."""
    table = pd.read_csv(io.StringIO(transient_truth(night)))
    table = table[["family", "gps_start", "gps_end"]]
    ends = night.settings.start + np.array(chirps)
    more = pd.DataFrame(
        {"family": CHIRP_LIKE, "gps_start": ends - 0.1, "gps_end": ends + 0.02}
    )
    return pd.concat([table, more], ignore_index=True)


def named(found: pd.DataFrame, truth: pd.DataFrame) -> np.ndarray:
    """Name each found transient after the planted one that it overlaps most."""
    start, end = (truth[c].to_numpy() for c in ("gps_start", "gps_end"))
    names = []
    for row in found.itertuples():
        common = np.minimum(end, row.gps_end) - np.maximum(start, row.gps_start)
        best = int(common.argmax())
        names.append(truth["family"].iloc[best] if common[best] > -0.02 else "")
    return np.array(names)


def one_night(seed: int, noise: float, *, copies: bool) -> pd.DataFrame:
    """Give the measured transients of one seed with their true family."""
    night = plan_night(settings_of(seed, noise))
    chirps = add_chirps(night, np.random.default_rng([seed, 1]))
    strain = record_strain(night)[0]
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_strain(folder, night, strain)
        (folder / "channels.csv").write_text(
            "channel,role,f_low_hz\nOV-STRAIN,strain,10\n"
        )
        (folder / "dq.toml").write_text(_CONFIG)
        config = load_config(folder / "dq.toml")
        start, end = night.settings.start, night.settings.start + 3600
        found = find_in_channel(config, STRAIN, start=start, end=end).transients
        inputs = read_inputs(config)
        data = inputs.store.channel(STRAIN)
        options = {"ready": inputs.wanted, "config": config, "f_low_hz": 10.0}
        measured = measure_transients(data, found, **options).table
        about = found[["gps_time", "gps_start", "gps_end", "snr"]].copy()
        about.insert(0, "transient_id", transient_ids(found))
        table = pd.concat([about.assign(parent=""), measured], axis=1)
        table["family"] = named(found, truth_of(night, chirps))
        known = (table["family"] != "") & (table["snr"] >= LEAST_SNR)
        known &= measured.notna().all(axis=1)
        table = table[known].reset_index(drop=True)
        if not copies:
            return table
        examples = found[known.to_numpy()].reset_index(drop=True)
        quieter = measure_copies(
            data, examples, per_example=COPIES, among=found, **options
        )
        more = copy_rows(examples, quieter)
        more["family"] = table["family"].to_numpy()[quieter["parent"].astype(int)]
        return pd.concat([table, more], ignore_index=True)


def labels_of(table: pd.DataFrame, rng: np.random.Generator, *, truth: bool):
    """Give label rows: what the invented analysts wrote, or the truth."""
    families = sorted(set(table["family"]) - {CHIRP_LIKE})
    rows = []
    for row in table[table["parent"] == ""].itertuples():
        time = f"{row.gps_time:.6f}"
        if truth or row.family == CHIRP_LIKE:
            who = "truth" if truth else "simulation"
            rows.append((time, STRAIN, row.family, who))
            continue
        for name, (share, wrong) in LABELLERS.items():
            looked, erred = rng.uniform(size=2)
            other = str(rng.choice([f for f in families if f != row.family]))
            if looked < share:
                family = other if erred < wrong else row.family
                rows.append((time, STRAIN, family, name))
    return pd.DataFrame(rows, columns=["gps_time", "channel", "family", "labeller"])


def main() -> None:
    """Write the two tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("directory", type=Path)
    parser.add_argument("--seeds", default="1000-1007")
    parser.add_argument("--noise", type=float, default=1.0)
    parser.add_argument("--truth", action="store_true")
    options = parser.parse_args()
    low, _, high = options.seeds.partition("-")
    seeds = range(int(low), int(high or low) + 1)
    nights = [one_night(s, options.noise, copies=not options.truth) for s in seeds]
    table = pd.concat(nights, ignore_index=True)
    rng = np.random.default_rng([seeds[0], len(seeds)])
    labels = labels_of(table, rng, truth=options.truth)
    options.directory.mkdir(parents=True, exist_ok=True)
    columns = ["transient_id", "gps_time", "gps_start", "gps_end", "snr", "parent"]
    columns += NAMES
    shown = table[columns].copy()
    for name in ("gps_time", "gps_start", "gps_end"):
        shown[name] = [f"{v:.6f}" for v in table[name]]
    for name in ("snr", *NAMES):
        shown[name] = [f"{v:.6g}" for v in table[name]]
    shown.to_csv(options.directory / "features.csv", index=False, lineterminator="\n")
    labels.to_csv(options.directory / "labels.csv", index=False, lineterminator="\n")
    own = table[table["parent"] == ""]
    print(own["family"].value_counts().to_string())
    print(
        f"{len(own)} transients, {len(table) - len(own)} copies, {len(labels)} labels"
    )


if __name__ == "__main__":
    main()
