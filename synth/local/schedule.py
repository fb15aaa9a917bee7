"""Gain tables over operating variables with one storage function, proven for any speed of change (theory (19)).

Plant and gains are interpolated with the same weights w_i. With one Q = P^{-1} per kind, Y_j = K_j Q and

    S_ij = [ A_i Q + Q A_i' + B_i Y_j + Y_j' B_i' + 2aQ , D_i ; D_i' , -diag(tau) ]

the decay inequality in between is sum_ij w_i w_j S_ij < 0. It follows from S_ii < 0 and S_ij + S_ji < 0 for all pairs
of corners of a cell; where B is the same at all corners the pairs follow from the corners, and where it is not they do
not: corners alone would pass tables that are unstable between them. Offers: H_i Q H_i' <= zeta^2 at corners (convex in
the weights). Rows are root-sum-square (6). Everything the solver returns is rounded and decided again in rationals.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.errors import InputError, SolverFailure
from synth.base.exact import ExactMatrix, Number
from synth.base.progress import Listener, silent
from synth.gain.closed import close_unit
from synth.gain.rounding import root_up
from synth.local.positive.web import refuse_shared_gains
from synth.local.schedule_grid import Grid, grid_of
from synth.network.model import Kind, Network, need_fixed_pattern

Array = NDArray[np.float64]
RATES = (0.02, 0.05, 0.1, 0.2, 0.35, 0.5)  # decay a as a part of the fastest mode allowed


@dataclass(frozen=True)
class Open:
    """A kind at one breakpoint with the own parts of its relative links folded in, exact."""

    A: ExactMatrix
    B: ExactMatrix
    D: ExactMatrix
    H: ExactMatrix


@dataclass(frozen=True)
class KindTable:
    """The table of one kind: ``gains[p]`` (inputs x sensors, u = K y) at ``grid.points[p]``, and what proves it.

    ``Q`` (n x n), ``a`` in 1/s, ``tau`` per take, ``zeta`` per offer (upper end), all exact.
    """

    kind: str
    grid: Grid
    gains: tuple[ExactMatrix, ...]
    Q: ExactMatrix
    a: Fraction
    tau: tuple[Fraction, ...]
    zeta: tuple[Fraction, ...]

    def lookup(self, values: Sequence[Number]) -> ExactMatrix:
        """K between breakpoints, by the weights the proof is about; InputError outside the table."""
        mixed = ExactMatrix.zeros(*self.gains[0].shape)
        for point, weight in self.grid.weights(values).items():
            mixed = mixed + self.gains[point].scaled(weight)
        return mixed


@dataclass(frozen=True)
class GainSchedule:
    """Gain tables of all kinds with one proof: the storage rows at ``point`` (per kind) stay below ``level``.

    ``level`` is a guaranteed upper bound of the radius of the storage rows, for every plant between breakpoints moving
    at any speed; ``proven``: level < 1 and every inequality holds strictly, decided in rationals. The proof is about
    the interpolated plant; ``grid.error`` says how far that is from the plant where it was looked at. Actuator limits
    and bands are no part of it.
    """

    tables: tuple[KindTable, ...]
    point: tuple[Fraction, ...]
    level: float
    proven: bool
    network: Network = field(repr=False)

    def lookup(self, kind: str, values: Sequence[Number]) -> ExactMatrix:
        """K of ``kind`` (inputs x sensors) at operating values inside its table."""
        for table in self.tables:
            if table.kind == kind:
                return table.lookup(values)
        raise InputError(f"there is no table of {kind[:40]!r}; there are {', '.join(t.kind for t in self.tables)}.")

    def as_json(self) -> dict[str, object]:
        """Plain data: per kind the variables, breakpoints and gains, and the level proven."""
        return {
            "tables": {
                t.kind: {
                    "variables": list(t.grid.names),
                    "breakpoints": [[float(v) for v in axis] for axis in t.grid.axes],
                    "K": [K.floats().tolist() for K in t.gains],
                    "interpolation_error": t.grid.error,
                }
                for t in self.tables
            },
            "level": self.level,
            "proven": self.proven,
            "route": "storage",
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """The tables as text, with the cautions."""
        verdict = f"Radius of the storage rows at most {self.level:.6g} between all breakpoints."
        lines = [self.network.title, "", verdict if self.proven else f"{verdict} This proves nothing."]
        for t in self.tables:
            lines += ["", f"{t.kind}, u = K y, over {', '.join(t.grid.names)}"]
            for point, K in zip(t.grid.points, t.gains, strict=True):
                shown = "; ".join(" ".join(f"{float(v):.6g}" for v in row) for row in K.rows)
                lines.append(f"  {', '.join(f'{float(v):g}' for v in point)}: {shown}")
        return "\n".join([*lines, "", cautions_text()])


def gain_schedule(
    network: Network, grids: Mapping[str, Grid], rates: Sequence[float] = RATES, progress: Listener = silent
) -> GainSchedule:
    """Gain tables for the kinds in ``grids`` (``grid_of`` or ``chosen_grid``); other kinds get one constant K.

    ``network``: a pattern of fixed links. All states must be read (C square and invertible), no sensor hears a link.
    ``rates``: decays a to try, as parts of the fastest mode; the best answer is kept.
    Modes stay inside the goal's ``fastest`` disc at every corner and pair (absent: ten times the fastest open mode).
    Raises InputError for an unknown kind or unfit sensors, SolverFailure where no common storage function was found:
    tables with fewer operating points or smaller cells may have one.
    """
    need_fixed_pattern(network, "a gain schedule")
    refuse_shared_gains(network, "a gain schedule")
    for name in grids:
        if name not in [kind.name for kind in network.kinds]:
            raise InputError(f"there is no kind {name[:40]!r}; there are {', '.join(k.name for k in network.kinds)}.")
    used = [grids.get(kind.name) or grid_of(("constant",), ((0,),), (kind,)) for kind in network.kinds]
    for grid in used:
        C = grid.kinds[0].C
        if C.shape[0] != C.shape[1] or np.linalg.matrix_rank(C.floats()) < C.shape[0]:
            raise InputError(f"a gain table of {grid.kinds[0].name} needs sensors that give every state, one each.")
    opened = [[_open(kind, network) for kind in grid.kinds] for grid in used]
    best: GainSchedule | None = None
    for part in rates:
        found = _attempt(network, used, opened, part)
        if found is not None and (best is None or found.level < best.level):
            best = found
            progress(f"common storage function: level {found.level:.6g}")
    if best is None:
        raise SolverFailure(
            "no common storage function was found for these operating points; use smaller cells or a smaller range."
        )
    return best


def _open(kind: Kind, network: Network) -> Open:
    closed = close_unit(kind, network.links, ExactMatrix.zeros(len(kind.inputs), len(kind.sensors)))
    if any(map(any, closed.F.rows)) or any(map(any, closed.Fw.rows)) or (kind.Fu and any(map(any, kind.Fu.rows))):
        raise InputError(f"{kind.name} offers a signal with feed-through, which the storage route does not take.")
    return Open(closed.A, kind.B, closed.D, closed.H)


def pairs_of(grid: Grid) -> list[tuple[int, int]]:
    """Corners (i, i) and pairs (i, j), i < j, of all cells: where S_ii and S_ij + S_ji must be negative."""
    found = {pair for cell in grid.cells() for pair in itertools.combinations_with_replacement(sorted(cell), 2)}
    return sorted(found)


def broken_pairs(
    grid: Grid, opened: Sequence[Open], gains: Sequence[ExactMatrix], Q: ExactMatrix, a: Fraction,
    tau: Sequence[Fraction],
) -> list[tuple[int, int]]:  # fmt: skip
    """The corners and pairs at which the decay inequality fails, in exact arithmetic; ``gains`` act on states.

    Empty: the interpolated table decays everywhere in between, at any speed of change. (0, 0) is reported where Q is
    not positive definite.
    """
    if Q.T != Q or not definite(Q):
        return [(0, 0)]
    n, takes = Q.shape[0], len(tau)
    found = []
    for i, j in pairs_of(grid):
        total = [[Fraction(0)] * (n + takes) for _ in range(n + takes)]
        for p, r in {(i, j), (j, i)}:
            loop = (opened[p].A + opened[p].B @ gains[r]) @ Q
            loop = loop + loop.T + Q.scaled(2 * a)
            for x in range(n):
                for y in range(n):
                    total[x][y] -= loop[x, y]
                for y in range(takes):
                    total[x][n + y] -= opened[p].D[x, y]
                    total[n + y][x] -= opened[p].D[x, y]
            for y in range(takes):
                total[n + y][n + y] += tau[y]
        if not definite(ExactMatrix.of(total, (n + takes, n + takes))):
            found.append((i, j))
    return found


def definite(matrix: ExactMatrix) -> bool:
    """Whether a symmetric rational matrix is positive definite: all pivots of its LDL' elimination are positive."""
    rows = [list(row) for row in matrix.rows]
    for k in range(len(rows)):
        if rows[k][k] <= 0:
            return False
        for i in range(k + 1, len(rows)):
            factor = rows[i][k] / rows[k][k]
            if factor:
                rows[i] = [x - factor * y for x, y in zip(rows[i], rows[k], strict=True)]
    return True


