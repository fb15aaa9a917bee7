"""Expressions as sums of products, so that linear parts are exact and equal nonlinear terms are found to be equal.

A formula is a sum of numbers times *atoms*; an atom is a product of whole powers of factors: a signal, a parameter
with a tolerance, a function of formulas, or a group (a sum that is kept together). The atom without factors is one.
Products of two sums that hold signals are never multiplied out: (h1 - h2)*(h1 - h2) stays a square. All in SI units.

Law: adding, multiplying, dividing and raising formulas adds, multiplies, divides and raises their values.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from functools import cached_property

from synth.base.units import NONE, Dimension

Atom = tuple[tuple["Factor", int], ...]
MOST_TERMS = 60  # of a product of parameters and signals that is multiplied out
Span = tuple[int, int]  # the first character and how many


@dataclass(frozen=True)
class Factor:
    """One factor: ``sort`` is 'signal', 'parameter', 'group', 'power' (not whole) or the name of a function.

    ``inside`` are its arguments; ``power`` belongs to 'power'; ``span`` is where it stands in its text.
    """

    sort: str
    name: str = ""
    inside: tuple[Formula, ...] = ()
    power: Fraction = Fraction(1)
    dimension: Dimension = field(default=NONE, compare=False)
    span: Span = field(default=(0, 0), compare=False)

    @cached_property
    def text(self) -> str:
        """A canonical text, by which factors are sorted."""
        inner = ", ".join(part.text for part in self.inside)
        if self.sort in ("signal", "parameter"):
            return self.name
        return f"({inner})" if self.sort == "group" else f"{self.sort}({inner}, {self.power})"

    @cached_property
    def signals(self) -> frozenset[str]:
        """The signals it depends on."""
        if self.sort == "signal":
            return frozenset({self.name})
        return frozenset().union(*(part.signals for part in self.inside))

    @cached_property
    def parameters(self) -> frozenset[str]:
        """The parameters with a tolerance it depends on."""
        if self.sort == "parameter":
            return frozenset({self.name})
        return frozenset().union(*(part.parameters for part in self.inside))


@dataclass(frozen=True)
class Formula:
    """``terms``: numbers by atom, sorted, none zero; ``dimension`` None is a plain zero, which fits everywhere.

    ``spans`` says where each atom stands in the text it was read from.
    """

    terms: tuple[tuple[Atom, Fraction], ...]
    dimension: Dimension | None = field(default=NONE, compare=False)
    spans: Mapping[Atom, Span] = field(default_factory=dict, compare=False)

    @staticmethod
    def number(value: Fraction, dimension: Dimension | None = NONE) -> Formula:
        """A constant."""
        return Formula((((), value),) if value else (), dimension)

    @staticmethod
    def factor(factor: Factor, span: Span | None = None) -> Formula:
        """One factor alone."""
        atom: Atom = ((factor, 1),)
        return Formula(((atom, Fraction(1)),), factor.dimension, {atom: factor.span if span is None else span})

    @cached_property
    def text(self) -> str:
        """A canonical text."""
        return " + ".join(f"{c}*{_atom_text(atom)}" for atom, c in self.terms) or "0"

    @cached_property
    def signals(self) -> frozenset[str]:
        """The signals it depends on."""
        return frozenset().union(*(atom_signals(atom) for atom, _ in self.terms))

    @cached_property
    def parameters(self) -> frozenset[str]:
        """The parameters with a tolerance it depends on."""
        return frozenset().union(*(atom_parameters(atom) for atom, _ in self.terms))

    @property
    def plain(self) -> Fraction | None:
        """Its value if it is a number, otherwise None."""
        if not self.terms:
            return Fraction(0)
        return self.terms[0][1] if self.terms[0][0] == () and len(self.terms) == 1 else None

    @property
    def constant(self) -> Fraction:
        """The number in the sum."""
        return next((c for atom, c in self.terms if atom == ()), Fraction(0))

    @cached_property
    def parts(self) -> dict[str, Fraction]:
        """The coefficients of the signals that stand alone; other terms are not in it."""
        return {atom[0][0].name: c for atom, c in self.terms if _alone(atom)}

    @cached_property
    def straight(self) -> bool:
        """Whether it is numbers times signals plus a number, with at least one signal."""
        return bool(self.parts) and all(atom == () or _alone(atom) for atom, _ in self.terms)

    def scaled(self, factor: Fraction, dimension: Dimension | None) -> Formula:
        """The formula times a number, with the dimension of the product."""
        terms = tuple((atom, c * factor) for atom, c in self.terms) if factor else ()
        return Formula(terms, dimension, self.spans)

    def single(self, span: Span) -> tuple[Atom, Fraction]:
        """The formula as one atom times a number; a sum becomes a group (at ``span``) of leading number one."""
        if len(self.terms) == 1:
            return self.terms[0]
        lead = self.terms[0][1] if self.terms else Fraction(1)
        inside = Formula(tuple((atom, c / lead) for atom, c in self.terms), self.dimension, self.spans)
        return ((Factor("group", inside=(inside,), dimension=self.dimension or NONE, span=span), 1),), lead


def _alone(atom: Atom) -> bool:
    return len(atom) == 1 and atom[0][1] == 1 and atom[0][0].sort == "signal"


def _atom_text(atom: Atom) -> str:
    return "*".join(f"{factor.text}^{power}" for factor, power in atom)


def atom_signals(atom: Atom) -> frozenset[str]:
    """The signals an atom depends on."""
    return frozenset().union(*(factor.signals for factor, _ in atom))


def atom_parameters(atom: Atom) -> frozenset[str]:
    """The parameters with a tolerance an atom depends on."""
    return frozenset().union(*(factor.parameters for factor, _ in atom))


def atom_dimension(atom: Atom) -> Dimension:
    """The dimension of an atom."""
    powers = list(NONE)
    for factor, power in atom:
        for k, d in enumerate(factor.dimension):
            powers[k] += power * d
    return tuple(powers)


def _sorted(factors: Mapping[Factor, int]) -> Atom:
    return tuple(sorted(((f, p) for f, p in factors.items() if p), key=lambda pair: pair[0].text))


def merged(first: Atom, second: Atom, sign: int = 1) -> Atom:
    """The product of two atoms (``sign`` -1: the quotient)."""
    factors = dict(first)
    for factor, power in second:
        factors[factor] = factors.get(factor, 0) + sign * power
    return _sorted(factors)


def collected(
    pairs: Iterable[tuple[Atom, Fraction]], dimension: Dimension | None, spans: Mapping[Atom, Span]
) -> Formula:
    """The sum of numbers times atoms."""
    total: dict[Atom, Fraction] = {}
    for atom, c in pairs:
        total[atom] = total.get(atom, Fraction(0)) + c
    kept = sorted(((atom, c) for atom, c in total.items() if c), key=lambda pair: _atom_text(pair[0]))
    return Formula(tuple(kept), dimension, spans)


def product(left: Formula, right: Formula, dimension: Dimension | None, span: Span, sign: int = 1) -> Formula:
    """``left`` times ``right`` (``sign`` -1: divided by it); ``span`` is where a new term stands."""
    number = right.plain
    if number is not None:
        return left.scaled(number if sign == 1 else 1 / number, dimension)
    number = left.plain
    if number is not None and sign == 1:
        return right.scaled(number, dimension)
    if left.signals and right.signals and len(left.terms) > 1:
        atom, c = left.single(span)
        left = Formula(((atom, c),), left.dimension)
    elif sign == 1 and not left.signals and right.signals:
        left, right = right, left
    if sign == 1 and not right.signals and len(left.terms) * len(right.terms) <= MOST_TERMS and _linear(left):
        pairs = [(merged(a, b), c * d) for a, c in left.terms for b, d in right.terms]
        return collected(pairs, dimension, {own: span for own, _ in pairs})
    atom, c = right.single(span)
    factor = c if sign == 1 else 1 / c
    pairs = [(merged(own, atom, sign), number * factor) for own, number in left.terms]
    return collected(pairs, dimension, {own: span for own, _ in pairs})


def common_factors_out(formula: Formula) -> Formula:
    """The same formula as one product, if all its terms share factors: a/J - b/J becomes (a - b)/J."""
    if len(formula.terms) < 2:
        return formula
    shared = dict(formula.terms[0][0])
    for atom, _ in formula.terms[1:]:
        shared = {factor: power for factor, power in atom if shared.get(factor) == power}
    if not shared:
        return formula
    common = _sorted(shared)
    rest = collected([(merged(atom, common, -1), c) for atom, c in formula.terms], None, {})
    inside, lead = rest.single((0, 0))
    return Formula(((merged(inside, common), lead),), formula.dimension)


def _linear(formula: Formula) -> bool:
    """Whether every term is linear in one signal."""
    return all(linear_part(atom) is not None for atom, _ in formula.terms)


def whole_power(base: Formula, power: int, dimension: Dimension | None, span: Span) -> Formula:
    """A whole power."""
    atom, c = base.single(span)
    raised = _sorted({factor: own * power for factor, own in atom})
    return Formula(((raised, c**power),), dimension, {raised: span})


def linear_part(atom: Atom) -> tuple[str, Atom] | None:
    """The signal and what multiplies it (parameters with a tolerance only); None if the atom is not linear."""
    with_signals = [(factor, power) for factor, power in atom if factor.signals]
    if len(with_signals) != 1 or with_signals[0][1] != 1 or with_signals[0][0].sort != "signal":
        return None
    return with_signals[0][0].name, tuple(pair for pair in atom if pair != with_signals[0])


def curved(formula: Formula) -> Iterator[tuple[Atom, Fraction]]:
    """The terms that are not linear in the signals."""
    for atom, c in formula.terms:
        if atom_signals(atom) and linear_part(atom) is None:
            yield atom, c
