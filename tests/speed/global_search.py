"""How close the design comes to a global search: ``python -m tests.speed.global_search`` prints a table in Markdown.

The global search is scipy's differential evolution, never started from our answer, within the same limits. It runs
twice for every seed: over the gains, inside the box that contains every gain with modes in the disc, and over the
modes, where the limits on modes are the sides of a box. The better of all runs counts.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import differential_evolution, linprog

from synth.local import design
from synth.local.coordinates import coordinates
from synth.local.merit import measure
from synth.local.plant import Plant, field_of
from synth.network.model import Network
from tests.local.cases import cases

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Best:
    """The smallest radius of a global search that keeps every limit (inf: none did), and its evaluations."""

    radius: float
    evaluations: int


def gain_box(plant: Plant, fastest: float) -> list[tuple[float, float]]:
    """Smallest and largest value of each allowed gain among those with modes in the disc (one actuator, by LP).

    Coefficients of the characteristic polynomial are affine in K and at most binomial(n, k) fastest^k.
    """
    rows, columns = np.nonzero(plant.allowed)
    n = len(plant.A)

    def polynomial(K: Array) -> Array:
        return np.poly(plant.A + plant.B @ K @ plant.C)[1:]

    base = polynomial(np.zeros(plant.allowed.shape))
    slope = np.empty((n, len(rows)))
    for g, (i, j) in enumerate(zip(rows, columns, strict=True)):
        unit = np.zeros(plant.allowed.shape)
        unit[i, j] = 1.0
        slope[:, g] = polynomial(unit) - base
    most = np.array([abs(v) for v in np.poly(np.full(n, -fastest))[1:]])
    box = []
    for g, (i, j) in enumerate(zip(rows, columns, strict=True)):
        ends = []
        for sign in (1.0, -1.0):
            cost = np.zeros(len(rows))
            cost[g] = sign
            # With a Hurwitz polynomial every coefficient is positive.
            answer = linprog(cost, np.vstack((slope, -slope)), np.concatenate((most - base, base)), bounds=(None, None))
            ends.append(sign * answer.fun)
        bound = plant.bound[i, j]
        box.append((max(ends[0], -bound), min(ends[1], bound)))
    return box


def global_search(network: Network, seed: int, over: str, rounds: int, crowd: int = 12) -> Best:
    """One run of differential evolution ``over`` "gains" or "modes": ``crowd`` members per gain, ``rounds`` rounds."""
    field = field_of(network)
    charts = [coordinates(field, i) for i in range(len(field.plants))]
    by_modes = over == "modes"
    box: list[tuple[float, float]] = []
    for plant, chart in zip(field.plants, charts, strict=True):
        if by_modes and chart.placed is not None:
            box.extend([(0.0, np.pi / 2)] * len(chart.sensors))
            box.extend([(-3.0, 3.0)] * len(chart.free))
        else:
            box.extend(gain_box(plant, field.fastest))
    best = np.inf

    def height(x: Array) -> float:
        nonlocal best
        gains, start = [], 0
        for plant, chart in zip(field.plants, charts, strict=True):
            part = x[start : start + chart.size]
            start += chart.size
            if by_modes and chart.placed is not None:
                gains.append(chart.gains_only(part))
            else:
                K = np.zeros(plant.allowed.shape)
                K[plant.allowed] = part
                gains.append(K)
        inside = tuple(not (by_modes and chart.placed is not None) for chart in charts)
        merit = measure(field, tuple(gains), weight=100.0, mode_excess=inside, steep=False)
        if merit.excess == 0.0:
            best = min(best, merit.radius)
        return merit.value

    answer = differential_evolution(height, box, maxiter=rounds, popsize=crowd, tol=1e-7, rng=seed, polish=False)
    return Best(best, int(answer.nfev))


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=5)
    parser.add_argument("--rounds", type=int, default=150)
    parser.add_argument("--only", default="")
    options = parser.parse_args()
    print(
        f"Differential evolution: {options.seeds} seeds over gains and over modes, at most {options.rounds} rounds.\n"
    )
    print(
        "| network | gains | design radius | global, over gains | global, over modes | evaluations | ratio | design s |"
    )
    print("|---|---|---|---|---|---|---|---|", flush=True)
    for name, network in cases().items():
        if options.only not in name:
            continue
        began = time.perf_counter()
        ours = design(network)
        seconds = time.perf_counter() - began
        runs = {over: [global_search(network, s, over, options.rounds) for s in range(1, options.seeds + 1)]
                for over in ("gains", "modes")}  # fmt: skip
        least = {over: min(run.radius for run in found) for over, found in runs.items()}
        work = sum(run.evaluations for found in runs.values() for run in found)
        count = sum(int(plant.allowed.sum()) for plant in field_of(network).plants)
        ratio = ours.upper / min(least.values())
        print(
            f"| {name} | {count} | {ours.upper:.6g} | {least['gains']:.6g} | {least['modes']:.6g} | {work} "
            f"| {ratio:.4f} | {seconds:.1f} |",
            flush=True,
        )


if __name__ == "__main__":
    main()
