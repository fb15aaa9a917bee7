"""Judges gains of a positive network in our own arithmetic: radius through the gain operator, sizes, limits."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.gain.operator import GainOperator
from synth.gain.radius import Radius
from synth.gain.rounding import down, up
from synth.local.positive.check import Kappa, Statics, closed_floats, network_bound, statics
from synth.local.positive.web import Array, Group, Index, Web
from synth.local.region import decays_faster, inside_disc
from synth.network.model import Kind
from synth.network.rational import characteristic


@dataclass(frozen=True, eq=False)
class Cells:
    """Closed units that differ: unit i is ``groups[owner[i]]`` with ``kappas[owner[i]]`` (exact, Metzler)."""

    owner: Index
    groups: list[Group]
    kappas: list[Kappa]

    def of_kind(self, kind: int) -> list[int]:
        """Numbers of the cells of a kind."""
        return [c for c, group in enumerate(self.groups) if group.kind == kind]


@dataclass(frozen=True, eq=False)
class Judged:
    """What is guaranteed: ends of the radius, a point with M point <= upper * point, sizes and broken limits.

    ``sizes``: every state of every unit stays within it from rest under the declared disturbances (inf: no such bound
    was found); ``upper_operator``: the gain operator from the upper ends of the static gains.
    """

    lower: float
    upper: float
    point: Array
    sizes: Array
    broken: tuple[str, ...]
    upper_operator: GainOperator | None


def judge(web: Web, cells: Cells, width: float = 1e-9) -> Judged:
    """Enclose the radius of the network with these cells and every declared limit.

    ``upper`` is infinite, with a sentence, where a closed unit is not shown to be Hurwitz.
    """
    blocks: list[Array] = []
    statics_of: list[Statics] = []
    broken: list[str] = []
    places = np.zeros(len(cells.groups), dtype=np.intp)
    for k, kind in enumerate(web.network.kinds):
        mine = cells.of_kind(k)
        places[mine] = np.arange(len(mine))
        A = closed_floats(kind, [cells.groups[c] for c in mine], [cells.kappas[c] for c in mine])
        found = statics(A, kind.D.floats()[None], kind.H.floats())
        if not np.all(found.ok):
            broken.append(f"a unit of {kind.name} is not shown to be stable with these gains")
        blocks.append(A)
        statics_of.append(found)
        broken += _broken_modes(web, kind, cells, mine)
    sizes = np.full(int(web.states_at[-1]), np.inf)
    if any("not shown" in sentence for sentence in broken):
        return Judged(np.inf, np.inf, np.ones(int(web.offers_at[-1])), sizes, tuple(broken), None)
    units = [web.units_of(k) for k in range(len(web.network.kinds))]
    if not web.offers_at[-1]:
        lower, upper, point, above = 0.0, 0.0, np.zeros(0), None
    else:
        above, below = (_operator(web, cells, places, statics_of, side) for side in ("upper", "lower"))
        first, second = above.radius(width), below.radius(width)
        lower, upper, point = float(second.lower), float(first.upper), _plain_point(first)
    if upper < 1:
        closed = [block[places[cells.owner[mine]]] for block, mine in zip(blocks, units, strict=True)]
        sizes, _ = network_bound(web, closed, units)
    broken += _broken_sizes(web, cells, sizes)
    return Judged(lower, upper, point, sizes, tuple(broken), above)


def _plain_point(found: Radius) -> Array:
    exponent = getattr(found, "exponent", None)
    return np.asarray(found.point if exponent is None else np.ldexp(found.point, exponent), dtype=np.float64)


def _operator(web: Web, cells: Cells, places: Index, found: list[Statics], side: str) -> GainOperator:
    """Row per outlet, a term per link: static gain times |strength|, rounded outward."""
    rounded = up if side == "upper" else down
    strength = np.array([rounded(abs(link.strength)) for link in web.network.links], dtype=float)
    toward = np.inf if side == "upper" else 0.0
    to, take, source, offer, link = web.terms.T
    rows, columns, gains = [], [], []
    for k, kind in enumerate(web.network.kinds):
        mine = np.flatnonzero(web.kind_of[to] == k)
        p = getattr(found[k], side)[places[cells.owner[to[mine]]], :, take[mine]]
        for o in range(len(kind.offers)):
            value = p[:, o] * strength[link[mine]]
            rows.append(web.offers_at[to[mine]] + o)
            columns.append(web.offers_at[source[mine]] + offer[mine])
            gains.append(np.where(value > 0, np.nextafter(value, toward), 0.0))
    size = int(web.offers_at[-1])
    return GainOperator.from_links(size, np.concatenate(rows), np.concatenate(columns), np.concatenate(gains))


def _broken_modes(web: Web, kind: Kind, cells: Cells, mine: list[int]) -> list[str]:
    """Bounds on modes, decided exactly for every cell; they are no rows of the linear program."""
    goal, found = web.network.goal, []
    if goal.slowest is None and goal.fastest is None:
        return []
    n = len(kind.states)
    for c in mine:
        A, kappa = cells.groups[c].A, cells.kappas[c]
        closed = [
            [sum((kind.B[r, u] * kappa[u][q] for u in range(len(kind.inputs))), A[r][q]) for q in range(n)]
            for r in range(n)
        ]
        polynomial = characteristic(closed)
        if goal.slowest is not None and not decays_faster(polynomial, goal.slowest):
            found.append(f"a mode of {kind.name} decays no faster than {float(goal.slowest):g} 1/s")
        if goal.fastest is not None and not inside_disc(polynomial, goal.fastest):
            found.append(f"a mode of {kind.name} is not slower than {float(goal.fastest):g} 1/s")
    return list(dict.fromkeys(found))


def _broken_sizes(web: Web, cells: Cells, sizes: Array) -> list[str]:
    """Actuator limits (strictly below) and bands (at most) that the sizes do not keep."""
    found = []
    for k, kind in enumerate(web.network.kinds):
        mine = web.units_of(k)
        if not len(mine):
            continue
        xi = sizes[web.states_at[mine][:, None] + np.arange(len(kind.states))]
        for q, state in enumerate(kind.states):
            found += _above(kind, state.name, state.unit, xi[:, q], state.band, "band")
        for o, offer in enumerate(kind.offers):
            # Two more roundings than the sum itself cover the coefficients.
            reach = _weighted(xi, np.array([up(abs(v)) for v in kind.H.rows[o]]))
            found += _above(kind, offer.name, offer.unit, reach, offer.band, "band")
        for u, actuator in enumerate(kind.inputs):
            if actuator.limit is None:
                continue
            table = np.array([[up(abs(v)) for v in kappa[u]] for kappa in cells.kappas], dtype=object)
            weights = np.array([table[c] for c in cells.owner[mine]], dtype=float)
            found += _above(kind, actuator.name, actuator.unit, _weighted(xi, weights), actuator.limit, "limit")
    return found


def _weighted(xi: Array, weights: Array) -> Array:
    """Sum of weights times sizes, rounded up; zero times an unknown size is zero."""
    with np.errstate(invalid="ignore"):
        terms = np.where(np.broadcast_to(weights, xi.shape) == 0, 0.0, weights * xi)
    return np.asarray(terms.sum(axis=1) * (1 + (xi.shape[1] + 4) * 2.0**-52), dtype=np.float64)


def _above(kind: Kind, name: str, unit: str, values: Array, limit: Fraction | None, sort: str) -> list[str]:
    if limit is None:
        return []
    worst = float(values.max())
    over = not np.isfinite(worst) or (Fraction(worst) >= limit if sort == "limit" else Fraction(worst) > limit)
    if not over:
        return []
    return [f"{kind.name}.{name} may reach {worst:.4g} {unit}, its {sort} is {float(limit):.4g}"]
