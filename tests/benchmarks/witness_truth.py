"""What the witness search finds of planted couplings, and what it makes of chance.

``python tests/benchmarks/witness_truth.py [NIGHTS]`` draws nights at the level of
tables (by default 100 without any coupling and 50 with six) and prints, with exact 95 %
intervals,

* nights without coupling in which anything was accepted, against the stated rate, among
  bursty, swelling and periodic channels;
* how often each planted coupling was found (directly, or as redundant with the channel
  that hears the same): linear, 70 % partial, 0.3 s late, slow activity, a redundant
  copy; whether the channel that hears the strain was ever used; bystanders accepted;
* what the accepted windows remove of the witnessed families and for how much time, over
  an oracle's: the right channel, the least loud threshold that keeps all it heard, and
  the true delay, with 0.05 s to either side;
* the same couplings beside a machine that runs every 20 to 90 s and is heard in one
  channel each time: such a channel scores as high in every slide that matches its
  rhythm, and must not hide the others;
* nights with that rhythm in the strain and in six channels that keep it without being
  heard, each at a phase of its own: how often one of these was accepted.
"""

from __future__ import annotations

import sys

import numpy as np
import pandas as pd
from scipy.stats import binomtest

from dq.config import Witnesses
from dq.counting import clopper_pearson
from dq.segments import NS, Segments
from dq.witnesses import find_witnesses, veto_windows, windows_of

GPS, NIGHT_S = 1_420_000_000, 8 * 3600
WHOLE = Segments.from_seconds([GPS], [GPS + NIGHT_S])
SETTINGS = Witnesses()


def table(times, snr, length=0.04) -> pd.DataFrame:
    """Give activity of a length around times."""
    times = np.asarray(times, float) % NIGHT_S
    order = np.argsort(times, kind="stable")
    length = np.broadcast_to(length, times.shape)[order]
    times, snr = GPS + times[order], np.broadcast_to(snr, times.shape)[order]
    return pd.DataFrame(
        {
            "gps_time": times,
            "gps_start": times - length / 2,
            "gps_end": times + length / 2,
            "snr": snr,
        }
    )


def loudness(rng, n: int) -> np.ndarray:
    """Give SNR by a Pareto law above 5.5."""
    return 5.5 * (1 - rng.uniform(size=n)) ** (-1 / 2.5)


def bystander(rng, kind: int) -> pd.DataFrame:
    """Give a channel that has nothing to do with the strain."""
    if kind == 0:
        times = rng.uniform(0, NIGHT_S, 600)
    elif kind == 1:
        times = np.repeat(rng.uniform(0, NIGHT_S, 120), rng.geometric(0.2, 120))
        times = times + rng.uniform(0, 3, len(times))
    elif kind == 2:
        times = np.arange(rng.uniform(0, 40), NIGHT_S, rng.uniform(7, 60))
    else:
        share = rng.uniform(size=4000) < 0.15 * (1 + np.sin(np.arange(4000) / 90.0))
        times = np.sort(rng.uniform(0, NIGHT_S, 4000))[share]
    return table(times, loudness(rng, len(times)))


def strain_of(rng, causes: dict[str, np.ndarray]) -> pd.DataFrame:
    """Give the strain: families at their times, and bursty noise of no family."""
    other = np.repeat(rng.uniform(0, NIGHT_S, 250), rng.geometric(0.6, 250))
    other = other + rng.uniform(0, 1, len(other))
    times = np.concatenate([*causes.values(), other])
    family = np.repeat([*causes, "unknown"], [*map(len, causes.values()), len(other)])
    out = table(times, loudness(rng, len(times)))
    order = np.argsort(times % NIGHT_S, kind="stable")
    return out.assign(family=family[order])


def find(strain, others, safety=None, injections=None):
    """Search with the default settings."""
    return find_witnesses(
        strain,
        others,
        analysed=WHOLE,
        auxiliary_analysed=dict.fromkeys(others, WHOLE),
        safety=safety or {},
        settings=SETTINGS,
        injections=injections,
    )


