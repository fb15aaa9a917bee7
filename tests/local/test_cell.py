"""The cell problem: compiled once, rechecked always, monotone in what the neighbours promise."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import cvxpy as cp
import numpy as np
import pytest

from synth.base.errors import InputError
from synth.local.cell import (
    CellAnswer,
    CellData,
    CellOutcome,
    CellProblem,
    answer_of,
    best_cell,
    broken,
    cell_problem,
    solve_cell,
)
from synth.local.plant import field_of
from tests.build import convoy


def convoy_data(size: float = 0.1) -> CellData:
    """The convoy's unit whose neighbours promise the given size."""
    field = field_of(convoy())
    plant = field.plants[0]
    intake = field.arriving(0, np.full(field.intake.size, size))
    return CellData(
        plant.A, plant.B, plant.D, plant.E, plant.H, intake, plant.limit, np.ones(1), field.slowest, field.fastest
    )


def solved() -> tuple[CellData, CellAnswer]:
    data = convoy_data()
    answer = best_cell(data)
    assert answer is not None
    return data, answer


@pytest.mark.parametrize("shape", [(3, 1, 1, 1, 1, (True,)), (2, 2, 3, 2, 2, (False, True)), (4, 0, 0, 1, 1, ())])
def test_disciplined_in_parameters(shape: tuple[object, ...]) -> None:
    """Compiled once and reused for other numbers: the rule of the compiler that makes this sound."""
    assert CellProblem(*shape).problem.is_dcp(dpp=True)  # type: ignore[arg-type]
    assert cell_problem(*shape) is cell_problem(*shape)


def test_answer_holds_and_modes_keep_their_region() -> None:
    data, answer = solved()
    assert broken(data, answer.decay, answer.Q, answer.Y, answer.tau, answer.tau_w) == ()
    modes = np.linalg.eigvals(data.A + data.B @ answer.K)
    assert np.abs(modes).max() <= data.fastest * (1 + 1e-6)
    assert modes.real.max() <= -data.slowest * (1 - 1e-6)
    assert answer.size == pytest.approx(float(np.sqrt(data.H[0] @ answer.Q @ data.H[0])))


@pytest.mark.parametrize(
    ("part", "expected"),
    [
        ("Q smaller", "dissipation"),
        ("Q turned", "Q positive definite"),
        ("Y larger", "budget of actuator 1"),
        ("Y dropped", "decay of modes"),
        ("tau larger", "sum of tau within 2a"),
        ("tau negative", "tau non-negative"),
        ("not a number", "finite numbers"),
        ("too fast", "disc of modes"),
    ],
)
def test_tampered_answers_are_refused(part: str, expected: str) -> None:
    data, good = solved()
    Q, Y, tau = good.Q, good.Y, good.tau
    if part == "Q smaller":
        Q = 0.9 * Q
    elif part == "Q turned":
        Q = -Q
    elif part == "Y larger":
        Y = 30 * Y
    elif part == "Y dropped":
        Y = 0 * Y
    elif part == "tau larger":
        tau = 1.1 * tau + 0.2 * good.decay
    elif part == "tau negative":
        tau = -tau
    elif part == "not a number":
        Q = Q * np.nan
    else:
        data = replace(data, fastest=0.3 * data.fastest)
    assert expected in broken(data, good.decay, Q, Y, tau, good.tau_w)
    assert answer_of(data, good.decay, Q, Y, tau, good.tau_w) is None


@pytest.mark.parametrize("status", ["optimal_inaccurate", "infeasible", "user_limit", "unbounded"])
def test_almost_solved_is_a_failure(status: str, monkeypatch: pytest.MonkeyPatch) -> None:
    problem = CellProblem(3, 1, 1, 1, 1, (True,))
    data, good = solved()
    assert problem.solve(data, good.decay).status == "solved"
    monkeypatch.setattr(cp.Problem, "status", property(lambda self: status))
    monkeypatch.setattr("synth.local.cell._SOLVERS", ((cp.CLARABEL, {}),))
    outcome = problem.solve(data, good.decay)
    assert outcome.answer is None
    assert outcome.status == ("infeasible" if status == "infeasible" else "solver failed")


