"""Cell problems and local searches of many distinct units: ``python -m tests.speed.design --units 100 1000``.

Invented haulers with three states and a lag and a link strength of their own. Printed are units per CPU second of one
sweep at given neighbour sizes: the cell problem over a grid of decay rates with its recheck (no actuator limit and a
loose one), and the local search on exact peak gains; the growth exponent between rows; and, in the same run, one
structured linear matrix inequality over the whole network (a block-diagonal Q, the links inside) for small numbers.
"""

from __future__ import annotations

import argparse
import math
import time
import warnings

import cvxpy as cp
import numpy as np

from synth.local.cell import CellData
from synth.local.cell_batch import solve_cells
from synth.local.plant import field_of
from synth.local.sweeping import MOST_TOGETHER
from synth.local.unit_search import LocalWork, solve_local
from synth.network import read
from tests.local.members import ring


def cells(count: int, limit: float) -> list[CellData]:
    """The unit problems of a ring, each neighbour promising a size of 0.1."""
    field = field_of(read(ring(count, "per_unit")))
    sizes = np.full(field.intake.size, 0.1)
    return [
        CellData(p.A, p.B, p.D, p.E, p.H[: p.offers], field.arriving(i, sizes), p.limit * limit, np.ones(p.offers),
                 field.slowest, field.fastest)
        for i, p in enumerate(field.plants)
    ]  # fmt: skip


def local_works(count: int) -> list[LocalWork]:
    """The local searches of a ring at equal sizes, from one and the same rough start."""
    field = field_of(read(ring(count, "per_unit")))
    one = np.ones(field.intake.size)
    arriving = field.intake.brought(one)
    return [
        LocalWork((p,), field.slowest, field.fastest, 2e-4, (arriving[field.intake.takes[i]],),
                  (one[field.intake.rows[i]],), None, (np.full(3, 0.8),), 40)
        for i, p in enumerate(field.plants)
    ]  # fmt: skip


def whole_network(count: int) -> float:
    """CPU seconds of one inequality for all units of a ring at one decay rate."""
    own = cells(count, math.inf)
    n, decay = len(own[0].A), 0.1
    Q = [cp.Variable((n, n), symmetric=True) for _ in own]
    Y = [cp.Variable((1, n)) for _ in own]
    size = cp.Variable()
    rows = [[cp.Constant(np.zeros((n, n))) for _ in own] for _ in own]
    rules: list[cp.Constraint] = []
    for i, cell in enumerate(own):
        loop = cell.A @ Q[i] + cell.B @ Y[i]
        rows[i][i] = loop + loop.T + 2 * decay * Q[i] + cell.E @ cell.E.T
        j = (i - 1) % count
        coupling = (cell.D * cell.intake / 0.1) @ cell.H @ Q[j]
        rows[i][j] = rows[i][j] + coupling
        rows[j][i] = rows[j][i] + coupling.T
        rules += [cp.bmat([[cell.fastest * Q[i], loop], [loop.T, cell.fastest * Q[i]]]) >> 0,
                  cell.H @ Q[i] @ cell.H.T <= size]  # fmt: skip
    rules.append(cp.bmat(rows) << 0)
    start = time.process_time()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        cp.Problem(cp.Minimize(size), rules).solve(solver=cp.CLARABEL)
    return time.process_time() - start


def timed(work: object) -> float:
    """CPU seconds of a call without arguments."""
    start = time.process_time()
    work()  # type: ignore[operator]
    return time.process_time() - start


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--units", type=int, nargs="+", default=[100, 1000])
    parser.add_argument("--whole", type=int, nargs="*", default=[4, 8])
    chosen = parser.parse_args()
    print(f"(searches of up to {MOST_TOGETHER} gains are made as a whole; these are swept)\n")
    print("| units | cells, no limit (units/s) | cells, loose limit (units/s) | search (units/s) | growth |")
    print("|---|---|---|---|---|")
    before: tuple[int, float] | None = None
    for count in chosen.units:
        free, loose = cells(count, math.inf), cells(count, 4.0)
        works = local_works(count)
        spent = [
            timed(lambda free=free: solve_cells(free)), timed(lambda loose=loose: solve_cells(loose)),
            timed(lambda works=works: [solve_local(work) for work in works]),
        ]  # fmt: skip
        total = spent[0] + spent[2]
        growth = "" if before is None else f"{math.log(total / before[1]) / math.log(count / before[0]):.2f}"
        print(f"| {count} | {' | '.join(f'{count / s:.0f}' for s in spent)} | {growth} |", flush=True)
        before = (count, total)
    print("\n| units | one inequality for all (CPU s) | the same units one by one (CPU s) |\n|---|---|---|")
    for count in chosen.whole:
        own = cells(count, math.inf)
        print(f"| {count} | {whole_network(count):.2f} | {timed(lambda own=own: solve_cells(own)):.3f} |", flush=True)


if __name__ == "__main__":
    main()
