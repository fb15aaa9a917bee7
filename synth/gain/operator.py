"""The gain operator G: how large every outlet can get, given how large the outlets it listens to are.

Row i collects its links as a sum, a maximum or a root of the sum of squares; rows of all types may stand side by side.
Links of one row with equal ``choice`` are alternatives: of them only the largest term counts. With a choice c:

    sum              sum_c max_{l in c} g_l s_{source(l)}
    max              max_l g_l s_{source(l)}
    root_sum_square  sqrt( sum over inlets ( sum_{c at the inlet} max_{l in c} g_l s_{source(l)} )^2 )    (theory (6))

A relative link that may weaken is such a pair, the neighbour's outlet or the unit's own (sum of maxima); the worst
admissible intake under a rule is one set of alternatives per source, one link per unit allowed there.

Law (theory: section 4): G is monotone (s <= t gives G(s) <= G(t)), homogeneous of degree one (G(c s) = c G(s), c >= 0)
and subadditive (G(s + t) <= G(s) + G(t)). Parallel links stay separate terms of their row, never merged beforehand.
Memory is proportional to the number of outlets and links.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, nearest
from synth.gain.solving.layout import Incoming, Layout, counting_order

if TYPE_CHECKING:
    from numpy.typing import ArrayLike
    from scipy.sparse import csr_array

    from synth.gain.decay import DecayPoint
    from synth.gain.radius import Radius

ROW_TYPES = ("sum", "max", "root_sum_square")
SUM, MAX, SQUARE = range(3)

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Codes = NDArray[np.int8]
# Below this size plain numpy is faster than building a sparse matrix, and scipy need not be imported.
_SMALL = 50


@dataclass(frozen=True, eq=False)
class GainOperator:
    """A finite gain operator; build it with :meth:`from_links`.

    ``size`` outlets; link l runs ``source[l] -> to[l]`` with the non-negative factor ``gain[l]`` (unit of the receiving
    outlet per unit of the sending one); ``codes[i]`` is the type of row i as its place in ``ROW_TYPES`` (``rows`` gives
    the names); ``inlet[l]`` groups the links of a root_sum_square row that enter one inlet (every link is its own inlet
    unless said otherwise; sum and max rows do not look at it); ``choice[l]`` >= 0 groups the alternatives of a row, -1
    stands alone (max rows do not look at it: all their links are alternatives).
    """

    size: int
    to: Indices
    source: Indices
    gain: Floats
    codes: Codes
    inlet: Indices
    choice: Indices

    @staticmethod
    def from_links(
        size: int,
        to: ArrayLike,
        source: ArrayLike,
        gain: ArrayLike,
        rows: str | Sequence[str] = "sum",
        inlet: ArrayLike | None = None,
        choice: ArrayLike | None = None,
    ) -> GainOperator:
        """Build from parallel lists, one entry per link: outlet ``to[l]`` listens to outlet ``source[l]``.

        ``size`` >= 1; indices count from 0; ``gain`` finite and >= 0; ``rows`` one type for all rows or one per row
        ("sum", "max", "root_sum_square"); ``inlet`` integers, equal for links of one row that enter the same inlet;
        ``choice`` integers, equal and >= 0 for links of one row that are alternatives, -1 for a link that stands alone
        (None: all do). Alternatives of a root_sum_square row enter one inlet; without ``inlet`` they share their own.
        Raises InputError for negative, NaN or infinite gains, indices out of range, unequal lengths, unknown types,
        alternatives that enter different inlets.
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
        codes = _row_types(rows, size)
        chosen = np.full(gains.size, -1, dtype=np.intp) if choice is None else _indices(choice, "choice", gains.size)
        if chosen.size and chosen.min() < -1:
            raise InputError(f"choice holds {chosen.min()}; use 0 or more for alternatives and -1 for a link alone.")
        groups = np.arange(gains.size, dtype=np.intp) if inlet is None else _indices(inlet, "inlet", gains.size)
        if choice is not None:
            groups = _inlets_of_alternatives(codes, ends[0], groups, chosen, inlet is not None)
        operator = GainOperator(size, *ends, gains, codes, groups, chosen)
        operator.freeze()
        return operator

    def freeze(self) -> None:
        """Make all arrays read-only."""
        for array in (self.to, self.source, self.gain, self.codes, self.inlet, self.choice):
            array.setflags(write=False)

    @cached_property
    def rows(self) -> tuple[str, ...]:
        """The type of every row by name."""
        return tuple([ROW_TYPES[code] for code in self.codes.tolist()])

    def __call__(self, s: ArrayLike) -> Floats:
        """G(s) in doubles, rounded to nearest; ``s`` (size,) finite and >= 0. Raises InputError otherwise."""
        return self.apply(self.checked(s))

    def apply(self, s: Floats) -> Floats:
        """G(s) for a vector that is known to be valid."""
        if self.linear and self.size >= _SMALL:
            image: Floats = self.matrix @ s
            return image
        plan = self.layout
        return plan.collect(plan.gain * s[plan.source])

    @cached_property
    def layout(self) -> Layout:
        """Links sorted by row, inlet and choice."""
        return Layout.of(self.size, self.to, self.source, self.gain, self.codes, self.inlet, self.choice)

    @cached_property
    def linear(self) -> bool:
        """Whether every row is a sum without alternatives, so that G is a matrix."""
        return not self.codes.any() and not (self.choice.size and self.choice.max() >= 0)

    @cached_property
    def matrix(self) -> csr_array:
        """G as a sparse matrix (parallel links added up, rounded to nearest); InputError unless G is linear."""
        from scipy.sparse import csr_array

        if not self.linear:
            raise InputError("only an operator whose rows are all sums is a matrix; this one has other rows.")
        order, start = self.links_into.order, self.links_into.start
        small = np.int32 if max(self.size, self.gain.size) < 2**31 - 1 else np.int64
        columns = self.source[order].astype(small)
        return csr_array((self.gain[order], columns, start.astype(small)), shape=(self.size, self.size))

    def dense(self) -> Floats:
        """The matrix of an operator whose rows are all sums (parallel links added up): dense() @ s == op(s).

        Raises InputError if a row is of another type or holds alternatives: such a row is no matrix.
        """
        if not self.linear:
            raise InputError("only an operator whose rows are all sums is a matrix; this one has other rows.")
        matrix = np.zeros((self.size, self.size))
        np.add.at(matrix, (self.to, self.source), self.gain)
        return matrix

    def scaled(self, factor: float) -> GainOperator:
        """Every gain times ``factor`` >= 0, rounded to nearest; the radius scales alike.

        Raises InputError if a gain leaves the range of doubles or the factor is negative or no number.
        """
        with np.errstate(over="ignore", invalid="ignore"):
            gains = _gains(self.gain * factor)
        return self.replaced(gains)

    def replaced(self, gains: Floats) -> GainOperator:
        """The same links and rows with other gains, known to be finite and >= 0."""
        operator = GainOperator(self.size, self.to, self.source, gains, self.codes, self.inlet, self.choice)
        operator.freeze()
        return operator

    def part(self, members: Indices, links: Indices, number: Indices) -> GainOperator:
        """The operator of some outlets and of links between them; ``number[i]`` is the place of outlet i in members."""
        ends = number[self.to[links]], number[self.source[links]]
        # Every link keeps its number as its own inlet unless inlets are shared: only equality counts.
        operator = GainOperator(
            int(members.size), *ends, self.gain[links], self.codes[members], self.inlet[links], self.choice[links]
        )
        operator.freeze()
        return operator

    def radius(self, width: float = 1e-9) -> Radius:
        """Guaranteed enclosure of the spectral radius; see :func:`synth.gain.radius.enclose`."""
        from synth.gain.radius import enclose

        return enclose(self, width)

    def decay_point(self, target: float, form: str = "auto") -> DecayPoint:
        """A verified point s > 0 with G(s) <= target * s; see :func:`synth.gain.decay.decay_point`."""
        from synth.gain.decay import decay_point

        return decay_point(self, target, form)

    def upper_bound(self, s: ArrayLike, exponent: ArrayLike | None = None) -> float:
        """max_i G(s)_i / s_i, rounded up: at or above the radius (theory (10)).

        ``s`` (size,) with 0 < s_i < infinity for every i, times 2**exponent where whole numbers ``exponent`` (size,)
        are given; InputError otherwise. A point that is unbounded, or not bounded away from zero, proves nothing.
        """
        from synth.gain.solving.certify import certified_upper

        values = self.checked(s)
        if not np.all(values > 0):
            i = int(np.argmin(values))
            raise InputError(f"s[{i}] = {values[i]:g}; an upper bound needs every entry above zero.")
        return certified_upper(self, values, self._exponents(exponent))

    def lower_bound(self, s: ArrayLike, exponent: ArrayLike | None = None) -> float:
        """min of G(s)_i / s_i over the entries with s_i > 0, rounded down: at or below the radius (theory (10)).

        ``s`` (size,) finite, >= 0 and not all zero (times 2**exponent); InputError otherwise.
        """
        from synth.gain.solving.certify import certified_lower

        values = self.checked(s)
        if not np.any(values > 0):
            raise InputError("s is zero everywhere; a lower bound needs at least one entry above zero.")
        return certified_lower(self, values, self._exponents(exponent))

    def _exponents(self, exponent: ArrayLike | None) -> NDArray[np.int64] | None:
        if exponent is None:
            return None
        values = _indices(exponent, "exponent", self.size, "outlet").astype(np.int64)
        if np.any(np.abs(values) > 2**60):
            raise InputError("exponent must stay between -2**60 and 2**60.")
        return values

    def quotients(self, s: Floats, wanted: Iterable[int]) -> list[tuple[float, float]]:
        """Outward rounded enclosures of G(s)_i / s_i for the given rows, worked out in exact rationals."""
        from synth.gain.solving.exact_rows import exact_quotient

        return [exact_quotient(self, i, s, None) for i in wanted]

    def below(self, s: Floats, target: float) -> bool:
        """Whether G(s) <= target * s holds exactly (rows that doubles cannot decide are compared in rationals)."""
        from synth.gain.solving.certify import lies_below

        return lies_below(self, s, target)

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
    def links_into(self) -> Incoming:
        """Link numbers of every row in the order given: ``links_into[i]`` is an array."""
        return Incoming(*counting_order(self.to, self.size))

    @property
    def groups(self) -> Indices:
        """For every link of a root_sum_square row the number of its inlet (row and inlet together), else -1."""
        plan = self.layout
        numbers = np.empty(self.gain.size, dtype=np.intp)
        numbers[plan.order] = plan.inlet_of_piece[plan.piece_of_link]
        return np.where(self.codes[self.to] == SQUARE, numbers, -1)


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


