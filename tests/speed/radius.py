"""Speed of the radius: ``python -m tests.speed.radius --sizes 1e4 1e5`` prints a table in Markdown.

Every row is one operator: processor time of the guaranteed enclosure at relative width 1e-9 (median of ``--repeat``
runs, operator built beforehand), the width reached, the peak of memory that Python saw per outlet and link, and, in the
same run, the ratio of other methods' times to ours (above one: we are faster):

* eigs: scipy.sparse.linalg.eigs, one eigenvalue of largest real part, tolerance 1e-9, not certified (sum rows);
* power: shifted power iteration until its quotients are as close as ours (any rows), given up at ``--patience`` times;
* Karp: Karp's dynamic programme for the largest cycle mean, compiled by numba (max rows, up to 1e4 outlets).

"fails": no convergence in 60 restarts; ">": given up. All networks are invented
(tests/speed/graphs.py), with fixed seeds.
"""

from __future__ import annotations

import argparse
import statistics
import time
import tracemalloc
from collections.abc import Callable

import numpy as np
from scipy.sparse.linalg import ArpackError, eigs

from synth.gain import GainOperator
from tests.speed.graphs import FAMILIES

ROWS = ("sum", "max", "mixed")
KARP_SIZE = 10_000


def operator(family: str, size: int, rows: str, seed: int = 1) -> GainOperator:
    """One operator of a family; mixed rows alternate between all three types."""
    count, to, source, gain = FAMILIES[family](size, np.random.default_rng(seed))
    kinds = rows if rows != "mixed" else [("sum", "max", "root_sum_square")[i % 3] for i in range(count)]
    return GainOperator.from_links(count, to, source, gain, kinds)


def fresh(op: GainOperator) -> GainOperator:
    """The same operator without what it has remembered."""
    return op.replaced(op.gain)


def seconds(call: Callable[[], object]) -> tuple[float, object]:
    """Processor time of a call and what it returned."""
    began = time.process_time()
    value = call()
    return time.process_time() - began, value


def with_eigs(op: GainOperator) -> float | None:
    """Time of scipy's eigs, None if it does not converge."""
    matrix = op.matrix
    try:
        took, value = seconds(lambda: eigs(matrix, k=1, which="LR", tol=1e-9, return_eigenvectors=False, maxiter=60))
    except ArpackError:
        return None
    return took if np.all(np.isfinite(np.asarray(value))) else None


def with_power(op: GainOperator, width: float, limit: float) -> float | None:
    """Time of shifted power iteration to the width, None if it takes longer than the limit."""
    s = np.ones(op.size)
    began = time.process_time()
    while time.process_time() - began < limit:
        for _ in range(20):
            image = op.apply(s)
            s = image + 0.5 * image.max() * s
            s /= s.max()
        with np.errstate(all="ignore"):
            quotients = op.apply(s) / s
        if quotients.max() - quotients.min() <= width * quotients.max():
            return time.process_time() - began
    return None


def with_karp(op: GainOperator) -> float | None:
    """Time of Karp's method, compiled; None where numba is missing."""
    try:
        from numba import njit
    except ImportError:
        return None

    @njit  # type: ignore[untyped-decorator]
    def karp(start: object, source: object, weight: object) -> float:  # pragma: no cover
        n = start.size - 1
        table = np.full((n + 1, n), -np.inf)
        table[0, 0] = 0.0
        for k in range(n):
            for i in range(n):
                best = -np.inf
                for place in range(start[i], start[i + 1]):
                    best = max(best, table[k, source[place]] + weight[place])
                table[k + 1, i] = best
        largest = -np.inf
        for i in range(n):
            if table[n, i] > -np.inf:
                least = np.inf
                for k in range(n):
                    if table[k, i] > -np.inf:
                        least = min(least, (table[n, i] - table[k, i]) / (n - k))
                largest = max(largest, least)
        return np.exp(largest)

    into = op.links_into
    graph = into.start, op.source[into.order], np.log(op.gain[into.order])
    karp(np.array([0, 1]), np.array([0]), np.array([0.0]))
    took, value = seconds(lambda: karp(*graph))
    if not np.isclose(float(str(value)), op.radius().upper, rtol=1e-6):
        print(f"(Karp from outlet 0 found {value}; it only sees what outlet 0 reaches)")
    return took


def ratio(other: float | None, ours: float, missing: str) -> str:
    """How many times longer the other method took."""
    return missing if other is None else f"{other / ours:.2f}"


def row(family: str, size: int, rows: str, repeat: int, patience: float) -> str:
    """One line of the table."""
    op = operator(family, size, rows)
    times = []
    for _ in range(repeat):
        took, radius = seconds(lambda: fresh(op).radius(1e-9))
        times.append(took)
    ours = statistics.median(times)
    tracemalloc.start()
    fresh(op).radius(1e-9)
    memory = tracemalloc.get_traced_memory()[1] / (op.size + op.gain.size)
    tracemalloc.stop()
    radius = fresh(op).radius(1e-9)
    eigs_time = ratio(with_eigs(op), ours, "fails") if rows == "sum" else ""
    limit = patience * max(ours, 0.05)
    power = ratio(with_power(op, max(radius.width, 1e-12), limit), ours, f"> {limit / ours:.0f}")
    karp = ratio(with_karp(op), ours, "no numba") if rows == "max" and op.size <= KARP_SIZE else ""
    closed = f"{radius.width:.1e}{'' if radius.reached else ' (not reached)'}"
    return (
        f"| {family} | {rows} | {op.size} | {op.gain.size} | {ours:.3f} | {closed} | {memory:.0f} | {eigs_time} "
        f"| {power} | {karp} |"
    )


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sizes", type=float, nargs="+", default=[1e3, 1e4, 1e5])
    parser.add_argument("--rows", nargs="+", choices=ROWS, default=list(ROWS))
    parser.add_argument("--families", nargs="+", choices=list(FAMILIES), default=list(FAMILIES))
    parser.add_argument("--repeat", type=int, default=3)
    parser.add_argument("--patience", type=float, default=20.0)
    options = parser.parse_args()
    operator("ring", 1000, "sum").radius()  # imports are not part of the first time
    print("| network | rows | outlets | links | s | width | bytes/item | eigs | power | Karp |")
    print("|---|---|---|---|---|---|---|---|---|---|", flush=True)
    for size in options.sizes:
        for family in options.families:
            for rows in options.rows:
                print(row(family, int(size), rows, options.repeat, options.patience), flush=True)


if __name__ == "__main__":
    main()