def test_solver_error_is_no_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object, **__: object) -> float:
        raise cp.SolverError("made to fail")

    data, _ = solved()
    monkeypatch.setattr(cp.Problem, "solve", fail)
    assert solve_cell(data) == CellOutcome(None, "solver failed", "")


def test_a_second_solver_is_asked_when_the_first_fails(monkeypatch: pytest.MonkeyPatch) -> None:
    """Its answer is rechecked like the first one's, and is the same optimum."""
    data, good = solved()
    solve = cp.Problem.solve

    def half(self: cp.Problem, solver: str, **options: object) -> object:
        if solver == cp.CLARABEL:
            raise cp.SolverError("made to fail")
        return solve(self, solver=solver, **options)

    monkeypatch.setattr(cp.Problem, "solve", half)
    outcome = solve_cell(data, grid=(good.decay,))
    assert (outcome.status, outcome.solver) == ("solved", cp.SCS) and outcome.answer is not None
    assert outcome.answer.size == pytest.approx(good.size, rel=1e-4)


def test_an_answer_that_breaks_an_inequality_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Solvers have called an infeasible case optimal; then neither word counts."""
    data, good = solved()
    problem = CellProblem(3, 1, 1, 1, 1, (True,))
    value = cp.Variable.value.fget
    monkeypatch.setattr("synth.local.cell._SOLVERS", ((cp.CLARABEL, {}),))
    monkeypatch.setattr(cp.Variable, "value", property(lambda self: 0.5 * value(self)))
    outcome = problem.solve(data, good.decay)
    assert outcome.answer is None and outcome.status == "answer refused"


@pytest.mark.parametrize("exponents", [(9, -9, 4), (-9, 6, 9), (-6, -9, -9)])
def test_units_do_not_matter(exponents: tuple[int, int, int]) -> None:
    """States, the actuator and the offer in units from 1e-9 to 1e9: the same optimum in each."""
    data, good = solved()
    x, u, z = (10.0**e for e in exponents)
    states = x ** np.array([1.0, -1.0, 0.5])
    changed = replace(
        data, A=data.A * states[:, None] / states, B=data.B * states[:, None] / u, D=data.D * states[:, None] / z,
        E=data.E * states[:, None], H=data.H * z / states, intake=data.intake * z, limit=data.limit * u,
        size=data.size * z,
    )  # fmt: skip
    outcome = solve_cell(changed)
    assert outcome.answer is not None and outcome.status == "solved"
    assert outcome.answer.size == pytest.approx(good.size, rel=1e-5)
    assert outcome.answer.K * states / u == pytest.approx(good.K, rel=1e-3)
    assert outcome.answer.sizes == pytest.approx(good.sizes * z, rel=1e-5)


def test_infeasible_promises_have_no_answer() -> None:
    """Neighbours so large that the actuator cannot keep up: every decay rate fails, none is 'solved'."""
    assert best_cell(convoy_data(100.0)) is None
    assert solve_cell(convoy_data(100.0), grid=(0.3,)).status == "infeasible"


def test_monotone_in_the_promised_size() -> None:
    """The design operator is monotone (theory section 5)."""
    sizes = []
    for promised in (0.0, 0.1, 0.3, 0.6):
        answer = best_cell(convoy_data(promised))
        assert answer is not None
        sizes.append(answer.size)
    assert all(a <= b * (1 + 1e-5) for a, b in pairwise(sizes))
    assert sizes[-1] > 1.05 * sizes[0]


def test_budget_counts_what_is_passed_on() -> None:
    data = replace(convoy_data(), L=np.array([[2.0]]), target=0.5)
    assert data.budget[0] == pytest.approx(data.limit[0] - 2.0 * data.intake[0] * 0.5)
    with pytest.raises(InputError, match="actuator 1"):
        _ = replace(data, L=np.array([[1e3]])).budget
