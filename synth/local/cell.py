"""The cell problem: state feedback for one unit whose neighbours promise sizes, as one linear matrix inequality.

theory section 5, for a fixed decay a, linear in Q, Y, tau (K = Y Q^{-1}):

    minimise max_k sqrt(H_k Q H_k')/c_k   subject to
    [ AQ + QA' + BY + Y'B' + 2aQ , (D + B L) diag(z)/lambda , E ; . , -diag(tau) , . ; . , . , -diag(tau_w) ] <= 0
    sum tau + sum tau_w <= 2a        one tau_w per disturbance component
    [ omega Q , AQ + BY ; . , omega Q ] >= 0       AQ + BY + [.]' + 2 alpha Q <= 0
    [ c^2 , Y_q ; . , Q ] >= 0 per actuator with budget c > 0

The problem of one shape is built once and its numbers are parameters. States, inputs and sizes are scaled first, so
units from 1e-9 to 1e9 make no difference. No answer of a solver is used before the inequalities have been recomputed
from it here; where the first solver fails or its answer is refused, a second one is asked.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import cvxpy as cp
import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError

Array = NDArray[np.float64]

GRID = tuple(float(a) for a in np.geomspace(0.01, 0.9, 9))  # decay rates tried, in units of the disc radius
_SOLVERS: tuple[tuple[str, dict[str, Any]], ...] = (
    (cp.CLARABEL, {}),
    (cp.SCS, {"eps_abs": 1e-7, "eps_rel": 1e-7, "max_iters": 50_000, "warm_start": False}),
)
_LOOSE = 1e-6  # an inequality may be broken by this much, relative to the size of its block


@dataclass(frozen=True)
class CellData:
    """Numbers of one cell problem in scaled signals (time in 1/omega, so ``fastest`` is 1 unless narrowed).

    ``intake`` (takes,) is sum |g| z over the links of each inlet, divided by the target; ``limit`` the actuator limits
    (inf: none); ``L`` (inputs, takes) the gains on what the links deliver; ``size`` (offers,) the scale c_k of each
    offered signal. ``E`` carries the disturbance peaks. Budgets are limit - sum |L| intake * target.
    """

    A: Array
    B: Array
    D: Array
    E: Array
    H: Array
    intake: Array
    limit: Array
    size: Array
    slowest: float
    fastest: float
    L: Array = field(default_factory=lambda: np.zeros((0, 0)))
    target: float = 1.0

    @property
    def budget(self) -> Array:
        """What each actuator has left for state feedback; InputError if neighbours use up an actuator's limit.

        Refused here, before the entry c^2 is formed: a square would hide the sign (a negative budget would pass).
        """
        used = np.abs(self.L) @ self.intake * self.target if self.L.size else np.zeros(len(self.limit))
        left = self.limit - used
        for q, value in enumerate(left):
            if not value > 0:
                raise InputError(
                    f"actuator {q + 1}: passing on what the neighbours send may already take {used[q]:.6g} of the "
                    f"limit {self.limit[q]:.6g} (scaled); lower that gain or raise the limit."
                )
        return np.asarray(left)


@dataclass(frozen=True)
class CellAnswer:
    """A solution whose inequalities were recomputed and hold; ``sizes`` (offers,) are sqrt(H_k Q H_k')."""

    K: Array
    Q: Array
    Y: Array
    tau: Array
    tau_w: Array
    decay: float
    size: float
    sizes: Array


@dataclass(frozen=True)
class CellOutcome:
    """An answer with its status: "solved", "infeasible", "solver failed" or "answer refused" (it broke an inequality).

    ``solver`` is the one whose word counts, "" where none had a usable one.
    """

    answer: CellAnswer | None
    status: str
    solver: str


class CellProblem:
    """The inequality of one shape, compiled once; ``solve`` sets its parameters.

    Law: ``problem.is_dcp(dpp=True)``, so that a new solve never repeats the compilation.
    """

    def __init__(self, n: int, inputs: int, takes: int, disturbances: int, offers: int, limited: tuple[bool, ...]):
        """Build for n states and the given numbers of signals; ``limited`` tells which actuators have a limit."""
        self.limited = limited
        self.Q = cp.Variable((n, n), symmetric=True)
        self.Y = cp.Variable((inputs, n))
        self.tau = cp.Variable(takes + disturbances, nonneg=True)
        self.size2 = cp.Variable()
        self.p_A = cp.Parameter((n, n))
        self.p_a = cp.Parameter(nonneg=True)
        self.p_slow = cp.Parameter(nonneg=True)
        self.p_fast = cp.Parameter(nonneg=True)
        self.p_B = cp.Parameter((n, inputs))
        self.p_W = cp.Parameter((n, takes + disturbances))
        self.p_rows = [cp.Parameter((n, n), symmetric=True) for _ in range(offers)]
        self.p_budget2 = cp.Parameter(inputs, nonneg=True)
        loop = self.p_A @ self.Q + self.p_B @ self.Y
        both = loop + loop.T
        width = takes + disturbances
        constraints = [cp.sum(self.tau) <= 2 * self.p_a, self.Q >> 1e-9 * np.eye(n)]
        if width:
            constraints.append(
                cp.bmat([[both + 2 * self.p_a * self.Q, self.p_W], [self.p_W.T, -cp.diag(self.tau)]]) << 0
            )
        else:
            constraints.append(both + 2 * self.p_a * self.Q << 0)
        constraints.append(cp.bmat([[self.p_fast * self.Q, loop], [loop.T, self.p_fast * self.Q]]) >> 0)
        constraints.append(both + 2 * self.p_slow * self.Q << 0)
        for q in range(inputs):
            if limited[q]:
                row = cp.reshape(self.Y[q], (1, n), order="C")
                corner = cp.reshape(self.p_budget2[q], (1, 1), order="C")
                constraints.append(cp.bmat([[corner, row], [row.T, self.Q]]) >> 0)
        constraints.extend(cp.sum(cp.multiply(row, self.Q)) <= self.size2 for row in self.p_rows)
        self.problem = cp.Problem(cp.Minimize(self.size2), constraints)

    def solve(self, data: CellData, decay: float) -> CellOutcome:
        """The rechecked optimum for one decay rate, or why there is none."""
        budget = data.budget
        self.p_A.value, self.p_B.value = data.A, data.B
        self.p_a.value, self.p_slow.value, self.p_fast.value = decay, data.slowest, data.fastest
        self.p_W.value = outside(data)
        for row, h, c in zip(self.p_rows, data.H, data.size, strict=True):
            row.value = np.outer(h, h) / c**2
        self.p_budget2.value = np.where(np.isfinite(budget), budget, 1.0) ** 2
        status = "solver failed"
        for solver, options in _SOLVERS:
            status, answer = self._ask(data, decay, solver, options)
            if status in ("solved", "infeasible"):
                return CellOutcome(answer, status, solver)
        return CellOutcome(None, status, "")

    def _ask(self, data: CellData, decay: float, solver: str, options: dict[str, Any]) -> tuple[str, CellAnswer | None]:
        """The status and the rechecked answer of one solver."""
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # an inaccurate answer is refused below, whatever cvxpy says about it
                self.problem.solve(solver=solver, **options)
        except (cp.SolverError, ValueError, ArithmeticError):
            return "solver failed", None
        if self.problem.status == cp.INFEASIBLE:
            return "infeasible", None
        if self.problem.status != cp.OPTIMAL or self.Q.value is None:
            return "solver failed", None
        takes = data.D.shape[1]
        Q = 0.5 * (self.Q.value + self.Q.value.T)
        answer = answer_of(data, decay, Q, self.Y.value, self.tau.value[:takes], self.tau.value[takes:])
        return ("answer refused", None) if answer is None else ("solved", answer)


def answer_of(data: CellData, decay: float, Q: Array, Y: Array, tau: Array, tau_w: Array) -> CellAnswer | None:
    """The answer with K = Y Q^{-1}; None if any inequality fails when recomputed from these numbers."""
    if broken(data, decay, Q, Y, tau, tau_w):
        return None
    sizes = np.sqrt(np.maximum(np.einsum("ki,ij,kj->k", data.H, Q, data.H), 0.0))
    K = np.asarray(np.linalg.solve(Q, Y.T).T, dtype=np.float64)
    size = float((sizes / data.size).max()) if len(sizes) else 0.0
    return CellAnswer(K, Q, Y, tau, tau_w, decay, size, sizes)


def broken(data: CellData, decay: float, Q: Array, Y: Array, tau: Array, tau_w: Array) -> tuple[str, ...]:
    """Names of the inequalities that do not hold for these numbers, recomputed by eigenvalues; empty if all hold."""
    parts = (Q, Y, tau, tau_w)
    if not all(np.all(np.isfinite(part)) for part in parts):
        return ("finite numbers",)
    found = []
    if float(np.linalg.eigvalsh(Q).min(initial=np.inf)) <= 0:
        return ("Q positive definite",)
    if np.concatenate((tau, tau_w)).min(initial=0.0) < -_LOOSE * decay:
        found.append("tau non-negative")
    if tau.sum() + tau_w.sum() > 2 * decay * (1 + _LOOSE):
        found.append("sum of tau within 2a")
    loop = data.A @ Q + data.B @ Y
    both = loop + loop.T
    W = outside(data)
    corner = -np.diag(np.concatenate((tau, tau_w)))
    if not _negative(np.block([[both + 2 * decay * Q, W], [W.T, corner]])):
        found.append("dissipation")
    if not _negative(-np.block([[data.fastest * Q, loop], [loop.T, data.fastest * Q]])):
        found.append("disc of modes")
    if not _negative(both + 2 * data.slowest * Q):
        found.append("decay of modes")
    for q, budget in enumerate(data.budget):
        if np.isfinite(budget):
            row = Y[q : q + 1]
            if not _negative(-np.block([[np.array([[budget**2]]), row], [row.T, Q]])):
                found.append(f"budget of actuator {q + 1}")
    return tuple(found)


def _negative(block: Array) -> bool:
    """Whether the symmetric block has no eigenvalue above a sliver of its own size."""
    values = np.linalg.eigvalsh(0.5 * (block + block.T))
    return bool(values[-1] <= _LOOSE * max(1e-12, float(np.abs(values).max())))


@lru_cache(maxsize=32)
def cell_problem(*shape: Any) -> CellProblem:
    """The compiled problem of a shape (n, inputs, takes, disturbances, offers, limited): one per shape and process."""
    return CellProblem(*shape)


def best_cell(data: CellData, grid: tuple[float, ...] = GRID) -> CellAnswer | None:
    """The smallest size over the fixed grid of decay rates; None if no rate gives a usable answer."""
    return solve_cell(data, grid).answer


def solve_cell(data: CellData, grid: tuple[float, ...] = GRID) -> CellOutcome:
    """As ``best_cell``, with a status; "infeasible" only if a solver found every rate of the grid infeasible."""
    scaling = _Scaling.of(data)
    inside = scaling.scaled(data)
    shape = (len(data.A), data.B.shape[1], data.D.shape[1], data.E.shape[1], len(data.H))
    problem = cell_problem(*shape, tuple(bool(v) for v in np.isfinite(data.limit)))
    outcomes = [problem.solve(inside, decay) for decay in grid if decay >= data.slowest]
    usable = [o for o in outcomes if o.answer is not None]
    if not usable:
        missed = [o.status for o in outcomes if o.status != "infeasible"]
        return CellOutcome(None, missed[0] if missed else "infeasible", "")
    best = min(usable, key=lambda o: o.answer.size if o.answer is not None else np.inf)
    assert best.answer is not None  # only usable ones were compared
    return CellOutcome(scaling.back(data, best.answer), best.status, best.solver)


@dataclass(frozen=True)
class _Scaling:
    """x = w state x~, u = w input u~, sizes in parts of ``size``; w is one number for all that comes from outside.

    Law: the scaled problem has the optimum of the given one, Q = w^2 T Q~ T and K = U K~ T^{-1}.
    """

    state: Array
    input: Array
    outside: float
    size: float

    @staticmethod
    def of(data: CellData) -> _Scaling:
        """Scales that bring the entries close to one: least squares of their logarithms."""
        n, inputs = data.B.shape
        W = outside(data)
        rows: list[tuple[int, int, float]] = []  # log value + scale of column - scale of row = 0
        rows += [(i, j, abs(data.A[i, j])) for i, j in zip(*np.nonzero(data.A), strict=True) if i != j]
        rows += [(i, n + j, abs(data.B[i, j])) for i, j in zip(*np.nonzero(data.B), strict=True)]
        rows += [(i, n + inputs, float(np.abs(W[i]).max())) for i in range(n) if W[i].any()]
        heads = data.H / data.size[:, None]
        last = n + inputs + 1
        rows += [(last, j, abs(heads[k, j])) for k, j in zip(*np.nonzero(heads), strict=True)]
        system, right = np.zeros((len(rows), last + 1)), np.zeros(len(rows))
        for r, (row, column, value) in enumerate(rows):
            system[r, column] += 1.0
            system[r, row] -= 1.0
            right[r] = -np.log(value)
        scale = np.exp(np.linalg.lstsq(system, right, rcond=None)[0]) if rows else np.ones(last + 1)
        state, into = scale[:n], scale[n : n + inputs]
        level = float((np.abs(W) / state[:, None]).max(initial=0.0)) or 1.0
        size = float(np.linalg.norm(heads * state, axis=1).max(initial=0.0)) * level or 1.0
        return _Scaling(state, into, level, size)

    def scaled(self, data: CellData) -> CellData:
        """The same problem in scaled signals; what the neighbours send through L is taken off the limits here."""
        down = 1 / self.state[:, None]
        into = data.D + data.B @ data.L if data.L.size else data.D
        return CellData(
            A=down * data.A * self.state, B=down * data.B * self.input, D=down * into * data.intake / self.outside,
            E=down * data.E / self.outside, H=data.H * self.state * self.outside / self.size,
            intake=np.ones(data.D.shape[1]), limit=data.budget / self.input / self.outside,
            size=data.size, slowest=data.slowest, fastest=data.fastest,
        )  # fmt: skip

    def back(self, data: CellData, answer: CellAnswer) -> CellAnswer:
        """The answer in the signals of ``data``."""
        Q = answer.Q * np.outer(self.state, self.state) * self.outside**2
        Y = answer.Y * np.outer(self.input, self.state) * self.outside**2
        K = answer.K * np.outer(self.input, 1 / self.state)
        sizes = answer.sizes * self.size
        size = float((sizes / data.size).max()) if len(sizes) else 0.0
        return CellAnswer(K, Q, Y, answer.tau, answer.tau_w, answer.decay, size, sizes)


def outside(data: CellData) -> Array:
    """Columns by which links and disturbances enter, with their sizes."""
    into = data.D + data.B @ data.L if data.L.size else data.D
    return np.concatenate((into * data.intake, data.E), axis=1)