def against_rate(accepted: int, nights: int) -> str:
    """Give a count of nights, its interval, and its chance at the stated rate."""
    rate = SETTINGS.false_alarm_probability
    p = binomtest(accepted, nights, rate, alternative="greater").pvalue
    low, high = clopper_pearson(accepted, nights)
    return (
        f"{accepted} of {nights} nights ({low:.3f} to {high:.3f}), stated {rate:g}; "
        f"binomial p = {p:.2f}"
    )


def chance(nights: int) -> None:
    """Print how often chance alone was accepted."""
    accepted = 0
    for seed in range(nights):
        rng = np.random.default_rng([1, seed])
        strain = strain_of(rng, {"a": rng.uniform(0, NIGHT_S, 80)})
        others = {f"OV-{k:02d}": bystander(rng, k % 4) for k in range(24)}
        accepted += int(find(strain, others)["accepted"].any())
    print(f"no coupling: something accepted in {against_rate(accepted, nights)}")


def machine(rng, period: float) -> np.ndarray:
    """Give the times at which a machine runs: a steady period, 10 ms to either side."""
    times = np.arange(rng.uniform(0, period), NIGHT_S, period)
    return times + rng.normal(0.0, 0.01, len(times))


def rhythm(nights: int) -> None:
    """Print what a rhythm that strain and channels share does to the search."""
    found = heard = accepted = 0
    for seed in range(nights):
        rng = np.random.default_rng([3, seed])
        strain, others, when, truth, _ = planted(rng)
        times = machine(rng, rng.uniform(20, 90))
        runs = table(times, loudness(rng, len(times))).assign(family="machine")
        strain = pd.concat([strain, runs]).sort_values("gps_time", ignore_index=True)
        others["OV-MACHINE"] = table(times, 3 * loudness(rng, len(times)))
        out = find(strain, others, injections=when)
        redundant = out["redundant_with"].fillna("") != ""
        known = set(out.loc[out["accepted"] | redundant, "channel"])
        found += len(known & set(truth))
        heard += "OV-MACHINE" in known
    total = 5 * nights
    low, high = clopper_pearson(found, total)
    print(
        f"beside a machine with a rhythm: {found} of {total} couplings found "
        f"({low:.3f} to {high:.3f}); the machine's channel in {heard} of {nights}"
    )
    for seed in range(4 * nights):
        rng = np.random.default_rng([4, seed])
        period = rng.uniform(20, 90)
        strain = strain_of(rng, {"machine": machine(rng, period)})
        others = {f"OV-{k:02d}": bystander(rng, k % 4) for k in range(18)}
        for k in range(18, 24):
            times = machine(rng, period)
            others[f"OV-{k:02d}"] = table(times, loudness(rng, len(times)))
        accepted += int(find(strain, others)["accepted"].any())
    print(
        "a rhythm in the strain and in six unheard channels: something accepted in "
        + against_rate(accepted, 4 * nights)
    )


