"""Do the intervals hold? Held-out efficiency and volume-time ratio on seeded nights.

``python tests/benchmarks/held_out.py [NIGHTS]`` prints, over nights made as tables,

- how often the held-out interval of a planted veto, and of all vetoes together, holds
  the true efficiency; and how often the interval on the data chosen from does;
- the same for vetoes by chance alone: windows that know nothing, chosen because they
  looked best, whose true efficiency is their dead time;
- how often the volume-time interval holds the closed form of a Pareto law.
"""

from __future__ import annotations

import sys

import numpy as np
import pandas as pd

from dq.cost import Background, Selection, held_out, veto_segments, volume_time
from dq.counting import clopper_pearson
from dq.segments import NS, Segments, to_ns_array
from dq.tables import VETOES, conform
from dq.vetoes import choose_vetoes

GPS, HOUR = 1_420_000_000, 3600
WHOLE = Segments.from_seconds([GPS], [GPS + HOUR])


def veto_table(vetoes: dict[str, Segments]) -> pd.DataFrame:
    """Make a table of witness vetoes."""
    parts = [
        pd.DataFrame({"gps_start": s.starts, "gps_end": s.ends}).assign(
            veto=name, category=3, source="witness", channel=name, family=""
        )
        for name, s in vetoes.items()
    ]
    return conform(pd.concat(parts, ignore_index=True), VETOES)


def windows(times: np.ndarray, half_s: float) -> Segments:
    """Give windows around times."""
    middle = to_ns_array(GPS + times)
    half = round(half_s * NS)
    return Segments(middle - half, middle + half)


def chooser(built: dict[str, Segments], strain: pd.DataFrame, budget: float):
    """Give a function that chooses on part of the time."""

    def select(part: Segments) -> Selection:
        choice = choose_vetoes(
            veto_table(built), strain, analysed=part, max_dead_time=budget
        )
        parts = veto_segments(veto_table(built), WHOLE)
        return Selection(parts, choice.chosen)

    return select


def coupled_night(rng: np.random.Generator):
    """Make a night of three couplings of different strength and ten idle channels.

    Each strain transient is a coupling's with a set probability; a coupled channel also
    moves alone, and its windows catch others by chance: true efficiencies are known.
    """
    shares = {"a": 0.3, "b": 0.15, "c": 0.08}
    count = rng.poisson(300)
    at = rng.uniform(0, HOUR, count)
    cause = rng.choice(4, count, p=[*shares.values(), 1 - sum(shares.values())])
    built, dead = {}, {}
    for k, name in enumerate(shares):
        times = np.concatenate([at[cause == k], rng.uniform(0, HOUR, 60)])
        built[name] = windows(times, 0.1) & WHOLE
        alone = windows(rng.uniform(0, HOUR, 60), 0.1) & WHOLE
        dead[name] = alone.total_s / HOUR
    for k in range(10):
        built[f"idle{k}"] = windows(rng.uniform(0, HOUR, 100), 0.1) & WHOLE
    strain = pd.DataFrame({"gps_time": GPS + np.sort(at), "snr": 8.0})
    truth = {n: s + (1 - s) * built[n].total_s / HOUR for n, s in shares.items()}
    return built, strain, truth


