"""The choice of vetoes against the exact optimum, and its speed at a night's size.

``python tests/benchmarks/veto_choice.py [CASES]`` prints the worth removed over the
optimum's (``scipy.optimize.milp``) on random small cases, the optimum over the printed
bound, and the CPU time with 100 and 200 vetoes, 10^4 transients and 10^5 segments.
"""

from __future__ import annotations

import sys
import time

import numpy as np
import pandas as pd
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import lil_array

from dq.segments import NS, Segments, to_ns_array
from dq.tables import VETOES, conform
from dq.vetoes import choose_vetoes

GPS = 1_420_000_000


def veto_table(vetoes: dict[str, Segments]) -> pd.DataFrame:
    """Make a table of witness vetoes."""
    parts = [
        pd.DataFrame({"gps_start": s.starts, "gps_end": s.ends}).assign(
            veto=name, category=3, source="witness", channel=name, family=""
        )
        for name, s in vetoes.items()
    ]
    return conform(pd.concat(parts, ignore_index=True), VETOES)


def random_case(rng: np.random.Generator):
    """Give vetoes, transients, analysed time and a budget of one small case.

    Vetoes of 1 to 6 segments that overlap one another, transients partly in bursts, and
    a budget of 2 to 20 %, all drawn anew for each case.
    """
    span = 1000.0
    vetoes = {}
    for k in range(rng.integers(4, 13)):
        starts = rng.uniform(0, span - 50, rng.integers(1, 7))
        lengths = rng.exponential(rng.choice([2.0, 8.0, 20.0]), len(starts)) + 0.1
        starts_ns = np.rint((GPS + starts) * 1e3).astype(np.int64) * 1_000_000
        ends_ns = starts_ns + np.rint(lengths * 1e3).astype(np.int64) * 1_000_000
        vetoes[f"w{k}"] = Segments(starts_ns, ends_ns)
    at = rng.uniform(0, span, 30)
    bursts = rng.uniform(0, span, 6)[:, None] + rng.exponential(3.0, (6, 10))
    at = np.sort(np.concatenate([at, bursts.ravel()]))
    at = at[at < span]
    strain = pd.DataFrame({"gps_time": GPS + np.round(at, 6), "snr": 8.0})
    whole = Segments.from_seconds([GPS], [GPS + 1000])
    return vetoes, strain, whole, float(np.round(rng.uniform(0.02, 0.2), 3))


def optimum(vetoes, strain, whole, budget) -> int:
    """Give the most transients that any choice within the budget removes."""
    parts = [v & whole for v in vetoes.values()]
    times = to_ns_array(strain["gps_time"].to_numpy(float))
    edges = np.unique(np.concatenate([e for p in parts for e in (p.starts, p.ends)]))
    atoms = [p.contains(edges[:-1]) for p in parts]
    held = [p.contains(times) for p in parts]
    n, m, k = len(parts), len(times), len(edges) - 1
    # x: veto taken; y: transient removed <= sum of its vetoes; z: atom >= each veto
    total = n + m + k
    rows = m + sum(int(a.sum()) for a in atoms) + 1
    matrix, upper = lil_array((rows, total)), np.zeros(rows)
    for j in range(m):
        matrix[j, n + j] = 1
        for i in range(n):
            if held[i][j]:
                matrix[j, i] = -1
    row = m
    for i in range(n):
        for a in np.flatnonzero(atoms[i]):
            matrix[row, i], matrix[row, n + m + a] = 1, -1
            row += 1
    matrix[row, n + m :] = np.diff(edges)[None, :] / NS
    upper[row] = budget * whole.total_s
    worth = np.zeros(total)
    worth[n : n + m] = -1
    found = milp(
        worth,
        constraints=LinearConstraint(matrix.tocsr(), -np.inf, upper),
        integrality=np.append(np.ones(n), np.zeros(m + k)),
        bounds=Bounds(0, 1),
        options={"mip_rel_gap": 0.0},
    )
    return round(-found.fun)


def ratios(cases: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Give chosen over optimum, and optimum over bound, for each case."""
    rng = np.random.default_rng(seed)
    out = []
    while len(out) < cases:
        case = random_case(rng)
        best = optimum(*case)
        if best == 0:
            continue
        vetoes, strain, whole, budget = case
        choice = choose_vetoes(
            veto_table(vetoes), strain, analysed=whole, max_dead_time=budget
        )
        count = len(strain)
        out.append((choice.gain * count / best, best / (choice.bound * count)))
    return tuple(np.array(out).T)


def seconds(vetoes: int, segments: int, transients: int) -> float:
    """Give the CPU time of one choice at a night's size."""
    rng = np.random.default_rng(3)
    day = Segments.from_seconds([GPS], [GPS + 86_400])
    strain = pd.DataFrame(
        {"gps_time": GPS + np.sort(rng.uniform(0, 86_400, transients)), "snr": 8.0}
    )
    parts = {}
    for k in range(vetoes):
        starts = rng.uniform(0, 86_390, segments // vetoes)
        # every veto follows some of the transients
        some = rng.choice(transients, len(starts) // 4)
        starts[: len(some)] = strain.gps_time.to_numpy()[some] - GPS - 0.05
        starts_ns = to_ns_array(GPS + starts)
        parts[f"w{k}"] = Segments(starts_ns, starts_ns + NS // 5)
    table = veto_table(parts)
    began = time.process_time()
    choose_vetoes(table, strain, analysed=day, max_dead_time=0.05)
    return time.process_time() - began


if __name__ == "__main__":
    cases = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    chosen, tight = ratios(cases, seed=11)
    print(
        f"{cases} cases: chosen over optimum mean {chosen.mean():.4f}, worst "
        f"{chosen.min():.4f}, optimal in {np.mean(chosen > 1 - 1e-9):.0%}; "
        f"optimum over bound mean {tight.mean():.3f}, largest {tight.max():.4f}"
    )
    for count in (100, 200):
        print(
            f"{count} vetoes, 10^5 segments, 10^4 transients: "
            f"{seconds(count, 100_000, 10_000):.2f} s CPU"
        )
