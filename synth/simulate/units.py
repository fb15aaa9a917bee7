"""Sections whose units are listed one by one: members, edges, rules, and links that may weaken.

Forms: units whose signals, limits and declared peaks have the same names and sizes share their rows; a unit has the
rows of its form, all others stay zero. Nothing is folded in what runs; the adversary over the class needs the folded
units of the proof, which are kept beside.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from math import ceil
from typing import Any

import numpy as np
from scipy import sparse

from synth.base.errors import InputError
from synth.gain.closed import ClosedUnit, close_plan, close_spec
from synth.gain.descriptions import across, section_wiring, shortest_string, string_wiring, wiring_of
from synth.gain.plan import Indices, Wiring, plan_of_units
from synth.margin.folded import Rays, rays_of
from synth.network.cuts import least_cells, section_of
from synth.network.gains import Gains
from synth.network.model import Kind, Network
from synth.simulate.model import Array, Section, Shape, System
from synth.simulate.weave import Thread

MOST_UNITS = 50_000
MOST_FORMS = 40
GROUPS = ("states", "takes", "disturbances", "inputs", "offers")


@dataclass(frozen=True, eq=False)
class Strands:
    """Every arrival as numbers: entry e puts ``value[e]`` times offer ``offer`` of unit ``source`` on take ``take`` of
    unit ``to``, ``delay`` seconds late; it belongs to arrival ``arrival[e]``, and ``own`` says that it is the unit's
    own part.
    """

    to: Indices
    source: Indices
    take: Indices
    offer: Indices
    value: Array
    delay: tuple[Fraction, ...]
    delay_of: Indices
    arrival: Indices
    units: int

    def threads(self, share: Array | None = None) -> tuple[Thread, ...]:
        """The wires with every arrival at ``share[arrival]`` of its strength (None: all of it)."""
        value = self.value if share is None else self.value * share[self.arrival]
        keys = np.stack([self.take, self.offer, self.delay_of], axis=1)
        found = []
        for key in np.unique(keys, axis=0) if len(keys) else ():
            mine = np.flatnonzero(np.all(keys == key, axis=1) & (value != 0))
            ends = (self.to[mine], self.source[mine])
            web = sparse.coo_array((value[mine], ends), shape=(self.units, self.units)).tocsr()
            found.append(Thread(int(key[0]), int(key[1]), web, self.delay[key[2]]))
        return tuple(found)


@dataclass(frozen=True, eq=False)
class Units:
    """Units one by one, ready to run: ``section`` is what watches and recorders read.

    ``bare`` with nothing folded, ``folded`` with own parts folded (sparse, all units); ``specs`` closed folded units,
    ``spec_of`` the number of each unit's; ``form_of`` the form of each unit; ``alive`` group -> [number, unit] of 0, 1;
    ``weak`` whether an arrival may weaken, ``share`` how much of it is there (0: a link that a rule allows and nobody
    uses, which is folded all the same); ``rays`` what the class may put on the takes (stacked numbers).
    """

    section: Section
    wiring: Wiring
    strands: Strands
    bare: System
    folded: System
    specs: tuple[ClosedUnit, ...]
    spec_of: Indices
    form_of: Indices
    alive: Mapping[str, Array]
    weak: Any
    share: Array
    rays: Rays

    def intake(self, peak: Array) -> Array:
        """The largest the class may put on every take [take, unit], from peaks [offer, unit]."""
        rays, found = self.rays, np.zeros((self.section.block.sizes[1], self.section.cells))
        if not rays.to.size:
            return found
        value = rays.strength * peak[rays.offer, rays.source]
        largest = np.zeros(int(rays.group.max()) + 1)
        np.maximum.at(largest, rays.group, value)
        first = np.unique(rays.group, return_index=True)[1]
        np.add.at(found, (rays.take[first], rays.to[first]), largest[rays.group[first]])
        return found


def needs_units(network: Network) -> bool:
    """Whether a network is simulated unit by unit; lines of fixed links without edges are stepped cell by cell."""
    plain = network.description == "pattern" and network.dimension == 1
    return not plain or any(link.weakens or link.choice for link in network.links)


def build_units(network: Network, gains: Gains, cells: int, seed: int = 0, full: bool = False) -> Units:
    """A section of a network of any description: the members; from an edge inward; an open pattern; a random wiring.

    ``cells``: cells of the section (units of each kind under rules; members are taken whole); ``full``: under rules
    every unit has as many links as allowed. Raises InputError for
    more than 50,000 units, more than 40 forms of unit, missing gains and a section too short for its edges.
    """
    wiring = section_units(network, cells, seed, full)
    count = len(wiring.names)
    if count > MOST_UNITS:
        raise InputError(f"{count} units cannot be simulated; up to {MOST_UNITS} can. The proof does not need it.")
    missing = [kind.name for kind in wiring.kinds if kind.name not in gains]
    if missing:
        raise InputError(f"there are no gains for {', '.join(missing)}; give a gain set for every kind.")
    plan = plan_of_units(wiring)
    specs = close_plan(plan, gains)
    used = np.unique(wiring.kind)
    forms, form_of_kind = _forms([wiring.kinds[k] for k in used.tolist()], network)
    form_of = form_of_kind[np.searchsorted(used, wiring.kind)]
    place = {int(k): close_spec(wiring.kinds[k], (), gains[wiring.kinds[k].name].K) for k in used.tolist()}
    shape = _shape(forms)
    sizes = _sizes(forms)
    bare = _system(place, wiring.kind, form_of, forms, shape, sizes)
    folded = _system(dict(enumerate(specs)), plan.unit_spec, form_of, forms, shape, sizes)
    where = {kind.name: np.flatnonzero(form_of == f) for f, kind in enumerate(forms)}
    alive = {group: _alive(getattr(shape, group), where, count) for group in GROUPS}
    closed = tuple(replace(place[int(used[np.argmax(form_of_kind == f)])], kind=kind) for f, kind in enumerate(forms))
    limits = np.array([np.inf if a.limit is None else float(a.limit) for kind in forms for a in kind.inputs])
    peaks = np.array([float(w.peak) for kind in forms for w in kind.disturbances])
    names = tuple((name, wiring.kinds[k].name) for name, k in zip(wiring.names, wiring.kind.tolist(), strict=True))
    strands = strands_of(wiring, forms, form_of, shape)
    weak = np.array([link.weakens for link in wiring.links], dtype=bool)[wiring.link]
    there = np.array([float(link.strength != 0 or not link.weakens) for link in wiring.links])[wiring.link]
    modes = np.concatenate([np.zeros(0), *(np.linalg.eigvals(unit.A.floats()) for unit in specs if unit.A.shape[0])])
    section = Section(network, closed, count, shape, bare, strands.threads(there), limits, peaks, where, names, modes)
    rays = _stacked(rays_of(_alone(wiring)), wiring, forms, form_of, shape)
    return Units(
        section, wiring, strands, bare, folded, specs, plan.unit_spec, form_of, alive,
        weak, there, rays,
    )  # fmt: skip


def section_units(network: Network, cells: int, seed: int, full: bool = False) -> Wiring:
    """Units and arrivals of the section; a link from beyond a cut brings its own part only."""
    if network.members is not None:
        return wiring_of(network)
    if network.description == "rules":
        from synth.simulate.rewiring import random_wiring

        return random_wiring(network, cells, np.random.default_rng([seed, 31]), full)
    if network.description == "edge pattern":
        if len(network.edges) == 2:
            line = across(network)
            return string_wiring(line, max(cells, shortest_string(line)))
        (edge,) = network.edges
        if network.dimension == 1:
            return section_wiring(network, edge, max(cells, least_cells(edge)))
        width = ceil(cells ** (1 / network.dimension) - 1e-9)
        return wiring_of(section_of(network, edge, max(width, least_cells(edge)), width))
    return _block(network, cells)


def _block(network: Network, cells: int) -> Wiring:
    """An open block of the pattern, ceil(cells^(1/d)) cells along every direction; unit names 'kind place'."""
    d = network.dimension
    side = ceil(cells ** (1 / d) - 1e-9)
    base, slots = wiring_of(network), len(network.cell_kinds)
    spots = np.stack(np.meshgrid(*[np.arange(side)] * d, indexing="ij"), axis=-1).reshape(-1, d)
    weight = side ** np.arange(d - 1, -1, -1)
    names = tuple(f"{name} {' '.join(map(str, spot))}" for spot in spots.tolist() for name in base.names)
    to, source, link = [], [], []
    for i, j, n in zip(base.to.tolist(), base.source.tolist(), base.link.tolist(), strict=True):
        there = spots + np.array(base.links[n].at)
        inside = np.all((there >= 0) & (there < side), axis=1)
        to.append(np.arange(len(spots)) * slots + i)
        source.append(np.where(inside, (there @ weight) * slots + j, -1))
        link.append(np.full(len(spots), n))
    joined = [
        np.concatenate(part).astype(np.intp) if part else np.zeros(0, dtype=np.intp) for part in (to, source, link)
    ]
    return Wiring("pattern", base.kinds, base.links, names, np.tile(base.kind, len(spots)), *joined)


def _alone(wiring: Wiring) -> Wiring:
    """The wiring with its alternatives made single links: what is listed really is there."""
    return replace(wiring, links=tuple(replace(link, choice="") for link in wiring.links))


def _key(kind: Kind) -> tuple[object, ...]:
    signals = tuple(tuple((s.name, s.unit) for s in getattr(kind, group)) for group in GROUPS)
    bands = tuple(s.band for s in (*kind.states, *kind.offers))
    return (*signals, bands, tuple(a.limit for a in kind.inputs), tuple(w.peak for w in kind.disturbances))


def _forms(kinds: Sequence[Kind], network: Network) -> tuple[list[Kind], Indices]:
    """One kind for each form, and the form of each kind; a form of several kinds bears their declared kind's name."""
    origin: dict[str, str] = {}
    if network.members is not None:
        origin = {k.name: o[0] for k, o in zip(network.kinds, network.members.origins, strict=False)}
    found: dict[tuple[object, ...], int] = {}
    keys = [(origin.get(kind.name, kind.name), *_key(kind)) for kind in kinds]
    number = np.array([found.setdefault(key, len(found)) for key in keys], dtype=np.intp)
    if len(found) > MOST_FORMS:
        raise InputError(
            f"the units have {len(found)} different sets of signals, limits and peaks; up to {MOST_FORMS} can be "
            "simulated."
        )
    forms: list[Kind] = []
    for f in range(len(found)):
        mine = [kind for kind, n in zip(kinds, number.tolist(), strict=True) if n == f]
        name = mine[0].name if len(mine) == 1 else origin.get(mine[0].name, mine[0].name)
        if name in [kind.name for kind in forms]:
            name = mine[0].name
        forms.append(replace(mine[0], name=name, group=name))
    return forms, number


