"""Guaranteed enclosure of the spectral radius of a gain operator, and what holds it up.

radius(G) = lim |G^n(1)|^{1/n} is the largest radius of its strongly connected classes: a class that only listens to
others can be scaled so far up that what it hears does not count. In each class a point s > 0 is improved in doubles by
Noda's iteration (Noda, Numer. Math. 17, 1971), applied to the matrix of active slopes of the rows at s, which for max
rows is a policy; then both ends come from exact quotients (theory (10)), rounded outward. So the doubles only decide
how narrow the enclosure is, never whether it is right. That Noda's iteration carries over to such rows is ours; where
it stalls, shifted power steps take over, and a width that was not reached is said.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from synth.base.errors import InputError
from synth.gain.operator import Floats, GainOperator

_NODA_STEPS = 60
_POWER_STEPS = 2000
# Links that carry less than this share of the radius are left out of the list of strongest links.
_LEAST_SHARE = 1e-3


@dataclass(frozen=True)
class Bottleneck:
    """What holds the radius up.

    ``loop``: True if ``links`` are, in order, the links of one closed loop (max rows: its geometric mean is the
    radius); False if they are the links that contribute most, strongest first. ``links``: link numbers of the operator;
    ``outlets``: the outlet each of them ends at; ``shares``: d log radius / d log gain of each link at the point found
    (they add up to one over all links; theory (15)).
    """

    loop: bool
    links: tuple[int, ...]
    outlets: tuple[int, ...]
    shares: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class Radius:
    """lower <= radius(G) <= upper, guaranteed for the gains as the doubles they are.

    ``point``: s > 0 (size,), largest entry 1; with a single strongly connected class G(s) <= upper * s exactly,
    otherwise G(s) <= t s for a t as near to ``upper`` as doubles allow (``operator.upper_bound(point)`` gives it);
    ``bottleneck`` None if the radius is zero; ``method`` and ``work`` (operator evaluations and solves) say how;
    ``reached``: whether upper - lower <= width * upper, the width asked for.
    Law: scaling all gains by c scales both ends by c up to rounding; renumbering outlets changes neither.
    """

    lower: float
    upper: float
    point: Floats
    bottleneck: Bottleneck | None
    method: str
    work: int
    reached: bool


@dataclass(frozen=True)
class _Class:
    """One strongly connected class: its outlets, its enclosure, its point (1 for the largest entry)."""

    members: NDArray[np.intp]
    links: NDArray[np.intp]
    inner: GainOperator | None
    lower: float
    upper: float
    point: Floats
    work: int
    noda: bool


def enclose(operator: GainOperator, width: float = 1e-9) -> Radius:
    """Enclose the radius of ``operator`` to the relative ``width`` (0 < width < 1) if doubles allow it.

    Raises InputError if the width is out of range. A width that is not reached is reported by ``reached``, not raised.
    """
    if not (isinstance(width, (int, float)) and 0 < width < 1):
        raise InputError(f"width must lie between 0 and 1 (relative), not {width!r}.")
    classes = [_solve(operator, members, width) for members in _classes(operator)]
    leading = max(classes, key=lambda c: (c.upper, c.lower))
    lower, upper = max(c.lower for c in classes), leading.upper
    work = sum(c.work for c in classes)
    point = leading.point if len(classes) == 1 else _joined(operator, classes, upper, width)
    method = "exact quotients" if not leading.noda else "Noda iteration, exact quotients"
    if len(classes) > 1:
        method = f"{len(classes)} strongly connected classes: {method}"
    return Radius(
        lower=lower,
        upper=upper,
        point=point,
        bottleneck=None if upper == 0 else _bottleneck(leading),
        method=method,
        work=work,
        reached=upper - lower <= width * upper,
    )


def _classes(operator: GainOperator) -> list[NDArray[np.intp]]:
    """Strongly connected classes, every class after those it listens to."""
    live = operator.gain > 0
    size = operator.size
    listens = csr_array((np.ones(int(live.sum())), (operator.to[live], operator.source[live])), shape=(size, size))
    count, label = connected_components(listens, directed=True, connection="strong")
    members = [np.flatnonzero(label == c) for c in range(count)]
    # Order by what a class listens to (Kahn's method on the condensed graph).
    edges = set(zip(label[operator.to[live]].tolist(), label[operator.source[live]].tolist(), strict=True))
    waiting = [0] * count
    heard: list[list[int]] = [[] for _ in range(count)]
    for listener, speaker in edges:
        if listener != speaker:
            waiting[listener] += 1
            heard[speaker].append(listener)
    order = [c for c in range(count) if waiting[c] == 0]
    for c in order:
        for listener in heard[c]:
            waiting[listener] -= 1
            if waiting[listener] == 0:
                order.append(listener)
    return [members[c] for c in order]


def _solve(operator: GainOperator, members: NDArray[np.intp], width: float) -> _Class:
    inside = np.zeros(operator.size, dtype=bool)
    inside[members] = True
    links = np.flatnonzero(inside[operator.to] & inside[operator.source] & (operator.gain > 0))
    if links.size == 0:
        return _Class(members, links, None, 0.0, 0.0, np.ones(len(members)), 0, False)
    number = np.full(operator.size, -1, dtype=np.intp)
    number[members] = np.arange(len(members))
    inner = GainOperator.from_links(
        len(members),
        number[operator.to[links]],
        number[operator.source[links]],
        operator.gain[links],
        [operator.rows[i] for i in members.tolist()],
        operator.inlet[links],
    )
    point, work = _improve(inner, width) if len(members) > 1 else (np.ones(1), 0)
    quotients = inner.quotients(point, range(inner.size))
    lower, upper = min(low for low, _ in quotients), max(high for _, high in quotients)
    return _Class(members, links, inner, lower, upper, point, work + 1, len(members) > 1)


def _quotients(inner: GainOperator, s: Floats) -> tuple[Floats, float, float]:
    """G(s), the largest quotient G(s)/s, and by how much it exceeds the smallest, relatively (theory (10))."""
    image = inner.apply(s)
    ratios = image / s
    most, least = float(ratios.max()), float(ratios.min())
    return image, most, most / least - 1 if least > 0 else np.inf


def _improve(inner: GainOperator, width: float) -> tuple[Floats, int]:
    """A positive point whose quotients are close together; Noda steps first, shifted power steps where they stall."""
    # Far below what is asked, so that rounding the quotients outward still meets it.
    goal = max(width / 4, 4e-16)
    best, spread = np.ones(inner.size), np.inf
    s, work = best, 0
    for _ in range(_NODA_STEPS):
        image, most, here = _quotients(inner, s)
        work += 1
        if here < spread:
            best, spread = s, here
        if spread <= goal:
            return best, work
        new = _noda(inner, s, image, most)
        work += 1
        if new is None:
            break
        s = new
    s = best
    for _ in range(_POWER_STEPS):
        image, most, here = _quotients(inner, s)
        work += 1
        if here < spread:
            best, spread = s, here
        if spread <= goal:
            break
        # The geometric mean of s and G(s) is a contraction in Hilbert's metric also where G alone would go in circles.
        s = np.sqrt(s * (image + most * 1e-3 * s))
        s = s / s.max()
    return best, work


def _noda(inner: GainOperator, s: Floats, image: Floats, top: float) -> Floats | None:
    """One step s -> (top I - M)^{-1} s with M the active slopes at s, in coordinates scaled by s; None if it fails."""
    slopes = slope_weights(inner, s, image)
    matrix = np.zeros((inner.size, inner.size))
    # In the scaled coordinates M s = G(s) reads: row sums are the quotients.
    np.add.at(matrix, (inner.to, inner.source), slopes / s[inner.to])
    system = (top * (1 + 1e-15)) * np.eye(inner.size) - matrix
    try:
        factor = np.linalg.solve(system, np.ones(inner.size))
    except np.linalg.LinAlgError:
        return None
    if not np.all(np.isfinite(factor)):
        return None
    factor = np.abs(factor)
    if factor.min() <= 0:
        return None
    # Too long a step would leave the range of doubles; a cut step is still a step in the right direction.
    new = s * np.maximum(factor / factor.max(), 1e-12)
    new = new / new.max()
    return new if new.min() > 1e-280 else None


def slope_weights(operator: GainOperator, s: Floats, image: Floats) -> Floats:
    """What every link contributes to its row at s: they add up to G(s) row by row, and each is gain * dG/d(gain).

    A max row counts its largest term only (the first of equals).
    """
    terms = operator.gain * s[operator.source]
    weights = terms.copy()
    groups = operator.groups
    square = groups >= 0
    if square.any():
        totals = np.bincount(groups[square], weights=terms[square])
        row = image[operator.to[square]]
        share = np.divide(totals[groups[square]], row, out=np.zeros(int(square.sum())), where=row > 0)
        weights[square] = terms[square] * share
    for i, kind in enumerate(operator.rows):
        if kind == "max" and operator.links_into[i]:
            links = np.array(operator.links_into[i])
            weights[links] = 0.0
            first = links[int(np.argmax(terms[links]))]
            weights[first] = terms[first]
    return weights


def _bottleneck(leading: _Class) -> Bottleneck:
    inner = leading.inner
    assert inner is not None
    s = leading.point
    weights = slope_weights(inner, s, inner.apply(s))
    if all(kind == "max" for kind in inner.rows):
        local = _loop(inner, weights)
        shares = tuple(1.0 / len(local) for _ in local)
    else:
        matrix = np.zeros((inner.size, inner.size))
        np.add.at(matrix, (inner.to, inner.source), weights / s[inner.to])
        values, vectors = np.linalg.eig(matrix.T)
        left = np.abs(np.real(vectors[:, int(np.argmax(values.real))]))
        share = left[inner.to] * weights / s[inner.to]
        share = share / share.sum()
        local = [int(k) for k in np.argsort(-share, kind="stable") if share[k] >= _LEAST_SHARE * share.max()]
        shares = tuple(float(share[k]) for k in local)
    links = tuple(int(leading.links[k]) for k in local)
    outlets = tuple(int(leading.members[inner.to[k]]) for k in local)
    return Bottleneck(all(kind == "max" for kind in inner.rows), links, outlets, shares)


def _loop(inner: GainOperator, weights: Floats) -> list[int]:
    """The loop of active links with the largest geometric mean, each link followed by the one it feeds."""
    active = {int(inner.to[k]): int(k) for k in np.flatnonzero(weights > 0)}
    best: list[int] = []
    best_mean = -np.inf
    seen: set[int] = set()
    for start in active:
        path: list[int] = []
        place: dict[int, int] = {}
        node = start
        while node not in seen and node not in place:
            place[node] = len(path)
            path.append(active[node])
            node = int(inner.source[active[node]])
        if node in place:
            cycle = path[place[node] :]
            mean = float(np.mean(np.log(inner.gain[cycle])))
            if mean > best_mean:
                best, best_mean = cycle[::-1], mean
        seen.update(place)
    return best


def _joined(operator: GainOperator, classes: list[_Class], upper: float, width: float) -> Floats:
    """One positive point from those of the classes: each class is raised until what it hears counts little.

    How little is limited by the range of doubles; the tightest share that fits is used.
    """
    share = width / 2
    while share < 1e300:
        s = np.zeros(operator.size)
        for c in classes:
            s[c.members] = c.point
            heard = operator.apply(np.where(np.isin(np.arange(operator.size), c.members), 0.0, s))[c.members]
            goal = upper * (1 + share) if upper > 0 else share
            lift = max(1.0, float(np.max(heard / (goal - c.upper) / c.point)))
            s[c.members] = c.point * lift
            if lift > 1e250 or s.max() > 1e250:
                break
        else:
            s /= s.max()
            if s.min() > 1e-290:
                return s
        share *= 10
    return np.ones(operator.size)
