"""Speed of windows: ``python -m tests.speed.window --radii 4 8 12`` prints a table in Markdown.

Every row is one window: processor time to build it in exact numbers, to verify the norm, and for the whole enclosure at
relative width 1e-6, the width reached, and the ratio of a dense exponential's quadrature (for up to ``--dense`` states,
same outlets and inlets, fine enough for three digits, no guarantee) to the enclosure. All networks are invented.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable

import numpy as np

from synth.gain.window import window_radius
from synth.gain.window.build import build_window
from synth.gain.window.doubles import doubles_of
from synth.gain.window.norm import rightmost_real, verified_norm
from synth.gain.window.places import places_of
from synth.network.model import Network
from tests.gain.windows import ladder, lattice, skew, slow_integrals
from tests.margin.networks import no_gains, oscillators

NETWORKS: dict[str, Network] = {
    "chain, k = .45": oscillators("0.45"),
    "springs, k = 1": oscillators("1", "1"),
    "skew, k = 4": skew("4"),
    "ladder, k = 3": ladder("3"),
    "plane, k = .2": lattice("0.2"),
}


def seconds(call: Callable[[], object]) -> tuple[float, object]:
    """Processor time of a call and what it returned."""
    began = time.process_time()
    value = call()
    return time.process_time() - began, value


def row(name: str, network: Network, R: int, dense: int) -> str:
    """One line of the table."""
    places = places_of(network, no_gains(network))
    built, window = seconds(lambda: build_window(places, places.centres[0], R))
    system = doubles_of(window)  # type: ignore[arg-type]
    assert system is not None
    norm, _ = seconds(lambda: verified_norm(system, rightmost_real(system)))
    whole, found = seconds(lambda: window_radius(network, no_gains(network), R, method="sparse"))
    width = (found.upper - found.lower) / found.upper if found.guaranteed else float("nan")  # type: ignore[attr-defined]
    ratio = "-"
    if system.size <= dense:
        slow, _ = seconds(lambda: slow_integrals(system.A.toarray(), system.H, system.D.toarray(), 20))
        ratio = f"{slow / whole:.1f}"
    cells = found.peaks[0].cells  # type: ignore[attr-defined]
    return (
        f"| {name} | {R} | {system.size} | {built:.2f} | {norm:.2f} | {whole:.2f} | {cells} | {width:.1e} | {ratio} |"
    )


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--radii", type=int, nargs="*", default=[4, 8, 12])
    parser.add_argument("--dense", type=int, default=100)
    args = parser.parse_args()
    np.seterr(all="raise", under="ignore")
    print("| window | R | states | build s | norm s | whole s | cells | width | dense/whole |")
    print("|---|---|---|---|---|---|---|---|---|")
    for name, network in NETWORKS.items():
        for R in args.radii:
            print(row(name, network, R, args.dense), flush=True)


if __name__ == "__main__":
    main()