def bursty_night(rng: np.random.Generator):
    """Make a night whose coupled disturbances are bursts of one to eight transients.

    A fifth of the disturbances is the coupling's; its windows hold the whole burst. The
    true efficiency is a ratio of means: bursts times their mean size over all.
    """
    events = rng.poisson(150)
    at, coupled = rng.uniform(0, HOUR - 2, events), rng.uniform(size=events) < 0.2
    size = 1 + rng.poisson(2.0, events)
    strain_at = np.repeat(at, size) + rng.uniform(0, 1.0, int(size.sum()))
    starts = to_ns_array(GPS + at[coupled])
    alone = to_ns_array(GPS + rng.uniform(0, HOUR - 2, 30))
    built = {}
    starts = np.concatenate([starts, alone])
    built["a"] = Segments(starts - NS // 10, starts + NS + NS // 10) & WHOLE
    strain = pd.DataFrame({"gps_time": GPS + np.sort(strain_at), "snr": 8.0})
    dead = Segments(alone, alone + NS).total_s / HOUR
    return built, strain, {"a": 0.2 + 0.8 * dead}


def chance_night(rng: np.random.Generator):
    """Make a night of forty channels that know nothing of the strain."""
    built = {
        f"w{k}": windows(rng.uniform(0, HOUR, 120), 0.25) & WHOLE for k in range(40)
    }
    at = np.sort(rng.uniform(0, HOUR, rng.poisson(200)))
    return built, pd.DataFrame({"gps_time": GPS + at, "snr": 8.0})


def coverage_of_couplings(
    nights: int, seed: int, make=coupled_night
) -> dict[str, np.ndarray]:
    """Say for each night whether intervals hold the truth, by veto."""
    held: dict[str, list[bool]] = {}
    for night in range(nights):
        rng = np.random.default_rng([seed, night])
        built, strain, truth = make(rng)
        times = to_ns_array(strain.gps_time.to_numpy())
        table = held_out(
            chooser(built, strain, 0.05), times, analysed=WHOLE, block_s=128.0
        )
        for name, true in truth.items():
            row = table.loc[name]
            held.setdefault(name, []).append(
                row.held_out_low <= true <= row.held_out_high
            )
    return {n: np.array(v) for n, v in held.items()}


def coverage_of_chance(nights: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Say whether the truth of chance vetoes lies inside: held out, and chosen from."""
    honest, flattered = [], []
    for night in range(nights):
        rng = np.random.default_rng([seed, night])
        built, strain = chance_night(rng)
        times = to_ns_array(strain.gps_time.to_numpy())
        select = chooser(built, strain, 0.05)
        table = held_out(select, times, analysed=WHOLE, block_s=128.0)
        # by chance the efficiency is the dead time, about the budget
        row = table.loc["all"]
        chosen = select(WHOLE)
        union = Segments.none()
        for name in chosen.chosen:
            union = union | chosen.built[name]
        true = union.total_s / HOUR
        honest.append(row.held_out_low <= true <= row.held_out_high)
        inside = int(union.contains(times).sum())
        low, high = clopper_pearson(inside, len(times))
        flattered.append(low <= true <= high)
    return np.array(honest), np.array(flattered)


def coverage_of_volume(nights: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Say whether the closed form lies in the interval; give the values too."""
    alpha, removed, dead = 3.0, 0.5, 0.05
    inside, values = [], []
    for night in range(nights):
        rng = np.random.default_rng([seed, night])
        starts = np.arange(0, HOUR, 20.0)
        vetoed = Segments.from_seconds(GPS + starts, GPS + starts + 20.0 * dead)
        count = rng.poisson(600)
        gone = rng.uniform(size=count) < removed
        cell = rng.integers(0, len(starts), count) * 20.0
        offset = np.where(
            gone,
            rng.uniform(0, 20.0 * dead, count),
            rng.uniform(20.0 * dead, 20.0, count),
        )
        snr = 5.5 * (1 - rng.uniform(size=count)) ** (-1 / alpha)
        strain = pd.DataFrame({"gps_time": GPS + cell + offset, "snr": snr})
        background = Background(strain, analysed=WHOLE, rate_hz=0.01)
        found = volume_time(background, vetoed, rng)
        true = (1 - dead) * ((1 - dead) / (1 - removed)) ** (3 / alpha)
        inside.append(found.low <= true <= found.high)
        values.append(found.value / true)
    return np.array(inside), np.array(values)


def told(name: str, held: np.ndarray) -> str:
    """Give a line: share, and its own 95 % interval."""
    low, high = clopper_pearson(int(held.sum()), len(held))
    return f"  {name}: {held.mean():.3f} ({low:.3f} to {high:.3f})"


if __name__ == "__main__":
    nights = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    print(f"{nights} nights; share of nights whose 95 % interval holds the truth")
    for name, held in coverage_of_couplings(nights, seed=1).items():
        print(told(f"held out, coupling {name}", held))
    for name, held in coverage_of_couplings(nights, 4, bursty_night).items():
        print(told(f"held out, coupling {name} of bursts", held))
    honest, flattered = coverage_of_chance(nights, seed=2)
    print(told("held out, chance vetoes, all", honest))
    print(told("measured where chosen, chance vetoes, all", flattered))
    inside, values = coverage_of_volume(nights, seed=3)
    print(told("volume-time ratio, Pareto law", inside))
    print(f"  its value over the closed form: median {np.median(values):.3f}")