def planted(rng):
    """Give a night with couplings: strain, channels, injections, and the truth."""
    causes = {f: rng.uniform(60, NIGHT_S - 60, 60) for f in ("a", "b", "c", "d")}
    slow = np.sort(rng.uniform(60, NIGHT_S - 60, 40))
    causes["e"] = np.concatenate([slow + s for s in (-6.0, -3.0, 0.0, 3.0, 6.0)])
    signals = rng.uniform(60, NIGHT_S - 60, 40)
    strain = strain_of(rng, causes | {"test": signals})

    def sensor(times, share, delay=0.0, length=0.04, own=150):
        heard = times[rng.uniform(size=len(times)) < share] - delay
        extra = rng.uniform(0, NIGHT_S, own)
        loud = np.append(8 * loudness(rng, len(heard)) / 5.5, loudness(rng, own))
        lengths = np.append(np.full(len(heard), length), np.full(own, 0.04))
        return table(np.append(heard, extra), loud, lengths), heard

    truth = {
        "OV-LINEAR": ("a", 0.95, 0.0, 0.04),
        "OV-PARTIAL": ("b", 0.7, 0.0, 0.04),
        "OV-LATE": ("c", 0.95, 0.3, 0.04),
        "OV-COPY": ("a", 0.8, 0.0, 0.04),
    }
    others, heard = {}, {}
    for name, (family, share, delay, length) in truth.items():
        others[name], heard[name] = sensor(causes[family], share, delay, length)
    others["OV-SLOW@rms-1-2Hz"], heard["OV-SLOW@rms-1-2Hz"] = sensor(
        slow, 1.0, 0.0, 14.0, own=0
    )
    truth["OV-SLOW@rms-1-2Hz"] = ("e", 1.0, 0.0, 14.0)
    ear = np.concatenate([*causes.values(), signals])
    others["OV-EAR"] = table(ear, 20.0)
    for k in range(20):
        others[f"OV-{k:02d}"] = bystander(rng, k % 4)
    when = np.round((GPS + signals) * NS).astype(np.int64)
    return strain, others, when, truth, heard


def oracle(others, truth, heard) -> Segments:
    """Give the windows of somebody who knows the couplings."""
    out = Segments.none()
    for name, (_, _, delay, _) in truth.items():
        rows = others[name]
        mine = np.isin(np.round(rows["gps_time"] - GPS, 6), np.round(heard[name], 6))
        out |= veto_windows(
            rows,
            snr_threshold=float(rows["snr"][mine].min()),
            before_s=0.05,
            after_s=0.05,
            delay_s=delay,
        )
    return out & WHOLE


def couplings(nights: int) -> None:
    """Print what was found of planted couplings."""
    found = dict.fromkeys(("OV-LINEAR", "OV-PARTIAL", "OV-LATE"), 0)
    found |= {"OV-SLOW@rms-1-2Hz": 0, "OV-COPY": 0}
    wrong = ear = 0
    share, cost = [], []
    for seed in range(nights):
        rng = np.random.default_rng([2, seed])
        strain, others, when, truth, heard = planted(rng)
        out = find(strain, others, injections=when)
        taken = set(out.loc[out["accepted"], "channel"])
        known = taken | set(out.loc[out["redundant_with"].fillna("") != "", "channel"])
        for name in found:
            found[name] += name in known
        ear += "OV-EAR" in taken
        wrong += len({n for n in taken if n[3].isdigit()})
        windows = Segments.none()
        for row in out[out["accepted"]].itertuples():
            windows |= windows_of(row, others[row.channel])
        windows &= WHOLE
        best = oracle(others, truth, heard)
        families = strain["family"].isin([f for f, *_ in truth.values()])
        times = np.round(strain.loc[families, "gps_time"] * NS).astype(np.int64)
        times = times.to_numpy()
        share.append(windows.contains(times).mean() / best.contains(times).mean())
        cost.append(windows.total_s / best.total_s)
    for name, count in found.items():
        low, high = clopper_pearson(count, nights)
        print(f"{name}: found in {count} of {nights} ({low:.3f} to {high:.3f})")
    print(f"the channel that hears the strain was used in {ear} of {nights}")
    print(f"bystanders accepted: {wrong} in {nights} nights of 20")
    print(
        f"efficiency on witnessed families over the oracle's: mean {np.mean(share):.3f}"
        f", worst {np.min(share):.3f}; dead time over the oracle's: mean "
        f"{np.mean(cost):.3f}, worst {np.max(cost):.3f}"
    )


if __name__ == "__main__":
    nights = int(sys.argv[1]) if len(sys.argv) > 1 else 50
    chance(2 * nights)
    couplings(nights)
    rhythm(nights)
