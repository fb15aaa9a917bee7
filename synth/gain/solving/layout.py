"""How the links of a gain operator lie in memory: sorted by row, inlet and choice, so that numpy collects them.

Every row is read as  sqrt( sum over inlets ( sum over pieces ( max over links ) )^2 ):  a max row is one piece, a sum
row one inlet, and the root of one square is the number itself. So one piece of code serves all row types.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Codes = NDArray[np.int8]
_MAX, _SQUARE = 1, 2


@dataclass(frozen=True, eq=False)
class Incoming:
    """Link numbers by row in compressed form: those of row i are ``order[start[i]:start[i + 1]]``."""

    order: Indices
    start: Indices

    def __getitem__(self, i: int) -> Indices:
        """Link numbers of row i."""
        return self.order[self.start[i] : self.start[i + 1]]

    def __len__(self) -> int:
        """Number of rows."""
        return self.start.size - 1


@dataclass(frozen=True, eq=False)
class Layout:
    """Links in sorted ``order`` and where pieces (alternatives), inlets and rows begin.

    ``piece_start`` first place of every piece in ``order``; ``inlet_start`` first piece of every inlet; ``row_start``
    first inlet of every row that has links, ``row`` the numbers of those rows. None of them is empty inside.
    """

    size: int
    order: Indices
    source: Indices
    gain: Floats
    piece_start: Indices
    inlet_start: Indices
    row_start: Indices
    row: Indices

    @staticmethod
    def of(
        size: int, to: Indices, source: Indices, gain: Floats, codes: Codes, inlet: Indices, choice: Indices
    ) -> Layout:
        """Sort the links; where no links share inlets or choices a counting sort by row is enough."""
        kind = codes[to]
        alone = (choice < 0) & (kind != _MAX)
        own_inlets = bool(np.all(np.diff(inlet) > 0))  # strictly increasing numbers are all different
        plain = bool(np.all(alone | (kind == _MAX))) and (own_inlets or not np.any(kind == _SQUARE))
        if plain:
            order, _ = counting_order(to, size)
            rows, kinds = to[order], kind[order]
            new_row = _changes(rows)
            new_inlet = new_row | (kinds == _SQUARE)
            new_piece = new_row | (kinds != _MAX)
        else:
            gate = np.where(kind == _SQUARE, inlet, 0)
            turn = np.where(kind == _MAX, 0, choice)
            order = np.lexsort((turn, gate, to))
            new_row = _changes(to[order])
            new_inlet = new_row | _changes(gate[order])
            new_piece = new_inlet | _changes(turn[order]) | alone[order]
        place = np.flatnonzero(new_piece)
        inlet_start = np.flatnonzero(new_inlet[place])
        first = place[inlet_start]
        row_start = np.flatnonzero(new_row[first])
        return Layout(
            size, order, source[order], gain[order], place, inlet_start, row_start, to[order][first[row_start]]
        )

    @property
    def single_links(self) -> bool:
        """Whether no piece holds alternatives."""
        return self.piece_start.size == self.order.size

    @property
    def single_inlets(self) -> bool:
        """Whether every row has one inlet, so that no squares occur."""
        return self.row_start.size == self.inlet_start.size

    @cached_property
    def piece_of_link(self) -> Indices:
        """The piece of every link in sorted order."""
        return _numbers(self.piece_start, self.order.size)

    @cached_property
    def inlet_of_piece(self) -> Indices:
        """The inlet of every piece."""
        return _numbers(self.inlet_start, self.piece_start.size)

    @cached_property
    def row_of_inlet(self) -> Indices:
        """The place in ``row`` of every inlet."""
        return _numbers(self.row_start, self.inlet_start.size)

    @cached_property
    def row_of_link(self) -> Indices:
        """The outlet every link in sorted order ends at."""
        return self.row[self.row_of_inlet[self.inlet_of_piece[self.piece_of_link]]]

    @cached_property
    def pieces_per_row(self) -> Indices:
        """How many numbers are added up in every row (an entry per outlet; 0 without links)."""
        count = np.zeros(self.size, dtype=np.intp)
        ends = np.append(self.inlet_start[self.row_start], self.piece_start.size)
        count[self.row] = np.diff(ends)
        return count

    def collect(self, terms: Floats) -> Floats:
        """Rows from the terms of all links in sorted order."""
        result = np.zeros(self.size)
        if self.order.size == 0:
            return result
        inlets = self.inlets(self.pieces(terms))
        if self.single_inlets:
            result[self.row] = inlets
            return result
        # The largest inlet is taken out first, so that squares neither overflow nor vanish.
        largest = np.maximum.reduceat(inlets, self.row_start)
        scale = np.where((largest > 0) & np.isfinite(largest), largest, 1.0)
        shares = inlets / scale[self.row_of_inlet]
        squares = np.bincount(self.row_of_inlet, weights=shares * shares, minlength=self.row.size)
        result[self.row] = scale * np.sqrt(squares)
        return result

    def pieces(self, terms: Floats) -> Floats:
        """The largest term of every piece."""
        if self.single_links:
            return terms
        largest: Floats = np.maximum.reduceat(terms, self.piece_start)
        return largest

    def inlets(self, pieces: Floats) -> Floats:
        """The sum of the pieces of every inlet."""
        if self.inlet_start.size == self.piece_start.size:
            return pieces
        sums = np.bincount(self.inlet_of_piece, weights=pieces, minlength=self.inlet_start.size)
        return np.asarray(sums, dtype=float)

    def winners(self, terms: Floats) -> NDArray[np.bool_]:
        """For every link in sorted order whether it is the first largest term of its piece."""
        if self.single_links:
            return np.ones(terms.size, dtype=bool)
        piece = self.piece_of_link
        place = np.where(terms == self.pieces(terms)[piece], np.arange(terms.size), terms.size)
        won = np.zeros(terms.size, dtype=bool)
        won[np.minimum.reduceat(place, self.piece_start)] = True
        return won


def counting_order(to: Indices, size: int) -> tuple[Indices, Indices]:
    """Links sorted by row, in the order given within a row, and where rows begin (size + 1,)."""
    start = np.zeros(size + 1, dtype=np.intp)
    np.cumsum(np.bincount(to, minlength=size), out=start[1:])
    if to.size < 2 or bool(np.all(to[1:] >= to[:-1])):
        return np.arange(to.size, dtype=np.intp), start
    if to.size < 1000:
        return np.argsort(to, kind="stable"), start
    from scipy.sparse import coo_array

    # A sparse matrix with one column per link: its compressed form is a counting sort, faster than comparing.
    links = np.arange(to.size)
    sorted_links = coo_array((np.ones(to.size, dtype=np.int8), (to, links)), shape=(size, to.size)).tocsr()
    return sorted_links.indices.astype(np.intp), start


def _changes(values: Indices) -> NDArray[np.bool_]:
    """Whether an entry differs from the one before; the first always does."""
    new = np.ones(values.size, dtype=bool)
    new[1:] = values[1:] != values[:-1]
    return new


def _numbers(start: Indices, count: int) -> Indices:
    """0 from the first start on, 1 from the second on, ..."""
    steps = np.zeros(count, dtype=np.intp)
    steps[start] = 1
    return np.cumsum(steps) - 1