def _attempt(
    network: Network, grids: Sequence[Grid], opened: Sequence[Sequence[Open]], part: float
) -> GainSchedule | None:
    """One decay for all kinds: two rounds of promised sizes, then the exact recheck."""
    sizes = [np.ones(len(kind.offers)) for kind in network.kinds]
    tables: list[KindTable] = []
    for _ in range(2 if len(network.kinds) > 1 or any(len(s) > 1 for s in sizes) else 1):
        tables = []
        for i, (grid, points) in enumerate(zip(grids, opened, strict=True)):
            one = _table(network, grid, points, part, sizes[i], _arriving(network, i, sizes))
            if one is None:
                return None
            tables.append(one)
        sizes = [np.sqrt(s * [float(v) for v in t.zeta]) for s, t in zip(sizes, tables, strict=True)]
    level, s = _level(network, tables)
    return GainSchedule(tuple(tables), s, level, level < 1, network)


def _arriving(network: Network, i: int, sizes: Sequence[Array]) -> Array:
    kind, names = network.kinds[i], [k.name for k in network.kinds]
    found = np.zeros(len(kind.takes))
    for link in network.links:
        if link.kind == kind.name:
            j = names.index(link.source_kind)
            offer = network.kinds[j].index("offers", link.offer)
            found[kind.index("takes", link.take)] += abs(float(link.strength)) * sizes[j][offer]
    return found


