"""Witnesses and vetoes of whole nights against what the invented site planted.

``python tests/benchmarks/night_truth.py [SEEDS] [--hours H] [--jobs N] [--keep DIR]``
makes a night of the invented site for each seed (default 9101-9105, an hour each; a
range or a list), with a mirror's pitch that is heard as far as the beam lies beside its
centre, runs ``dq night`` on it, and prints with exact 95 % intervals

* each planted coupling: nights in which its channel was accepted, or named redundant
  with a channel that hears the same; for which targets; how many events it heard;
* bystanders and unsafe channels accepted, against the stated false-alarm probability;
* what accepted windows, and what the chosen vetoes, remove of the witnessed families
  and for how much time, over two oracles', bars 95 % and 1.2;
* test signals inside the vetoes against the share of dead time, and what the summary
  says of them.

The oracles know every coupling, its true delay and which events each channel heard.
They take the rows that the finder found in the channel (the extents of what it heard),
from the least loud threshold that keeps all it heard, moved by the true delay, 0.05 s
to either side. Of windows beyond the dead-time budget they choose as the night does.

* The *channel oracle* takes all rows above the threshold, as ``witness_truth.py`` does.
* The *event oracle* leaves out the rows of no true event, which nobody could who has
  only the channels.
* The *thrifty oracle* takes, for each coupling, of all windows of the night's ladder
  (around activity or peaks) the shortest that in hindsight hold 95 % of the strain
  transients that the channel oracle's hold, and only the channels that are needed.

For the swinging baffle the rows are those of its fringe frequency, for the pitch those
of the product.

A strain transient belongs to the true one in whose extent, 0.1 s more to either side,
it peaks; of several the nearest peak. ``--keep`` leaves the nights in a folder; those
that are there are judged again, not made again.
"""

from __future__ import annotations

import argparse
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
from night_oracle import BAFFLE, Truth, chosen_of, events_of, oracle, union

from dq.config import load_config
from dq.counting import binomial_chance, clopper_pearson
from dq.night import run_night
from dq.night.ledger import read_ledger
from dq.night.outputs import veto_again
from dq.observatory import SiteSettings, make_site
from dq.observatory.bilinear import PITCH, PRODUCT, SPOT
from dq.observatory.channels import DEAD, STRAIN, UNSAFE
from dq.report.night_tables import read_night
from dq.segments import Segments, to_ns_array
from dq.tables import recordings_of
from dq.witnesses import windows_of

#: Bursts an hour of the mirror's pitch; one in four is heard in the strain.
PITCH_PER_HOUR = 240.0

#: What kind of coupling the lines of the first table are about.
KINDS = {
    "OV-BAFFLE-PD": "linear",
    "OV-RF-BEAT": "linear",
    "OV-MAINS-VOLT": "linear",
    "OV-MAGNET-HALL": "partial, 60 %",
    "OV-BENCH-ACC-1": "linear",
    "OV-BENCH-ACC-2": "copy of ACC-1",
    "OV-GROUND-Z": "delayed, 0.15 s",
    "OV-GROUND-X": "delayed, 70 %",
    "OV-GROUND-Y": "delayed, 40 %",
    "OV-MIC-HALL": "delayed 30 ms, 70 %",
    "OV-FIBRE-SENSE": "partial, 35 %",
    "OV-BAFFLE-POS@fringe": "fringe frequency",
    "OV-BAFFLE-POS@rms": "slow motion",
    PRODUCT: "bilinear",
}


def judged_night(seed: int, base: Path, *, hours: float, jobs: int) -> Truth:
    """Make a night, or take the one that is there, and read it with its truth."""
    site = SiteSettings(
        seed=seed,
        duration_s=round(3600 * hours),
        pitch_bursts_per_hour=PITCH_PER_HOUR,
    )
    out, config = base / "night", base / "site" / "dq.toml"
    if (out / "summary.json").exists():
        veto_again(out)
    else:
        make_site(base / "site", settings=site)
        end = site.start + site.duration_s
        run_night(load_config(config), start=site.start, end=end, out=out, jobs=jobs)
    events = pd.read_csv(base / "site/truth/transients.csv", keep_default_na=False)
    events = events.assign(seen_by=events["seen_by"].str.split(";"))
    night = read_night(out)
    return Truth(
        night=night,
        rows=read_ledger(out, STRAIN).transients,
        events=events,
        couplings=pd.read_csv(base / "site/truth/couplings.csv"),
        own=events_of(night.strain, events),
    )


def same_sound(witness: str, couplings: pd.DataFrame) -> set[str]:
    """Give the recordings that hear what a witness hears."""
    mine = couplings.loc[couplings["witness"] == witness, "family"]
    names = couplings.loc[couplings["family"].isin(mine), "witness"]
    return {r for name in names for r in recordings_of(name)}