def _indices(values: ArrayLike, name: str, count: int, per: str = "link") -> Indices:
    array = np.array(values)
    if array.size == 0:
        array = array.astype(np.intp)
    if array.ndim != 1 or array.size != count:
        raise InputError(f"{name} must be a list with one entry per {per} ({count}), not of shape {array.shape}.")
    if array.dtype.kind not in "iu":
        raise InputError(f"{name} must hold whole numbers, not {array.dtype}.")
    return array.astype(np.intp)


def _row_types(rows: str | Sequence[str], size: int) -> Codes:
    place = {kind: code for code, kind in enumerate(ROW_TYPES)}
    kinds = (rows,) if isinstance(rows, str) else rows
    if not isinstance(rows, str) and len(kinds) != size:
        raise InputError(f"rows names {len(kinds)} row types; one, or one per outlet ({size}), is needed.")
    codes = np.fromiter((place.get(kind, -1) for kind in kinds), dtype=np.int8, count=len(kinds))
    if np.any(codes < 0):
        kind = kinds[int(np.argmin(codes))]
        raise InputError(
            f"unknown row type {kind!r}{nearest(str(kind), ROW_TYPES)}; accepted are {', '.join(ROW_TYPES)}."
        )
    return np.full(size, codes[0], dtype=np.int8) if isinstance(rows, str) else codes


def _inlets_of_alternatives(codes: Codes, to: Indices, inlet: Indices, choice: Indices, given: bool) -> Indices:
    """Inlets such that alternatives of a root_sum_square row enter one inlet; refused where they enter several.

    A largest term that moved from inlet to inlet would make the row neither monotone nor continuous.
    """
    links = np.flatnonzero((codes[to] == SQUARE) & (choice >= 0))
    if links.size == 0:
        return inlet
    links = links[np.lexsort((choice[links], to[links]))]
    new = np.ones(links.size, dtype=bool)
    new[1:] = (np.diff(to[links]) != 0) | (np.diff(choice[links]) != 0)
    shared = inlet[links[np.flatnonzero(new)[np.cumsum(new) - 1]]]
    if given:
        apart = np.flatnonzero(shared != inlet[links])
        if apart.size:
            k = int(links[apart[0]])
            raise InputError(
                f"link {k} into outlet {to[k]} is an alternative (choice {choice[k]}) to a link of another inlet; "
                "alternatives of a root_sum_square row must enter the same inlet."
            )
        return inlet
    result = inlet.copy()
    result[links] = shared
    return result
