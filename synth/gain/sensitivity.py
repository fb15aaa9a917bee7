"""How the radius answers to every link: slopes for all links at once, and the tolerance of every single link.

*Slopes* (theory (15)): with the left and right Perron vectors l, r of the matrix M of active slopes, the radius moves
by l_i r_j / (l'r) per unit of M_ij; times M_ij / radius that is the share of the link, and the shares add up to one.
For sum rows M is the operator. For other rows the radius is a maximum over such matrices: what is given is the slope
of the active one, which is *a* slope where the maximum is attained by several, *the* slope elsewhere. Sources:
perturbation of a simple eigenvalue (Kato 1966); the maximum by the envelope theorem (Danskin 1967).

*Link tolerances* (theory (15), ours): unit u turns what arrives at its inlets into its outlets by the peak gains
p_u (outlets, inlets), and link l carries g_l from an outlet of one unit to an inlet of another. On links

    M_link[l, l'] = p_{outlet(l), inlet(l')} g_l'     where l' ends at the unit at which l starts

and link l alone, made f times as strong, brings the radius to one at f = R_ll / (R_ll - 1), R = (I - M_link)^-1.
Looking at entries of the outlet matrix instead is wrong as soon as one link feeds several entries. No inverse is
formed: with M_link = S P, where P takes links to outlets of units (one entry per outlet of the receiving unit) and S
reads them, R_ll = 1 + e_l' S (I - P S)^-1 P e_l involves the inverse Z of the outlet matrix I - P S only at pairs
(outlet read by l, outlets of the unit where l ends). Those pairs are the places of the transposed matrix, so that they
lie within the pattern of a sparse factorisation, where Takahashi's equations (Takahashi, Fagan, Chen 1973; Erisman &
Tinney, Comm. ACM 18, 1975) give them from the factors alone.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import inf
from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy.sparse import coo_array, csc_array, csr_array, eye_array
from scipy.sparse.linalg import SuperLU, splu

from synth.base.errors import InputError
from synth.gain.operator import Floats, GainOperator, Indices

_STEPS = 12
_SETTLED = 1e-9
# A link from which nothing returns has R_ll = 1 up to rounding.
_NOTHING_RETURNS = 1e-12
# Columns solved at once, where the factors are too full to be inverted entry by entry.
_BLOCK = 64
# Entries a factor may have, per outlet, before columns are cheaper than Takahashi's loop in plain Python.
_SELECTED_FILL = 400


@dataclass(frozen=True, eq=False)
class Slopes:
    """``per_gain[l]``: d radius / d gain_l (>= 0); ``share[l]``: d log radius / d log gain_l (they add up to one).

    ``radius`` is the value they belong to (not a bound); ``active`` is True where rows other than sums are among those
    that carry the radius, so that these are slopes of the active choice; ``settled`` whether both Perron vectors came
    out to one part in 10^6: where the radius is shared by several classes no single answer exists.
    """

    radius: float
    per_gain: Floats
    share: Floats
    active: bool
    settled: bool


def slopes(operator: GainOperator, width: float = 1e-10) -> Slopes:
    """Slopes of the radius for all links (theory (15)), from sparse solves; memory proportional to links and fill.

    Raises InputError if the radius is zero: then no link carries anything.
    """
    found = operator.radius(width)
    if found.upper == 0:
        raise InputError("the radius is zero, so that no link carries any of it; there is no slope to give.")
    # The leading class by itself: other classes do not move the radius.
    members, links = _leading_class(operator, found.upper)
    number = np.full(operator.size, -1, dtype=np.intp)
    number[members] = np.arange(members.size)
    inner = operator.part(members, links, number)
    matrix, weight, upper = _active(inner, width)
    right, left, settled = _perron_pair(matrix, upper)
    total = float(left @ (matrix @ right))
    # Shares in the coordinates of the point: left_i weight_l right_source, added up over links this is l'Mr.
    part = left[inner.to] * weight * right[inner.source] / total
    share = np.zeros(operator.gain.size)
    share[links] = part
    radius = found.upper
    per_gain = np.zeros(operator.gain.size)
    per_gain[links] = radius * part / inner.gain
    # A link that is not in the leading class has no slope; one of zero gain inside it is not counted.
    return Slopes(radius, per_gain, share, not inner.linear, settled)


def _leading_class(operator: GainOperator, upper: float) -> tuple[Indices, Indices]:
    """Outlets and links of the strongly connected class with the largest radius."""
    from scipy.sparse.csgraph import connected_components

    live = np.flatnonzero(operator.gain > 0)
    shape = (operator.size, operator.size)
    graph = csr_array((np.ones(live.size), (operator.to[live], operator.source[live])), shape=shape)
    _, label = connected_components(graph, directed=True, connection="strong")
    inside = live[label[operator.to[live]] == label[operator.source[live]]]
    candidates = np.unique(label[operator.to[inside]])
    if candidates.size > 1:
        best, bound = -1, -1.0
        for c in candidates.tolist():
            links = inside[label[operator.to[inside]] == c]
            part, _ = _part(operator, np.flatnonzero(label == c), links)
            value = part.radius(1e-9).lower
            if value > bound:
                best, bound = c, value
            if value >= upper * (1 - 1e-9):
                break
    else:
        best = int(candidates[0])
    return np.flatnonzero(label == best), inside[label[operator.to[inside]] == best]


def _part(operator: GainOperator, members: Indices, links: Indices) -> tuple[GainOperator, Indices]:
    number = np.full(operator.size, -1, dtype=np.intp)
    number[members] = np.arange(members.size)
    return operator.part(members, links, number), number


def _active(inner: GainOperator, width: float) -> tuple[csr_array, Floats, float]:
    """Active slopes in the coordinates of the point: matrix, weight per link in the order given, the radius."""
    found = inner.radius(width)
    exponent = np.zeros(inner.size, dtype=np.int64) if found.exponent is None else found.exponent
    shift = np.clip(exponent[inner.source] - exponent[inner.to], -1000, 1000)
    gain = np.ldexp(inner.gain * found.point[inner.source] / found.point[inner.to], shift.astype(np.int32))
    here = inner.replaced(gain)
    plan = here.layout
    sorted_weight = np.where(plan.winners(plan.gain), plan.gain, 0.0)
    if not plan.single_inlets:
        inlet = plan.inlets(plan.pieces(plan.gain))
        row = plan.collect(plan.gain)[plan.row][plan.row_of_inlet]
        sorted_weight = sorted_weight * np.minimum(inlet / row, 1.0)[plan.inlet_of_piece[plan.piece_of_link]]
    weight = np.zeros(inner.gain.size)
    weight[plan.order] = sorted_weight
    ends = inner.to, inner.source
    matrix = csr_array((weight, ends), shape=(inner.size, inner.size))
    return matrix, weight, found.upper


def _perron_pair(matrix: csr_array, radius: float) -> tuple[Floats, Floats, bool]:
    """Right and left Perron vectors by inverse iteration a hair above the radius (one factorisation for both)."""
    level = radius * (1 + 1e-7)
    system = (level * eye_array(matrix.shape[0], format="csc") - matrix.tocsc()).tocsc()
    factor: Any = splu(system, "MMD_AT_PLUS_A", 0.0, options={"SymmetricMode": True})
    ends = []
    settled = True
    for way in ("N", "T"):
        x: Floats = np.ones(matrix.shape[0])
        change = inf
        for _ in range(_STEPS):
            new: Floats = np.abs(factor.solve(x, way))
            new /= new.max()
            change = float(np.abs(new - x).max())
            x = new
            if change < _SETTLED:
                break
        settled = settled and change < 1e-6
        ends.append(x)
    return ends[0], ends[1], settled


@dataclass(frozen=True, eq=False)
class LinkNetwork:
    """A finite network down to links: who reads which outlet, and which outlets each link reaches with what gain.

    ``size`` outlets of all units, numbered through; link l reads outlet ``read[l]`` with ``strength[l]``; entry n says
    that link ``link[n]`` reaches outlet ``reached[n]`` with ``gain[n]`` (peak gain times strength). Build with
    :meth:`of`. Law: all outlets of the unit at which a link ends are listed, so one link may feed several of them.
    """

    size: int
    read: Indices
    strength: Floats
    reached: Indices
    link: Indices
    gain: Floats

    @staticmethod
    def of(
        peaks: Sequence[ArrayLike],
        source: ArrayLike,
        outlet: ArrayLike,
        to: ArrayLike,
        inlet: ArrayLike,
        strength: ArrayLike,
    ) -> LinkNetwork:
        """``peaks[u]``: peak gains of unit u, shape (outlets, inlets), >= 0. Link l runs from ``outlet[l]`` of unit
        ``source[l]`` to ``inlet[l]`` of unit ``to[l]`` with ``strength[l]`` >= 0. Raises InputError for other numbers.
        """
        tables = [np.atleast_2d(np.asarray(p, dtype=float)) for p in peaks]
        gains = np.asarray(strength, dtype=float)
        flat = np.concatenate([p.ravel() for p in tables]) if tables else np.zeros(0)
        if not np.all(np.isfinite(gains) & (gains >= 0)) or not np.all(np.isfinite(flat) & (flat >= 0)):
            raise InputError("strengths and peak gains must be finite and not negative.")
        start, end = np.asarray(source, dtype=np.intp), np.asarray(to, dtype=np.intp)
        height = np.array([len(p) for p in tables], dtype=np.intp)
        wide = np.array([p.shape[1] for p in tables], dtype=np.intp)
        first = np.concatenate([[0], np.cumsum(height)])
        base = np.concatenate([[0], np.cumsum(height * wide)])
        # One entry per outlet of the unit at which the link ends.
        each = height[end]
        link = np.repeat(np.arange(gains.size), each)
        within = np.arange(link.size) - np.repeat(np.cumsum(each) - each, each)
        place = base[end[link]] + within * wide[end[link]] + np.asarray(inlet, dtype=np.intp)[link]
        reached = first[end[link]] + within
        read = first[start] + np.asarray(outlet, dtype=np.intp)
        return LinkNetwork(int(first[-1]), read, gains, reached, link, flat[place] * gains[link])

    def operator(self, which: int | None = None, factor: float = 1.0) -> GainOperator:
        """The outlet operator (theory (1)): sum rows, a term per link and outlet reached; ``which`` times factor."""
        gain = self.gain if which is None else np.where(self.link == which, self.gain * factor, self.gain)
        return GainOperator.from_links(self.size, self.reached, self.read[self.link], gain)

    def tolerances(self) -> Floats:
        """Factor on each link alone, all others unchanged, at which the radius reaches one; infinite on no closed path.

        Rounded to nearest: :meth:`proven` makes a guaranteed statement of one, :meth:`lower_tolerances` of all. Raises
        InputError if the radius of the network as given is 1 or more. Source: theory (15) and Takahashi's equations;
        ours.
        """
        radius = self.operator().radius(1e-6)
        if radius.lower < 1 <= radius.upper:
            radius = self.operator().radius(1e-12)
        if radius.upper >= 1:
            raise InputError(
                "a link tolerance needs a network whose radius is below 1 as it stands; "
                "weaken the links or choose other gains first."
            )
        back = self.returns()
        found = np.full(back.size, inf)
        live = back > _NOTHING_RETURNS
        found[live] = (1 + back[live]) / back[live]
        return found

    def returns(self) -> Floats:
        """R_ll - 1 of every link: Z[read, k] * gain, added up over the outlets k that the link reaches."""
        system = (eye_array(self.size, format="csc") - self.operator().matrix.tocsc()).tocsc()
        live = np.flatnonzero(self.gain > 0)
        wanted = selected_inverse(system, self.read[self.link[live]], self.reached[live])
        parts = wanted * self.gain[live]
        return np.bincount(self.link[live], weights=parts, minlength=self.strength.size).astype(float)

    def lower_tolerances(self, only: Sequence[int] | None = None) -> Floats:
        """The same for the links ``only`` (None: all), as guaranteed lower bounds: :meth:`proven` holds for each.

        A tolerance is lowered until it does, usually by one part in 10^12; one enclosure per link at least. Infinite
        for links on no closed path, which is decided by the graph. Raises InputError as :meth:`tolerances`.
        """
        from scipy.sparse.csgraph import connected_components

        near = self.tolerances()
        live = np.flatnonzero(self.gain > 0)
        ends: Any = self.reached[live], self.read[self.link[live]]
        graph = coo_array((np.ones(live.size), ends), shape=(self.size, self.size)).tocsr()
        label = connected_components(graph, directed=True, connection="strong")[1]
        returning = np.zeros(self.strength.size, dtype=bool)
        returning[self.link[live][label[ends[0]] == label[ends[1]]]] = True
        asked = range(self.strength.size) if only is None else only
        return np.array([self._lowered(which, near[which]) if returning[which] else inf for which in asked])

    def _lowered(self, which: int, near: float) -> float:
        """The first of some factors below ``near`` that is proven; at least 1, which the network as given shows."""
        strong = float(self.gain[self.link == which].max())
        # A return too small to be told from rounding: some large factor is all there is to say.
        start = near if near < inf else min(0.5 / (_NOTHING_RETURNS * strong), 1 / _NOTHING_RETURNS)
        for lost in (0.0, *(10.0**-k for k in range(14, 0, -1)), *(1 - 10.0**-k for k in range(1, 13))):
            factor = start * (1 - lost)
            if factor <= 1:
                break
            if self.proven(which, factor):
                return factor
        return 1.0

    def proven(self, which: int, factor: float) -> bool:
        """Whether the radius is certainly below 1 with link ``which`` alone ``factor`` times as strong."""
        return self.operator(which, factor).radius(1e-12).upper < 1


def selected_inverse(system: csc_array, rows: Indices, columns: Indices) -> Floats:
    """Entries (rows[n], columns[n]) of the inverse of a sparse M-matrix I - M, without the inverse.

    Every place (columns[n], rows[n]) must be one of the matrix or on its diagonal. Takahashi's equations on the
    factors, from the last pivot to the first; where the factors are too full, blocks of columns are solved instead.
    """
    size = system.shape[0]
    factor = splu(system, "MMD_AT_PLUS_A", 0.0, options={"SymmetricMode": True})
    full = factor.L.nnz + factor.U.nnz > _SELECTED_FILL * size
    if full or not np.array_equal(factor.perm_r, factor.perm_c):
        return _by_columns(factor, size, rows, columns)
    return _takahashi(factor, system, rows, columns)


def _by_columns(factor: SuperLU, size: int, rows: Indices, columns: Indices) -> Floats:
    """The same entries from solves with unit vectors, a block of columns at a time."""
    found = np.zeros(rows.size)
    needed = np.unique(columns)
    for begin in range(0, needed.size, _BLOCK):
        block = needed[begin : begin + _BLOCK]
        right = np.zeros((size, block.size))
        right[block, np.arange(block.size)] = 1.0
        solved = factor.solve(right)
        here = np.flatnonzero((columns >= block[0]) & (columns <= block[-1]))
        found[here] = solved[rows[here], np.searchsorted(block, columns[here])]
    return found


def _takahashi(factor: SuperLU, system: csc_array, rows: Indices, columns: Indices) -> Floats:
    """Takahashi's equations: with B = L D V (L, V unit triangular), Z = 1/D L^-1 + (I - V) Z = V^-1 1/D + Z (I - L).

    For pivot j and the later pivots I it is joined to, Z on I x I is a part of what its parent (the first of I) has;
    it gives row and column j. What was asked for is read off on the way.
    """
    place = factor.perm_c.astype(np.intp)
    later = _later(system, place)
    lower, upper = factor.L.tocsc(), factor.U.tocsr()
    lower.sort_indices()
    upper.sort_indices()
    size = len(later)
    pivot = upper.diagonal()
    children = np.zeros(size, dtype=np.intp)
    for joined in later:
        if joined.size:
            children[joined[0]] += 1
    a, b = place[rows], place[columns]
    order = np.argsort(np.minimum(a, b), kind="stable")
    at = np.searchsorted(np.minimum(a, b)[order], np.arange(size + 1))
    found = np.zeros(rows.size)
    fronts: dict[int, Floats] = {}
    for j in range(size - 1, -1, -1):
        joined = later[j]
        front = np.empty((joined.size + 1, joined.size + 1))
        front[0, 0] = 1 / pivot[j]
        if joined.size:
            parent = int(joined[0])
            near = np.searchsorted(np.append(parent, later[parent]), joined)
            rest = fronts[parent][np.ix_(near, near)]
            column = _entries(lower, j, joined)
            row = _entries(upper, j, joined) / pivot[j]
            front[1:, 1:] = rest
            front[1:, 0] = -rest @ column
            front[0, 1:] = -row @ rest
            front[0, 0] -= row @ front[1:, 0]
            children[parent] -= 1
            if children[parent] == 0:
                del fronts[parent]
        if children[j]:
            fronts[j] = front
        asked = order[at[j] : at[j + 1]]
        if asked.size:
            names = np.append(j, joined)
            found[asked] = front[np.searchsorted(names, a[asked]), np.searchsorted(names, b[asked])]
    return found


def _later(system: csc_array, place: Indices) -> list[Indices]:
    """For every pivot the later ones it is joined to once fill is counted (symbolic elimination, George & Liu 1981)."""
    whole = system.tocoo()
    i, j = place[whole.row], place[whole.col]
    low, high = np.minimum(i, j), np.maximum(i, j)
    keep = low < high
    size = system.shape[0]
    graph = coo_array((np.ones(int(keep.sum())), (low[keep], high[keep])), shape=(size, size)).tocsr()
    graph.sum_duplicates()
    later: list[Indices] = [graph.indices[graph.indptr[k] : graph.indptr[k + 1]].astype(np.intp) for k in range(size)]
    for k in range(size):
        joined = later[k]
        if joined.size > 1:
            parent = int(joined[0])
            later[parent] = np.union1d(later[parent], joined[1:])
    return later


def _entries(matrix: csc_array | csr_array, j: int, wanted: Indices) -> Floats:
    """Entries of one stored column (or row) at sorted places; zero where none is stored."""
    begin, end = matrix.indptr[j], matrix.indptr[j + 1]
    names = matrix.indices[begin:end]
    values = np.zeros(wanted.size)
    inside = np.flatnonzero(names >= wanted[0])
    values[np.searchsorted(wanted, names[inside])] = matrix.data[begin:end][inside]
    return values