def outcome(truth: Truth, line: str) -> tuple[str, list[str]]:
    """Say how a coupling was found: accepted, redundant or missed; for which targets.

    A line that names no channel in full, as a kind of derived channel, stands for all
    that begin so.
    """
    table = truth.night.witnesses
    witness = BAFFLE if line.startswith(BAFFLE) else line
    exact = line == witness
    name = table["channel"].astype(str)
    rows = table[name == line if exact else name.str.startswith(line + "-")]
    taken = rows[rows["accepted"].fillna(False).astype(bool)]
    if len(taken):
        return "accepted", sorted(set(taken["target"].astype(str)))
    others = same_sound(witness, truth.couplings)
    partner = rows["redundant_with"].fillna("").astype(str)
    known = [p != "" and set(recordings_of(p)) <= others for p in partner]
    if any(known):
        return "redundant", sorted(set(rows.loc[known, "target"].astype(str)))
    return "missed", []


def is_bystander(channel: str, couplings: pd.DataFrame) -> bool:
    """Say whether nothing that a channel records reaches the strain.

    Levels of the ground below 4 Hz are bystanders too: what couples lies at 10 to 30.
    """
    coupled = {r for name in couplings["witness"] for r in recordings_of(name)}
    coupled |= {PITCH, SPOT, UNSAFE}
    if not coupled & set(recordings_of(channel)):
        return True
    base, _, kind = channel.partition("@rms-")
    top = kind.removesuffix("Hz").partition("-")[2]
    return base.startswith("OV-GROUND") and bool(top) and float(top) <= 4.0


def accepted_windows(truth: Truth) -> Segments:
    """Give the windows of all accepted witnesses."""
    rows = truth.night.accepted().itertuples()
    found = union(windows_of(r, truth.rows[r.channel]) for r in rows)
    return found & truth.analysed


def veto_time(truth: Truth, *, source: str | None = None) -> Segments:
    """Give the time of the night's chosen vetoes, of one source or of all."""
    rows = truth.night.vetoes
    rows = rows if source is None else rows[rows["source"] == source]
    return Segments(*(rows[c].to_numpy(np.int64) for c in ("gps_start", "gps_end")))


def print_couplings(nights: list[Truth]) -> None:
    """Print how often each coupling was found, and how much of it there was."""
    print("\nplanted couplings: accepted + redundant of nights (95 %), by target")
    for line, kind in KINDS.items():
        told = [outcome(t, line) for t in nights]
        direct = sum(what == "accepted" for what, _ in told)
        beside = sum(what == "redundant" for what, _ in told)
        low, high = clopper_pearson(direct + beside, len(nights))
        target = pd.Series([x for _, names in told for x in names]).value_counts()
        targets = ", ".join(f"{name} {count}" for name, count in target.items())
        witness = BAFFLE if line.startswith(BAFFLE) else line
        heard = [
            len(set(t.own[t.own >= 0]) & set(t.heard(witness).index)) for t in nights
        ]
        missed = [h for h, (what, _) in zip(heard, told, strict=True) if what[0] == "m"]
        less = f"; missed with {missed} heard" if missed else ""
        print(
            f"  {line:37s} {kind:20s} {direct:2d} + {beside:2d} of {len(nights)} "
            f"({low:.2f}-{high:.2f}), heard and found {min(heard)}-{max(heard)} a "
            f"night{less}: {targets}"
        )


def print_false(nights: list[Truth]) -> None:
    """Print what was accepted that hears nothing, or hears the strain itself."""
    tried, wrong, loud = 0, [], 0
    for truth in nights:
        everyone = [n for n in truth.rows if n not in (STRAIN, DEAD)]
        bystanders = {n for n in everyone if is_bystander(n, truth.couplings)}
        tried += len(bystanders)
        taken = set(truth.night.accepted()["channel"])
        wrong.append(sorted(taken & bystanders))
        loud += UNSAFE in taken
    rate = nights[0].night.manifest["config"]["witnesses"]["false_alarm_probability"]
    bad = sum(map(bool, wrong))
    low, high = clopper_pearson(bad, len(nights))
    print(
        f"\nnights with a bystander accepted: {bad} of {len(nights)} ({low:.3f}-"
        f"{high:.3f}), stated {rate:g}, p = "
        f"{binomial_chance(bad, len(nights), rate):.2g}; bystanders accepted: "
        f"{sum(map(len, wrong))} of {tried}"
    )
    for name in sorted({n for names in wrong for n in names}):
        print(f"  accepted: {name}")
    print(f"nights with the channel that hears the strain: {loud} of {len(nights)}")