def _table(
    network: Network, grid: Grid, points: Sequence[Open], part: float, promised: Array, arriving: Array
) -> KindTable | None:
    """One semidefinite program for one kind, rounded and rechecked; None if it fails either way."""
    from scipy.linalg import matrix_balance

    arriving = np.maximum(arriving, 1e-6 * max(float(arriving.max(initial=0.0)), 1e-9))
    fastest = network.goal.fastest
    A = [p.A.floats() for p in points]
    natural = max(1e-3, *(float(np.abs(np.linalg.eigvals(a)).max(initial=0.0)) for a in A))
    omega = float(fastest) if fastest is not None else 10 * natural
    d = np.diag(matrix_balance(np.sum(np.abs(A), axis=0), permute=False)[1])
    A = [a / omega / d[:, None] * d for a in A]
    B = [p.B.floats() / d[:, None] for p in points]
    D = [p.D.floats() * arriving / omega / d[:, None] for p in points]
    push, reach = (max(1e-300, *(float(np.abs(x).max(initial=0.0)) for x in X)) for X in (B, D))
    # The answer scales with the square of what arrives; count it in units in which the offers are near one.
    H = [p.H.floats() * d / promised[:, None] for p in points]
    solved = _program(grid, A, [b / push for b in B], [x / reach for x in D], H, part)
    if solved is None:
        return None
    Q, Y, tau = solved
    K = [np.linalg.solve(Q, y.T).T * omega / push / d for y in Y]
    return _exact_table(grid, points, Q * reach**2 * np.outer(d, d), K, part * omega, tau * omega / arriving**2)


def _program(
    grid: Grid, A: list[Array], B: list[Array], D: list[Array], H: list[Array], part: float
) -> tuple[Array, list[Array], Array] | None:
    """Q, Y and tau of the scaled semidefinite program (modes in the unit disc, decay ``part``); None if unsolved."""
    import cvxpy as cp

    (n, m), takes = B[0].shape, D[0].shape[1]
    Q, t = cp.Variable((n, n), symmetric=True), cp.Variable()
    Y = [cp.Variable((m, n)) for _ in A]
    tau = cp.Variable(takes, nonneg=True) if takes else None
    rules: list[Any] = [Q >> 1e-7 * np.eye(n)]
    for i, j in pairs_of(grid):
        both = sorted({(i, j), (j, i)})
        loop: Any = sum((A[p] @ Q + B[p] @ Y[r] for p, r in both), np.zeros((n, n)))
        decay = loop + loop.T + 2 * part * len(both) * Q
        if tau is None:
            rules.append(decay << -1e-7 * np.eye(n))
        else:
            inlet = np.sum([D[p] for p, _ in both], axis=0)
            block = cp.bmat([[decay, inlet], [inlet.T, -len(both) * cp.diag(tau)]])
            rules.append((block + block.T) / 2 << 0)
        disc = cp.bmat([[len(both) * Q, loop], [loop.T, len(both) * Q]])
        rules.append((disc + disc.T) / 2 >> 0)
    if tau is not None:
        rules.append(cp.sum(tau) <= 2 * part)
    rules += [cp.sum(cp.multiply(np.outer(row, row), Q)) <= t for h in H for row in h]
    problem = cp.Problem(cp.Minimize(t + 1e-5 * cp.trace(Q)), rules)
    try:
        problem.solve(solver=cp.CLARABEL)
    except (cp.SolverError, ValueError):
        return None
    if problem.status != cp.OPTIMAL:
        return None
    return np.asarray(Q.value), [np.asarray(y.value) for y in Y], np.asarray([] if tau is None else tau.value)


