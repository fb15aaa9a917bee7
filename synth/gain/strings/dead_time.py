"""Linear loops with dead times: exact matrices per delay, and transfer functions whose terms carry e^{-s delay}.

    x'(t) = sum_b A_b x(t - b) + sum_d D_d v(t - d)        z(t) = H x(t) + sum_d F_d v(t - d)

All numbers are exact rationals, all delays are constant and as declared; nothing is replaced by a rational
approximation. A loop without delays is the special case in which every delay is zero.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from functools import cached_property
from typing import Any

from flint import acb, arb, fmpq, fmpq_poly

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix, Number, exact

Terms = dict[Fraction, list[Fraction]]
_ZERO = Fraction(0)


def rational(value: Fraction) -> fmpq:
    """The same number for the ball arithmetic."""
    return fmpq(value.numerator, value.denominator)


@dataclass(frozen=True)
class QuasiPolynomial:
    """q(s) = sum over delays b of e^{-s b} p_b(s); ``terms`` maps b >= 0 (s) to coefficients, lowest power first.

    Law: sums, products and derivatives are exact; ``at`` encloses the value at every point of a ball.
    """

    terms: Mapping[Fraction, tuple[Fraction, ...]]

    @staticmethod
    def of(terms: Mapping[Any, Sequence[Number]]) -> QuasiPolynomial:
        """Build from delays and coefficients in any form that counts as an exact number; zero terms are dropped."""
        found: dict[Fraction, tuple[Fraction, ...]] = {}
        for delay, coefficients in terms.items():
            row = [exact(c) for c in coefficients]
            while row and row[-1] == 0:
                row.pop()
            if row:
                found[exact(delay)] = tuple(row)
        return QuasiPolynomial(dict(sorted(found.items())))

    def __add__(self, other: QuasiPolynomial) -> QuasiPolynomial:
        """Exact sum."""
        out: Terms = {b: list(row) for b, row in self.terms.items()}
        for b, row in other.terms.items():
            mine = out.setdefault(b, [])
            mine.extend([_ZERO] * (len(row) - len(mine)))
            for i, c in enumerate(row):
                mine[i] += c
        return QuasiPolynomial.of(out)

    def scaled(self, factor: Number) -> QuasiPolynomial:
        """Exact multiple."""
        f = exact(factor)
        return QuasiPolynomial.of({b: [f * c for c in row] for b, row in self.terms.items()})

    def __sub__(self, other: QuasiPolynomial) -> QuasiPolynomial:
        """Exact difference."""
        return self + other.scaled(-1)

    def __mul__(self, other: QuasiPolynomial) -> QuasiPolynomial:
        """Exact product."""
        out: Terms = {}
        for b, row in self.terms.items():
            for d, other_row in other.terms.items():
                mine = out.setdefault(b + d, [])
                mine.extend([_ZERO] * (len(row) + len(other_row) - 1 - len(mine)))
                for i, c in enumerate(row):
                    for j, e in enumerate(other_row):
                        mine[i + j] += c * e
        return QuasiPolynomial.of(out)

    @cached_property
    def degree(self) -> int:
        """Highest power of s in any term (-1 for zero)."""
        return max((len(row) for row in self.terms.values()), default=0) - 1

    @cached_property
    def derivative(self) -> QuasiPolynomial:
        """dq/ds, exactly."""
        out: Terms = {}
        for b, row in self.terms.items():
            fresh = [-b * c for c in row]
            for i in range(1, len(row)):
                fresh[i - 1] += i * row[i]
            out[b] = fresh
        return QuasiPolynomial.of(out)

    @cached_property
    def _balls(self) -> list[tuple[fmpq, list[fmpq]]]:
        return [(rational(b), [rational(c) for c in reversed(row)]) for b, row in self.terms.items()]

    def at(self, s: acb) -> acb:
        """The value at s (1/s), a ball that holds q of every point of ``s``."""
        total = acb(0)
        for delay, row in self._balls:
            value = acb(0)
            for c in row:
                value = value * s + acb(arb(c))
            total += value * (-s * acb(arb(delay))).exp() if delay != 0 else value
        return total

    def at_zero(self) -> Fraction:
        """q(0), exactly."""
        return sum((row[0] for row in self.terms.values()), _ZERO)

    def taylor(self, order: int) -> list[Fraction]:
        """Exact coefficients of the power series at zero, up to and including s^order."""
        out, here, factorial = [], self, 1
        for k in range(order + 1):
            out.append(here.at_zero() / factorial)
            here, factorial = here.derivative, factorial * (k + 1)
        return out

    def leading(self, power: int) -> dict[Fraction, Fraction]:
        """Coefficients of s^power by delay."""
        return {b: row[power] for b, row in self.terms.items() if len(row) > power}

    def size(self, power: int, rate: arb) -> arb:
        """A bound of sum_b e^{b rate} |coefficient of s^power|, the largest that power weighs on Re s = -rate."""
        total = arb(0)
        for b, c in self.leading(power).items():
            total += abs(arb(rational(c))) * (arb(rational(b)) * rate).exp()
        return total.upper()


@dataclass(frozen=True)
class DelayLoop:
    """One loop with dead times and one inlet; see the module's formula for the meaning of the parts.

    ``A``: delay (s) -> n x n, 1/s (delay 0 always there); ``D``: delay -> n x 1; ``H``: name of an outlet -> 1 x n;
    ``F``: name of an outlet -> {delay: number} (feed-through). Raises InputError on shapes and negative delays.
    """

    A: Mapping[Fraction, ExactMatrix]
    D: Mapping[Fraction, ExactMatrix]
    H: Mapping[str, ExactMatrix]
    F: Mapping[str, Mapping[Fraction, Fraction]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Check the shapes once."""
        n = self.size
        good = all(m.shape == (n, n) for m in self.A.values()) and all(m.shape == (n, 1) for m in self.D.values())
        if not good or any(row.shape != (1, n) for row in self.H.values()):
            raise InputError(f"a loop with dead times needs A of shape ({n}, {n}), D of ({n}, 1) and rows of (1, {n}).")
        if any(d < 0 for d in self.delays):
            raise InputError("a dead time must not be negative.")

    @property
    def size(self) -> int:
        """Number of states."""
        return next(iter(self.A.values())).shape[0]

    @property
    def delays(self) -> tuple[Fraction, ...]:
        """Every dead time that occurs, ascending."""
        through = {d for row in self.F.values() for d in row}
        return tuple(sorted({*self.A, *self.D, *through}))

    @property
    def now(self) -> ExactMatrix:
        """The matrix of the states that are read without delay."""
        return self.A.get(_ZERO, ExactMatrix.zeros(self.size, self.size))

    def fed(self, D: Mapping[Fraction, ExactMatrix]) -> DelayLoop:
        """The same loop with another inlet and no feed-through."""
        return DelayLoop(self.A, D, self.H)

    @cached_property
    def _resolvent(self) -> tuple[QuasiPolynomial, list[list[list[QuasiPolynomial]]]]:
        """det(sI - A(s)) and the matrices N_k with adj(sI - A(s)) = sum_k s^{n-1-k} N_k (Faddeev and LeVerrier)."""
        n = self.size
        A = [
            [QuasiPolynomial.of({b: [matrix[i, j]] for b, matrix in self.A.items()}) for j in range(n)]
            for i in range(n)
        ]
        zero, one = QuasiPolynomial.of({}), QuasiPolynomial.of({0: [1]})
        current = [[one if i == j else zero for j in range(n)] for i in range(n)]
        determinant, all_N = QuasiPolynomial.of({0: [0] * n + [1]}), [current]
        for k in range(1, n + 1):
            product = [[_total(A[i][m] * current[m][j] for m in range(n)) for j in range(n)] for i in range(n)]
            c = _total(product[i][i] for i in range(n)).scaled(Fraction(-1, k))
            determinant = determinant + c * QuasiPolynomial.of({0: [0] * (n - k) + [1]})
            current = [[product[i][j] + c if i == j else product[i][j] for j in range(n)] for i in range(n)]
            if k < n:
                all_N.append(current)
        return determinant, all_N

    @property
    def characteristic(self) -> QuasiPolynomial:
        """det(sI - sum_b A_b e^{-s b})."""
        return self._resolvent[0]

    def transfer(self, outlet: str) -> tuple[QuasiPolynomial, QuasiPolynomial]:
        """Numerator and denominator of the transfer function from the inlet to ``outlet``, common factors removed."""
        determinant, all_N = self._resolvent
        n, H = self.size, self.H[outlet]
        total = QuasiPolynomial.of({})
        for k, N in enumerate(all_N):
            power = [0] * (n - 1 - k) + [1]
            for d, column in self.D.items():
                for i in range(n):
                    for j in range(n):
                        weight = H[0, i] * column[j, 0]
                        if weight:
                            total = total + (N[i][j] * QuasiPolynomial.of({d: power})).scaled(weight)
        through = QuasiPolynomial.of({d: [value] for d, value in self.F.get(outlet, {}).items()})
        return without_common_factor(total + determinant * through, determinant)


