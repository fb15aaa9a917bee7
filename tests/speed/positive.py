"""Positive networks of growing size: ``python -m tests.speed.positive`` prints a table in Markdown.

Invented thermal zones on square grids, two states each; once with bounds on gains only (columns) and once with a heat
limit that binds (local programs and Newton). CPU seconds of the design with its recheck, the growth exponent between
rows, and up to ``--whole`` zones the one large linear program that HiGHS solves instead, in the same run.
"""

from __future__ import annotations

import argparse
import math
import time
from fractions import Fraction

from synth.base.progress import silent
from synth.local import positive_design
from synth.local.positive.design import _by_columns, _reference
from synth.local.positive.program import solve_program
from synth.local.positive.web import web_of
from synth.network.model import Network
from tests.local.thermal import grid, thermal

KMAX = Fraction(1, 5)


def seconds(network: Network) -> tuple[float, str]:
    """CPU seconds of one design, and its verdict."""
    start = time.process_time()
    design = positive_design(network, kmax=KMAX, smallest=False)
    return time.process_time() - start, f"{design.method}, radius {design.upper:.6f}, kept {not design.broken}"


def whole_program(network: Network) -> float:
    """CPU seconds of HiGHS on the one large program at the network's target."""
    web = web_of(network, KMAX)
    cells, _ = _by_columns(web, silent)
    kinds = range(len(network.kinds))
    blocks, units = [web.open_floats(k) for k in kinds], [web.units_of(k) for k in kinds]
    reference, _ = _reference(web, cells, units)
    start = time.process_time()
    solve_program(web, blocks, units, reference, float(network.goal.target))
    return time.process_time() - start


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sides", type=int, nargs="+", default=[32, 100, 316], help="zones along a side of the grid")
    parser.add_argument("--whole", type=int, default=2000, help="largest network for the one large program")
    chosen = parser.parse_args()
    print("| zones | limit | CPU s | growth | large program, CPU s | verdict |\n|---|---|---|---|---|---|")
    for limit in (None, "0.015"):
        before: tuple[int, float] | None = None
        for side in chosen.sides:
            network = thermal(grid(side), side * side, limit=limit)
            took, verdict = seconds(network)
            growth = "" if before is None else f"{math.log(took / before[1]) / math.log(side * side / before[0]):.2f}"
            large = f"{whole_program(network):.1f}" if limit and side * side <= chosen.whole else ""
            print(f"| {side * side} | {limit or 'none'} | {took:.1f} | {growth} | {large} | {verdict} |", flush=True)
            before = (side * side, took)


if __name__ == "__main__":
    main()
