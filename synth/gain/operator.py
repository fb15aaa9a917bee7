"""The gain operator G: how large every outlet can get, given how large the outlets it listens to are.

Row i collects its links as a sum, a maximum or a root of the sum of squares; rows of all types may stand side by side:

    sum              sum_l g_l s_{source(l)}
    max              max_l g_l s_{source(l)}
    root_sum_square  sqrt( sum over inlets ( sum over the inlet's links g_l s_{source(l)} )^2 )      (theory (6))

Law (theory: section 4): G is monotone (s <= t gives G(s) <= G(t)), homogeneous of degree one (G(c s) = c G(s), c >= 0)
and subadditive (G(s + t) <= G(s) + G(t)). Parallel links stay separate terms of their row, never merged beforehand.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, nearest
from synth.gain.rounding import down, root_down, root_up, up

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

    from synth.gain.decay import DecayPoint
    from synth.gain.radius import Radius

ROW_TYPES = ("sum", "max", "root_sum_square")

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class GainOperator:
    """A finite gain operator; build it with :meth:`from_links`.

    ``size`` outlets; link l runs ``source[l] -> to[l]`` with the non-negative factor ``gain[l]`` (unit of the receiving
    outlet per unit of the sending one); ``rows[i]`` is the type of row i; ``inlet[l]`` groups the links of a
    root_sum_square row that enter one inlet (every link is its own inlet unless said otherwise; sum and max rows do not
    look at it).
    """

    size: int
    to: Indices
    source: Indices
    gain: Floats
    rows: tuple[str, ...]
    inlet: Indices

    @staticmethod
    def from_links(
        size: int,
        to: ArrayLike,
        source: ArrayLike,
        gain: ArrayLike,
        rows: str | Sequence[str] = "sum",
        inlet: ArrayLike | None = None,
    ) -> GainOperator:
        """Build from parallel lists, one entry per link: outlet ``to[l]`` listens to outlet ``source[l]``.

        ``size`` >= 1; indices count from 0; ``gain`` finite and >= 0; ``rows`` one type for all rows or one per row
        ("sum", "max", "root_sum_square"); ``inlet`` integers, equal for links of one row that enter the same inlet.
        Raises InputError for negative, NaN or infinite gains, indices out of range, unequal lengths, unknown types.
        """
        if not isinstance(size, (int, np.integer)) or isinstance(size, bool) or size < 1:
            raise InputError(f"size must be a positive whole number, not {size!r}.")
        size = int(size)
        gains = _gains(gain)
        ends = _indices(to, "to", gains.size), _indices(source, "source", gains.size)
        for name, values in zip(("to", "source"), ends, strict=True):
            if values.size and (values.min() < 0 or values.max() >= size):
                wrong = int(values[(values < 0) | (values >= size)][0])
                raise InputError(f"{name} holds {wrong}; outlets are numbered 0 to {size - 1}.")
        groups = np.arange(gains.size, dtype=np.intp) if inlet is None else _indices(inlet, "inlet", gains.size)
        operator = GainOperator(size, *ends, gains, _row_types(rows, size), groups)
        for array in (operator.to, operator.source, operator.gain, operator.inlet):
            array.setflags(write=False)
        return operator

    def __call__(self, s: ArrayLike) -> Floats:
        """G(s) in doubles, rounded to nearest; ``s`` (size,) finite and >= 0. Raises InputError otherwise."""
        return self.apply(self.checked(s))

    def apply(self, s: Floats) -> Floats:
        """G(s) for a vector that is known to be valid."""
        terms = self.gain * s[self.source]
        plan = self._plan
        result = np.zeros(self.size)
        if plan.sum.size:
            result += np.bincount(self.to[plan.sum], weights=terms[plan.sum], minlength=self.size)
        if plan.max.size:
            np.maximum.at(result, self.to[plan.max], terms[plan.max])
        if plan.square.size:
            # The largest term is taken out first, so that squares neither overflow nor vanish.
            groups = np.bincount(plan.group, weights=terms[plan.square], minlength=plan.group_row.size)
            largest = np.zeros(self.size)
            np.maximum.at(largest, plan.group_row, groups)
            scale = np.where(largest > 0, largest, 1.0)
            shares = groups / scale[plan.group_row]
            result += largest * np.sqrt(np.bincount(plan.group_row, weights=shares * shares, minlength=self.size))
        return result

    def dense(self) -> Floats:
        """The matrix of an operator whose rows are all sums (parallel links added up): dense() @ s == op(s).

        Raises InputError if a row is of another type: such a row is no matrix.
        """
        if any(kind != "sum" for kind in self.rows):
            raise InputError("only an operator whose rows are all sums is a matrix; this one has other rows.")
        matrix = np.zeros((self.size, self.size))
        np.add.at(matrix, (self.to, self.source), self.gain)
        return matrix

    def scaled(self, factor: float) -> GainOperator:
        """Every gain times ``factor`` >= 0, rounded to nearest; the radius scales alike."""
        return GainOperator.from_links(self.size, self.to, self.source, self.gain * factor, self.rows, self.inlet)

    def radius(self, width: float = 1e-9) -> Radius:
        """Guaranteed enclosure of the spectral radius; see :func:`synth.gain.radius.enclose`."""
        from synth.gain.radius import enclose

        return enclose(self, width)

    def decay_point(self, target: float, form: str = "auto") -> DecayPoint:
        """A verified point s > 0 with G(s) <= target * s; see :func:`synth.gain.decay.decay_point`."""
        from synth.gain.decay import decay_point

        return decay_point(self, target, form)

    def upper_bound(self, s: ArrayLike) -> float:
        """max_i G(s)_i / s_i, rounded up: at or above the radius (theory (10)).

        ``s`` (size,) with 0 < s_i < infinity for every i; InputError otherwise. A point that is unbounded, or not
        bounded away from zero, proves nothing.
        """
        values = self.checked(s)
        if not np.all(values > 0):
            i = int(np.argmin(values))
            raise InputError(f"s[{i}] = {values[i]:g}; an upper bound needs every entry above zero.")
        return max(bound for _, bound in self.quotients(values, range(self.size)))

    def lower_bound(self, s: ArrayLike) -> float:
        """min of G(s)_i / s_i over the entries with s_i > 0, rounded down: at or below the radius (theory (10)).

        ``s`` (size,) finite, >= 0 and not all zero; InputError otherwise.
        """
        values = self.checked(s)
        support = np.flatnonzero(values > 0)
        if support.size == 0:
            raise InputError("s is zero everywhere; a lower bound needs at least one entry above zero.")
        return min(bound for bound, _ in self.quotients(values, support.tolist()))

    def quotients(self, s: Floats, wanted: Iterable[int]) -> list[tuple[float, float]]:
        """Outward rounded enclosures of G(s)_i / s_i for the given rows, worked out in exact rationals."""
        point = [Fraction(value) for value in s.tolist()]
        found = []
        for i in wanted:
            exact, squared = self._exact_row(i, point)
            if squared:
                ratio = exact / point[i] ** 2
                found.append((root_down(ratio), root_up(ratio)))
            else:
                ratio = exact / point[i]
                found.append((down(ratio), up(ratio)))
        return found

    def below(self, s: Floats, target: float) -> bool:
        """Whether G(s) <= target * s holds exactly (squares are compared in root_sum_square rows)."""
        point, goal = [Fraction(value) for value in s.tolist()], Fraction(target)
        for i in range(self.size):
            exact, squared = self._exact_row(i, point)
            right = goal * point[i]
            if exact > (right * right if squared else right):
                return False
        return True

    def _exact_row(self, i: int, point: list[Fraction]) -> tuple[Fraction, bool]:
        """G(s)_i as a rational, or its square (then the flag is set)."""
        links = self.links_into[i]
        terms = [Fraction(float(self.gain[k])) * point[self.source[k]] for k in links]
        kind = self.rows[i]
        if kind == "max":
            return max(terms, default=Fraction(0)), False
        if kind == "sum":
            return sum(terms, Fraction(0)), False
        inlets: dict[int, Fraction] = {}
        for k, term in zip(links, terms, strict=True):
            group = int(self.inlet[k])
            inlets[group] = inlets.get(group, Fraction(0)) + term
        return sum((value * value for value in inlets.values()), Fraction(0)), True

    def checked(self, s: ArrayLike) -> Floats:
        """``s`` as a vector of doubles; InputError unless it has the right length and is finite and >= 0."""
        try:
            values = np.asarray(s, dtype=float)
        except (TypeError, ValueError) as error:
            raise InputError("s must be a vector of numbers.") from error
        if values.shape != (self.size,):
            raise InputError(f"s has shape {values.shape}; one number per outlet is needed: ({self.size},).")
        if not np.all(np.isfinite(values)) or np.any(values < 0):
            i = int(np.flatnonzero(~np.isfinite(values) | (values < 0))[0])
            raise InputError(f"s[{i}] = {values[i]}; every entry must be finite and not negative.")
        return values

    @cached_property
    def links_into(self) -> tuple[tuple[int, ...], ...]:
        """Link numbers of every row, in the order given."""
        into: list[list[int]] = [[] for _ in range(self.size)]
        for k, i in enumerate(self.to.tolist()):
            into[i].append(k)
        return tuple(tuple(links) for links in into)

    @cached_property
    def _plan(self) -> _Plan:
        kinds = np.array([ROW_TYPES.index(kind) for kind in self.rows])[self.to]
        square = np.flatnonzero(kinds == 2)
        pairs = np.stack([self.to[square], self.inlet[square]], axis=1)
        groups, group = np.unique(pairs, axis=0, return_inverse=True)
        return _Plan(np.flatnonzero(kinds == 0), np.flatnonzero(kinds == 1), square, group.reshape(-1), groups[:, 0])

    @property
    def groups(self) -> Indices:
        """For every link of a root_sum_square row the number of its inlet (row and inlet together), else -1."""
        numbers = np.full(self.gain.size, -1, dtype=np.intp)
        numbers[self._plan.square] = self._plan.group
        return numbers


@dataclass(frozen=True)
class _Plan:
    """Link numbers by row type; for root_sum_square rows the inlet of every link and the row of every inlet."""

    sum: Indices
    max: Indices
    square: Indices
    group: Indices
    group_row: Indices


def _gains(gain: ArrayLike) -> Floats:
    try:
        gains = np.array(gain, dtype=float)
    except (TypeError, ValueError) as error:
        raise InputError("gain must be a list of numbers, one per link.") from error
    if gains.ndim != 1:
        raise InputError(f"gain must be a list of numbers, one per link, not of shape {gains.shape}.")
    if not np.all(np.isfinite(gains)) or np.any(gains < 0):
        k = int(np.flatnonzero(~np.isfinite(gains) | (gains < 0))[0])
        raise InputError(f"gain[{k}] = {gains[k]}; every gain must be finite and not negative.")
    return gains


def _indices(values: ArrayLike, name: str, count: int) -> Indices:
    array = np.array(values)
    if array.size == 0:
        array = array.astype(np.intp)
    if array.ndim != 1 or array.size != count:
        raise InputError(f"{name} must be a list with one entry per link ({count}), not of shape {array.shape}.")
    if array.dtype.kind not in "iu":
        raise InputError(f"{name} must hold whole numbers, not {array.dtype}.")
    return array.astype(np.intp)


def _row_types(rows: str | Sequence[str], size: int) -> tuple[str, ...]:
    kinds = (rows,) * size if isinstance(rows, str) else tuple(rows)
    if len(kinds) != size:
        raise InputError(f"rows names {len(kinds)} row types; one, or one per outlet ({size}), is needed.")
    for kind in kinds:
        if kind not in ROW_TYPES:
            raise InputError(
                f"unknown row type {kind!r}{nearest(str(kind), ROW_TYPES)}; accepted are {', '.join(ROW_TYPES)}."
            )
    return kinds