def _exact_table(
    grid: Grid, points: Sequence[Open], Q: Array, K: Sequence[Array], a: float, tau: Array
) -> KindTable | None:
    """Round, relax a little, and keep the table only if every corner and pair passes in rationals."""
    C = grid.kinds[0].C
    gains = [_rounded(k) for k in K]
    # Q / c with c tau proves the same, so the largest entry of Q may be one.
    unit = max(float(np.abs(Q).max()), 1e-300)
    scale = np.sqrt(np.diag(Q) / unit)
    for relax in (1e-6, 1e-5, 1e-4, 1e-3, 1e-2):
        middle = np.round((Q + Q.T) / 2 / unit / np.outer(scale, scale) * 2.0**40) / 2.0**40
        side = [Fraction(f"{s:.6g}") for s in scale]
        pairs = list(zip(middle, side, strict=True))
        exact_q = ExactMatrix.of(
            [[Fraction(float(v)) * e * b for v, b in zip(row, side, strict=True)] for row, e in pairs],
            Q.shape,
        )
        rate = Fraction(f"{a * (1 - relax):.9g}")
        times = tuple(Fraction(f"{v * (1 + relax) * unit:.9g}") for v in np.maximum(tau, 1e-300))
        if broken_pairs(grid, points, gains, exact_q, rate, times):
            continue
        zeta = []
        for k in range(len(grid.kinds[0].offers)):
            squares = [(p.H.row(k) @ exact_q @ p.H.row(k).T)[0, 0] for p in points]
            zeta.append(Fraction(root_up(max(squares))))
        inverse = _inverse(C)
        return KindTable(
            grid.kinds[0].name, grid, tuple(K_x @ inverse for K_x in gains), exact_q, rate, times, tuple(zeta)
        )
    return None


def _rounded(K: Array) -> ExactMatrix:
    return ExactMatrix.of([[Fraction(f"{v:.9g}") for v in row] for row in K], K.shape)


def _inverse(C: ExactMatrix) -> ExactMatrix:
    """The exact inverse: u = K_x x = K_x C^{-1} y."""
    from synth.network.rational import reduced

    n = C.shape[0]
    wide = [[*C.rows[i], *(Fraction(int(i == j)) for j in range(n))] for i in range(n)]
    rows, _ = reduced(wide, 2 * n)
    return ExactMatrix.of([row[n:] for row in rows], (n, n))


def _level(network: Network, tables: Sequence[KindTable]) -> tuple[float, tuple[Fraction, ...]]:
    """A point and the largest quotient of the root-sum-square rows there, rounded up: at or above their radius."""
    names = [kind.name for kind in network.kinds]

    def squares(s: Sequence[Fraction]) -> list[Fraction]:
        found = []
        for table, kind in zip(tables, network.kinds, strict=True):
            arriving = [Fraction(0)] * len(kind.takes)
            for link in network.links:
                if link.kind == kind.name:
                    j = names.index(link.source_kind)
                    zeta = tables[j].zeta[network.kinds[j].index("offers", link.offer)]
                    arriving[kind.index("takes", link.take)] += abs(link.strength) * zeta * s[j]
            total = sum((t * v * v for t, v in zip(table.tau, arriving, strict=True)), Fraction(0))
            found.append(total / (2 * table.a))
        return found

    s = [1.0] * len(tables)
    for _ in range(300):
        s = [v + float(sq) ** 0.5 for v, sq in zip(s, squares([Fraction(v) for v in s]), strict=True)]
        most = max(s)
        s = [v / most + 1e-9 for v in s]
    point = tuple(Fraction(v) for v in s)
    worst = max(sq / (v * v) for sq, v in zip(squares(point), point, strict=True))
    return root_up(worst), point