def print_ratio(nights: list[Truth], what: str, ours, best) -> None:
    """Print efficiency and dead time over an oracle's, both given per night."""
    removed, theirs, both, total = [], [], 0, 0
    for truth, mine, ideal in zip(nights, ours, best, strict=True):
        times = truth.times[truth.witnessed]
        here, there = mine.contains(times), ideal.contains(times)
        removed.append(here.sum())
        theirs.append(there.sum())
        both += (here & there).sum()
        total += len(times)
    n, m = sum(removed), sum(theirs)
    low, high = clopper_pearson(int(both), int(m))
    dead, least = (np.array([s.total_s for s in x]) for x in (ours, best))
    share = np.array(removed) / np.array(theirs)
    print(
        f"  {what}: removes {n} of {total}, oracle {m}: ratio {n / m:.3f} (worst night "
        f"{share.min():.3f}); of the oracle's, {both / m:.3f} ({low:.3f}-{high:.3f}); "
        f"dead time {dead.sum():.0f} s, oracle {least.sum():.0f} s: ratio "
        f"{dead.sum() / least.sum():.3f} (worst night {(dead / least).max():.3f})"
    )


def print_families(nights: list[Truth], ours, best) -> None:
    """Print by true family what is removed, and what the oracle removes."""
    for family in nights[0].couplings["family"].unique():
        counts = np.zeros(3, int)
        for truth, mine, ideal in zip(nights, ours, best, strict=True):
            times = truth.times[truth.families == family]
            counts += (
                len(times),
                int(mine.contains(times).sum()),
                int(ideal.contains(times).sum()),
            )
        print(
            f"    {family:16s} {counts[0]:4d} found, {counts[1]:4d} in accepted "
            f"windows, {counts[2]:4d} in the channel oracle's"
        )


def print_signals(nights: list[Truth], bases: list[Path]) -> None:
    """Print test signals inside the vetoes against what dead time predicts.

    The site lays nothing on top of a test signal, so the share of dead time promises
    more than can be; the share beside the true events does not.
    """
    inside = total = 0
    dead, free = np.zeros(2), np.zeros(2)
    for truth, base in zip(nights, bases, strict=True):
        times = pd.read_csv(base / "site/injections.csv")["gps_time"].to_numpy(float)
        times = to_ns_array(times)
        times = times[truth.analysed.contains(times)]
        vetoes = veto_time(truth) & truth.analysed
        inside += int(vetoes.contains(times).sum())
        total += len(times)
        others = truth.events[truth.events["family"] != "test_signal"]
        taken = Segments.from_seconds(
            *(others[c].to_numpy(float) for c in ("gps_start", "gps_end"))
        )
        beside = truth.analysed - taken
        dead += vetoes.total_s, truth.analysed.total_s
        free += (vetoes & beside).total_s, beside.total_s
    low, high = clopper_pearson(inside, total)
    print(
        f"\ntest signals inside the vetoes: {inside} of {total} ({low:.3f}-{high:.3f})"
    )
    for what, (part, whole) in (("all", dead), ("beside true events", free)):
        share = part / whole
        print(
            f"  dead time {what}: {share:.4f} predicts {share * total:.1f}; chance of "
            f"as many or more {binomial_chance(inside, total, share):.2f}"
        )
    print("astrophysical signals: the site plants none beside its test signals")


def main() -> None:
    """Make the nights and print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("seeds", nargs="?", default="9101-9105")
    parser.add_argument("--hours", type=float, default=1.0)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--keep", type=Path)
    options = parser.parse_args()
    seeds = [
        seed
        for part in options.seeds.split(",")
        for low, _, high in [part.partition("-")]
        for seed in range(int(low), int(high or low) + 1)
    ]
    with tempfile.TemporaryDirectory() as scratch:
        bases = [(options.keep or Path(scratch)) / str(seed) for seed in seeds]
        nights = []
        for seed, base in zip(seeds, bases, strict=True):
            found = judged_night(seed, base, hours=options.hours, jobs=options.jobs)
            print(
                f"seed {seed}: {found.analysed.total_s:.0f} s analysed, "
                f"{len(found.night.strain)} strain transients, "
                f"{found.witnessed.sum()} of witnessed families",
                flush=True,
            )
            nights.append(found)
        print_couplings(nights)
        print_false(nights)
        ours = [accepted_windows(t) for t in nights]
        chosen = [veto_time(t, source="witness") & t.analysed for t in nights]
        for name in ("channel", "event", "thrifty"):
            windows = [oracle(t, name) for t in nights]
            best = [union(w.values()) for w in windows]
            within = [chosen_of(t, w) for t, w in zip(nights, windows, strict=True)]
            print(f"\nwitnessed families, over the {name} oracle:")
            print_ratio(nights, "accepted windows", ours, best)
            print_ratio(nights, "vetoes within the budget", chosen, within)
            if name == "channel":
                print_families(nights, ours, best)
        print_signals(nights, bases)


if __name__ == "__main__":
    main()