def _shape(forms: Sequence[Kind]) -> Shape:
    def ranges(group: str) -> dict[str, tuple[int, int]]:
        found, start = {}, 0
        for kind in forms:
            found[kind.name] = (start, start + len(getattr(kind, group)))
            start += len(getattr(kind, group))
        return found

    return Shape(ranges("states"), ranges("takes"), ranges("offers"), ranges("inputs"), ranges("disturbances"))


def _sizes(forms: Sequence[Kind]) -> tuple[int, int, int, int, int, int]:
    n, takes, w, u, z = (sum(len(getattr(kind, group)) for kind in forms) for group in GROUPS)
    return n, takes, w, u, z, u


def _system(
    blocks: Mapping[int, ClosedUnit], block_of: Indices, form_of: Indices, forms: Sequence[Kind], shape: Shape,
    sizes: tuple[int, int, int, int, int, int],
) -> System:  # fmt: skip
    """Sparse matrices of all units, number-major, from the closed unit of each."""
    cells = len(block_of)
    numbers = {"x": sizes[0], "v": sizes[1], "w": sizes[2], "d": sizes[3], "z": sizes[4], "y": sizes[5]}
    groups = (shape.states, shape.takes, shape.disturbances, shape.inputs, shape.offers, shape.inputs)
    ranges = dict(zip("xvwdzy", groups,
                      strict=True))  # fmt: skip
    order = np.argsort(block_of, kind="stable")
    bounds = np.searchsorted(block_of[order], np.arange(int(block_of.max(initial=-1)) + 2))

    def big(pick: Any, rows: str, columns: str) -> Any:
        data, i, j = [], [], []
        for number, unit in blocks.items():
            units = order[bounds[number] : bounds[number + 1]]
            if not units.size:
                continue
            form = forms[int(form_of[units[0]])].name
            table = np.asarray(pick(unit), dtype=float)
            for r, c in zip(*np.nonzero(table), strict=True):
                i.append((ranges[rows][form][0] + int(r)) * cells + units)
                j.append((ranges[columns][form][0] + int(c)) * cells + units)
                data.append(np.full(units.size, table[r, c]))
        size = (numbers[rows] * cells, numbers[columns] * cells)
        parts = [np.concatenate(part) if part else np.zeros(0) for part in (data, i, j)]
        return sparse.coo_matrix((parts[0], (parts[1].astype(int), parts[2].astype(int))), shape=size).tocsr()

    return System(
        big(lambda c: c.A.floats(), "x", "x"), big(lambda c: c.D.floats(), "x", "v"),
        big(lambda c: c.E.floats(), "x", "w"), big(lambda c: c.kind.B.floats(), "x", "d"),
        big(lambda c: c.H.floats(), "z", "x"), big(lambda c: c.F.floats(), "z", "v"),
        big(lambda c: c.Fw.floats(), "z", "w"), big(lambda c: c.U.floats(), "y", "x"),
        big(lambda c: c.UV.floats(), "y", "v"), sparse.csr_matrix((sizes[5] * cells, sizes[2] * cells)),
        cells, sizes, True,
    )  # fmt: skip