def _total(terms: object) -> QuasiPolynomial:
    out = QuasiPolynomial.of({})
    for term in terms:  # type: ignore[attr-defined]
        out = out + term
    return out


def without_common_factor(
    numerator: QuasiPolynomial, denominator: QuasiPolynomial
) -> tuple[QuasiPolynomial, QuasiPolynomial]:
    """Both divided by the greatest polynomial that divides every term of both."""
    rows = [*numerator.terms.values(), *denominator.terms.values()]
    if not numerator.terms:
        return numerator, QuasiPolynomial.of({0: [1]})
    common = fmpq_poly(0)
    for row in rows:
        common = common.gcd(fmpq_poly([rational(c) for c in row]))
    if common.degree() == 0:
        return numerator, denominator

    def divided(q: QuasiPolynomial) -> QuasiPolynomial:
        out: Terms = {}
        for b, row in q.terms.items():
            quotient = fmpq_poly([rational(c) for c in row]) // common
            out[b] = [Fraction(int(c.p), int(c.q)) for c in quotient.coeffs()]
        return QuasiPolynomial.of(out)

    return divided(numerator), divided(denominator)


def loop_of_transfer(numerator: QuasiPolynomial, denominator: QuasiPolynomial, outlet: str = "hop") -> DelayLoop:
    """A loop with the transfer function numerator/denominator, dead times included (observer form).

    Raises InputError unless the highest power of the denominator is at least 1, carries no delay, and is not below the
    numerator's; an equal power becomes feed-through.
    """
    n = denominator.degree
    top = denominator.leading(n) if n >= 0 else {}
    if n < 1 or set(top) != {_ZERO} or numerator.degree > n:
        raise InputError(
            "the transfer function needs a denominator whose highest power of s is at least 1, carries no delay and is "
            "not below the numerator's."
        )
    lead = top[_ZERO]
    through = {d: c / lead for d, c in numerator.leading(n).items()}
    for d, c in through.items():
        numerator = numerator - (QuasiPolynomial.of({d: [1]}) * denominator).scaled(c)
    if numerator.degree >= n:
        raise InputError("feed-through together with dead times in the loop is not offered.")
    A: dict[Fraction, ExactMatrix] = {}
    for b in {_ZERO, *denominator.terms}:
        row = (*denominator.terms.get(b, ()), *([_ZERO] * n))[:n]
        table = [[Fraction(int(b == 0 and j == i - 1)) for j in range(n)] for i in range(n)]
        for i in range(n):
            table[i][n - 1] -= row[i] / lead
        A[b] = ExactMatrix.of(table)
    D = {d: ExactMatrix.of([[c / lead] for c in (*row, *([_ZERO] * n))[:n]]) for d, row in numerator.terms.items()} or {
        _ZERO: ExactMatrix.zeros(n, 1)
    }
    H = ExactMatrix.of([[Fraction(int(i == n - 1)) for i in range(n)]])
    return DelayLoop(A, D, {outlet: H}, {outlet: through} if through else {})
