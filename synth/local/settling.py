"""Sizes that every offered signal keeps under the declared disturbances: z with G(z) + M_w w <= z, checked exactly.

Theory (3), from rest. G is the guaranteed upper operator, also with alternatives (it is monotone and subadditive, and
its radius lies below one, so any such z bounds every signal). Solvers in floats propose z; rational arithmetic decides.
On a line with edges z is that of the endless pattern far behind the edge, and the solution of a window near it; what
the window then lacks is made up by a multiple of the point of strict decay s: G(z + k s) + b <= z + k s wherever
G(z) + b - z <= k (s - G(s)), for any number of rows (theory (10), (14)).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from synth.gain.assembly import Assembly, PeakTable, assemble_plan
from synth.gain.descriptions import across, reach_of, section_wiring
from synth.gain.edge_sections import MOST_ROWS, Piece
from synth.gain.operator import GainOperator
from synth.gain.plan import plan_of_units
from synth.network.layout import Edge
from synth.network.model import Network

Array = NDArray[np.float64]
Sizes = list[Fraction]
ForcedOf = Callable[[Assembly], list[Fraction]]

_POLICIES = 40
_DENSE = 120
_SLACKS = (1e-12, 1e-9, 1e-6)
_WINDOW_SLACK = 1e-9
_SPARE = 1e-4  # what the far end of a window may add to the pattern's sizes, relative


def least_sizes(assembly: Assembly, forced: Sequence[Fraction]) -> Sizes | None:
    """z with G(z) + ``forced`` <= z for a finite operator, checked exactly; None if no proposal passes."""
    operator, right = assembly.upper, np.array([float(v) for v in forced])
    found = _least(operator, right)
    if found is None:
        return None
    guess, matrix = found
    # The added part must itself be a point of decay, or it would not cover rows that nothing forces.
    lift = _solved(matrix, np.full(len(right), max(float(right.max(initial=0.0)), 1e-300)))
    for slack in _SLACKS:
        z = [Fraction(float(v)) for v in guess + slack * lift]
        if not failing(operator, z, forced, range(len(z))):
            return z
    return None


def failing(operator: GainOperator, z: Sizes, forced: Sequence[Fraction], rows: range) -> bool:
    """Whether G(z) + forced <= z fails in one of the first rows ``rows``, in exact arithmetic."""
    image = [Fraction(0)] * len(z)
    most: dict[tuple[int, int], Fraction] = {}
    for row, source, gain, choice in zip(
        operator.to.tolist(), operator.source.tolist(), operator.gain.tolist(), operator.choice.tolist(), strict=True
    ):
        if row >= rows.stop:
            continue
        term = Fraction(gain) * z[source]
        if choice < 0:
            image[row] += term
        else:
            key = (row, choice)
            image[row] += max(term - most.get(key, Fraction(0)), Fraction(0))
            most[key] = max(term, most.get(key, Fraction(0)))
    return any(image[r] + forced[r] > z[r] for r in rows)


def _winners(operator: GainOperator, z: Array) -> NDArray[np.bool_]:
    """The terms that count at z."""
    choices = operator.choice
    won = choices < 0
    chosen = np.flatnonzero(~won)
    if chosen.size:
        value = operator.gain[chosen] * z[operator.source[chosen]]
        order = np.lexsort((operator.gain[chosen], value, choices[chosen], operator.to[chosen]))
        to, group = operator.to[chosen][order], choices[chosen][order]
        last = np.append((to[1:] != to[:-1]) | (group[1:] != group[:-1]), True)
        won[chosen[order[last]]] = True
    return won


def _solved(matrix: sparse.csc_array, right: Array) -> Array:
    if matrix.shape[0] <= _DENSE:
        return np.asarray(np.linalg.solve(np.eye(matrix.shape[0]) - matrix.toarray(), right))
    return np.asarray(sparse.linalg.spsolve((sparse.eye_array(matrix.shape[0], format="csc") - matrix).tocsc(), right))


def _least(operator: GainOperator, right: Array, fixed: Array | None = None) -> tuple[Array, sparse.csc_array] | None:
    """z = G(z) + right by policies, the rows from ``len(right)`` on held at ``fixed``; None where that breaks down."""
    size = len(right)
    z = np.concatenate((np.ones(size), np.zeros(0) if fixed is None else fixed))
    won = _winners(operator, z)
    for _ in range(_POLICIES):
        used = won & (operator.to < size)
        near, far = used & (operator.source < size), used & (operator.source >= size)
        matrix = sparse.coo_array(
            (operator.gain[near], (operator.to[near], operator.source[near])), shape=(size, size)
        ).tocsc()
        heard = np.bincount(operator.to[far], weights=operator.gain[far] * z[operator.source[far]], minlength=size)
        try:
            z[:size] = _solved(matrix, right + heard[:size])
        except (np.linalg.LinAlgError, RuntimeError):
            return None
        if not np.all(np.isfinite(z)) or np.any(z < 0):
            return None
        before, won = won, _winners(operator, z)
        if np.array_equal(before, won):
            break
    return z[:size], matrix


class EdgeSizes:
    """Sizes on a line with edges: ``pattern`` (rows of the bulk) and, edge by edge, an assembly and its sizes."""

    def __init__(self, network: Network, pieces: Sequence[Piece], table: PeakTable) -> None:
        """``pieces`` of :func:`synth.gain.network_radius`, whose upper ends lie below one."""
        self.line, self.table = across(network), table
        self.bulk = pieces[0]
        self.edges = list(zip(self.line.edges, pieces[1 : 1 + len(self.line.edges)], strict=True))

    def find(self, forced_of: ForcedOf) -> tuple[Sizes, list[tuple[Assembly, Sizes]]] | None:
        """Sizes of the bulk, and assembly and sizes near each edge; ``forced_of`` gives M_w w of an assembly's rows."""
        operator = self.bulk.assembly.upper
        forced = forced_of(self.bulk.assembly)
        base = least_sizes(self.bulk.assembly, forced)
        if base is None:
            return None
        near = [self._window(edge, piece, base, forced_of) for edge, piece in self.edges]
        share = Fraction(max(found[1] for found in near))
        far = [v + share * Fraction(float(s)) for v, s in zip(base, self.bulk.point, strict=True)]
        if failing(operator, far, forced, range(len(far))):
            return None
        out = []
        for assembly, _, proposal, point, checked in near:
            z = [v + share * Fraction(float(s)) for v, s in zip(proposal, point, strict=True)]
            if failing(assembly.upper, z, forced_of(assembly), range(checked)):
                return None
            out.append((assembly, z))
        return far, out

    def _window(
        self, edge: Edge, piece: Piece, base: Sizes, forced_of: ForcedOf
    ) -> tuple[Assembly, float, Sizes, Array, int]:
        """A window so long that its far end adds little: assembly, share of s, sizes, s and the rows to be checked."""
        pattern, reach = self.bulk.assembly.plan, reach_of(self.line)
        slots, window = len(pattern.names), piece.window
        plain = np.array([float(v) for v in base])
        while True:
            plan = plan_of_units(section_wiring(self.line, edge, window + 2 * reach))
            assembly = assemble_plan(plan, self.table)
            inside, checked = (int(plan.first_row[cells * slots]) for cells in (window, window + reach))
            twin = pattern.first_row[plan.row_unit % slots] + plan.row_offer
            point = self.bulk.point[twin]
            known = min(piece.checked, len(point))
            point[:known] = piece.point[:known]
            forced = np.array([float(v) for v in forced_of(assembly)])
            z = plain[twin]
            found = _least(assembly.upper, forced[:inside], z[inside:])
            if found is not None:
                # A little more than is needed, so that rounding does not leave a lack where s is tiny.
                more = np.full(inside, max(float(forced.max(initial=0.0)), 1e-300))
                z[:inside] = found[0] + _WINDOW_SLACK * _solved(found[1], more)
            lack = (assembly.upper(z) + forced - z)[:checked]
            room = (point - assembly.upper(point))[:checked]
            share = float(np.max(lack / room, initial=0.0)) * (1 + 1e-9)
            if np.all(share * self.bulk.point <= _SPARE * plain) or 2 * plan.size > MOST_ROWS:
                sizes = [
                    base[t] if r >= inside else Fraction(float(v)) for r, (t, v) in enumerate(zip(twin, z, strict=True))
                ]
                return assembly, share, sizes, point, checked
            window *= 2