def _alive(ranges: Mapping[str, tuple[int, int]], where: Mapping[str, Indices], cells: int) -> Array:
    found = np.zeros((max((high for _, high in ranges.values()), default=0), cells))
    for name, (low, high) in ranges.items():
        found[low:high, where[name]] = 1.0
    return found


def _link_table(wiring: Wiring) -> tuple[Indices, Indices, Indices]:
    """Per link: position of its take in the receiving kind, of its offer in the sending one, of the receiver's own."""
    kinds = {kind.name: kind for kind in wiring.kinds}
    found = np.full((3, len(wiring.links)), -1, dtype=np.intp)
    for n, link in enumerate(wiring.links):
        found[0, n] = kinds[link.kind].index("takes", link.take)
        found[1, n] = kinds[link.source_kind].index("offers", link.offer)
        if link.relative:
            found[2, n] = kinds[link.kind].index("offers", link.offer)
    return found[0], found[1], found[2]


def strands_of(wiring: Wiring, forms: Sequence[Kind], form_of: Indices, shape: Shape) -> Strands:
    """All links of a wiring with their own parts, in stacked numbers."""
    take, offer, own_offer = _link_table(wiring)
    first_take = np.array([shape.takes[kind.name][0] for kind in forms], dtype=np.intp)
    first_offer = np.array([shape.offers[kind.name][0] for kind in forms], dtype=np.intp)
    strength = np.array([float(link.strength) for link in wiring.links])
    own = np.array([float(link.own_strength) for link in wiring.links])
    delays: dict[Fraction, int] = {Fraction(0): 0}
    late = np.array([delays.setdefault(link.delay, len(delays)) for link in wiring.links], dtype=np.intp)
    number = np.arange(wiring.to.size)
    near = number[wiring.source >= 0]
    mine = number[own[wiring.link] != 0] if number.size else number
    both = np.concatenate([near, mine]).astype(np.intp)
    is_own = np.arange(both.size) >= near.size
    link, to = wiring.link[both], wiring.to[both]
    source = np.where(is_own, to, wiring.source[both])
    offers = np.where(is_own, own_offer[link], offer[link]) if both.size else both
    value = np.where(is_own, -own[link], strength[link]) if both.size else np.zeros(0)
    return Strands(
        to, source, first_take[form_of[to]] + take[link], first_offer[form_of[source]] + offers, value, tuple(delays),
        np.where(is_own, 0, late[link]) if both.size else both, both, len(wiring.names),
    )  # fmt: skip


def _stacked(rays: Rays, wiring: Wiring, forms: Sequence[Kind], form_of: Indices, shape: Shape) -> Rays:
    first_take = np.array([shape.takes[kind.name][0] for kind in forms], dtype=np.intp)
    first_offer = np.array([shape.offers[kind.name][0] for kind in forms], dtype=np.intp)
    return replace(
        rays, take=rays.take + first_take[form_of[rays.to]], offer=rays.offer + first_offer[form_of[rays.source]]
    )
