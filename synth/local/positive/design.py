"""Gains of positive networks: the smallest radius among all gains that keep every unit positive (theory (17)).

A positive unit's peak gains are its static gains H (-A_c)^{-1} D, so the design is linear: the columns of K are chosen
one by one where only gains are bounded (``positive_policy``), and one sparse linear program over the whole network
weighs them where actuator limits or bands bind (``positive_lp``). What either returns is made exact, inside every
bound, and judged again with guaranteed enclosures (``positive_check``, ``positive_judge``): the certificate of the
radius is a point s with M s <= upper s, M from enclosed static gains, and that of the sizes one vector xi.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.errors import InputError, SolverFailure
from synth.base.progress import Listener, silent
from synth.base.provenance import Provenance
from synth.local.positive.check import Kappa, closed_floats, exact_kappa, gain_matrix, network_matrix
from synth.local.positive.judge import Cells, Judged, judge
from synth.local.positive.policy import best_columns, ends, small_program
from synth.local.positive.program import EPS, limited, solve_program
from synth.local.positive.sizes import least_sizes, separable
from synth.local.positive.web import Array, Group, Index, Web, positivity, web_of
from synth.network.gains import Gains, GainSet, gain_set
from synth.network.model import Network

_ROUNDS = 40  # rounds of weighting several offers of one unit against each other
_HALVINGS = 12


@dataclass(frozen=True, eq=False)
class PositiveDesign:
    """Gains that keep every closed unit positive, with what is guaranteed about them.

    ``sets`` distinct gain sets, ``set_of`` the number of each unit's set (units in network order; in a pattern one unit
    per kind), ``gains`` the same per kind, or None where units of one kind have different gains. ``lower``, ``upper``
    guaranteed ends of the radius; ``point`` (outlets,) with M point <= upper * point; ``sizes`` (states of all units,
    in declared units) within which every state stays from rest under the declared disturbances (inf where the radius
    is not below one). ``broken`` one sentence per limit that does not hold; ``reached``: upper <= target and none is
    broken. ``method``: "columns" or "linear program".
    """

    gains: Gains | None
    sets: tuple[GainSet, ...]
    set_of: NDArray[np.intp]
    target: float
    lower: float
    upper: float
    point: Array
    sizes: Array
    broken: tuple[str, ...]
    reached: bool
    method: str
    provenance: Provenance
    network: Network = field(repr=False)

    def of(self, unit: str | int) -> GainSet:
        """The gain set of a unit: its id (members), its kind (pattern) or its number; InputError if there is none."""
        members = self.network.members
        names = [kind.name for kind in self.network.kinds] if members is None else members.names
        if isinstance(unit, str):
            if unit not in names:
                raise InputError(f"there is no unit {unit[:40]!r}; known are {', '.join(names[:5])} and so on.")
            unit = names.index(unit)
        if not 0 <= unit < len(names):
            raise InputError(f"there is no unit number {unit}; units are numbered 0 to {len(names) - 1}.")
        return self.sets[int(self.set_of[unit])]

    def as_json(self) -> dict[str, object]:
        """Plain data: gains per kind, or per unit where they differ, radius, target, reached, broken limits."""
        members = self.network.members
        names = [s.kind for s in self.sets] if members is None else list(members.names)
        per = self.gains.items() if self.gains is not None else ((n, self.of(i)) for i, n in enumerate(names))
        return {
            "gains": {name: chosen.as_dict() for name, chosen in per},
            "target": self.target,
            "radius": {"lower": _plain(self.lower), "upper": _plain(self.upper)},
            "reached": self.reached,
            "broken": list(self.broken),
            "method": self.method,
            "provenance": self.provenance.as_dict(),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """A short account with the distinct gains (the first twenty) and the cautions."""
        lines = [
            self.network.title, "",
            f"Spectral radius between {self.lower:.9g} and {self.upper:.9g} (target {self.target:g}).",
            f"Method: {self.method}.",
            "All closed units are positive: no state is pushed up by less than nothing.",
            *(f"  not kept: {sentence}" for sentence in self.broken), "",
            f"Gains, u = K y ({len(self.sets)} different sets)",
        ]  # fmt: skip
        for chosen in self.sets[:20]:
            for actuator, row in zip(chosen.actuators, chosen.K.rows, strict=True):
                shown = ", ".join(f"{s} {float(v):.6g}" for s, v in zip(chosen.signals, row, strict=True))
                lines.append(f"  {chosen.kind}.{actuator}: {shown}")
        return "\n".join([*lines, "", cautions_text()])


def positive_design(
    network: Network,
    target: float | Fraction | None = None,
    kmax: float | Fraction | None = None,
    smallest: bool = True,
    progress: Listener = silent,
) -> PositiveDesign:
    """The smallest radius among gains within their bounds that keep every closed unit positive.

    ``network``: a pattern or members. ``kmax`` bounds every |gain| that the goal does not bound, in that gain's own
    declared unit; each gain that can act needs a bound, because without one the radius falls for ever. ``target`` as
    for ``design``. Gains that read a link's value are zero. Actuator limits and bands of the kinds are kept; where they
    bind, ``smallest=False`` takes gains for ``target`` from one linear program instead of halving towards the smallest
    radius (relative width 1e-3). The goal's bounds on modes are judged and reported, not steered by.

    Raises InputError with the reasons where the network is not positive or a bound is missing, SolverFailure where a
    unit has no stabilising gains that keep it positive. Theory (17); the choice column by column is ours.
    """
    aim = float(network.goal.target if target is None and isinstance(network, Network) else target or 0)
    web = web_of(network, kmax)
    if not 0 < aim < 1:
        raise InputError(f"target must lie between 0 and 1, not {aim:g}.")
    _refuse_unbounded(web)
    progress(f"choosing columns for {len(web.groups)} different units")
    cells, judged = _by_columns(web, progress)
    method = "columns"
    if judged.broken and limited(network) and judged.upper < 1:
        progress("limits bind: linear program over the whole network")
        found = _by_program(web, cells, judged, aim, smallest, progress)
        if found is not None:
            (cells, judged), method = found, "linear program"
    return _result(web, cells, judged, aim, method, kmax)


def _refuse_unbounded(web: Web) -> None:
    for kind, entries in zip(web.network.kinds, web.entries, strict=True):
        for e in entries:
            if e.bound is None and any(kind.B[r, e.actuator] for r in range(len(kind.states))):
                raise InputError(
                    f"the gain of {kind.name} from {kind.sensors[e.sensor].name} to {kind.inputs[e.actuator].name} has "
                    "no bound, and the radius falls for ever as it grows; give it one under design.gain_bounds, or "
                    "kmax."
                )


def _by_columns(web: Web, progress: Listener) -> tuple[Cells, Judged]:
    """Column by column; where a unit has several offers that others hear, weighted by the left Perron vector."""
    heard: list[set[int]] = [set() for _ in web.network.kinds]
    for kind, offer in np.unique(np.stack([web.kind_of[web.terms[:, 2]], web.terms[:, 3]], axis=1), axis=0).tolist():
        heard[kind].add(offer)
    several = any(len(offers) > 1 for offers in heard)
    weights = np.ones(int(web.offers_at[-1]))
    for k, offers in enumerate(heard):
        for o in set(range(len(web.network.kinds[k].offers))) - offers if offers else ():
            weights[web.offers_at[web.units_of(k)] + o] = 0.0
    owner = np.arange(len(web.group)) if several else web.group
    groups = [web.groups[g] for g in web.group] if several else list(web.groups)
    best: tuple[Cells, Judged] | None = None
    for _ in range(_ROUNDS if several else 1):
        cells = Cells(owner, groups, _columns(web, groups, weights if several else None, heard))
        judged = judge(web, cells)
        progress(f"radius {judged.upper:.6g}")
        if best is not None and judged.upper >= best[1].upper * (1 - 1e-12):
            break
        best = cells, judged
        if several and judged.upper_operator is not None:
            weights = _left(judged.upper_operator.to, judged.upper_operator.source, judged.upper_operator.gain, weights)
    assert best is not None
    return best


def _left(to: Index, source: Index, gain: Array, start: Array) -> Array:
    """An approximate left Perron vector by shifted power steps; it only weighs offers against each other."""
    from scipy.sparse import csr_array

    matrix = csr_array((gain, (source, to)), shape=(len(start), len(start)))
    left: Array = start / max(float(start.max(initial=0.0)), 1e-300)
    for _ in range(3000):
        pushed = np.asarray(matrix @ left, dtype=np.float64)
        most = float(pushed.max(initial=0.0))
        if most == 0:
            return start
        after = pushed / most * 0.7 + left * 0.3
        if float(np.abs(after - left).max()) < 1e-11:
            break
        left = after
    return np.asarray(left)


def _columns(web: Web, groups: list[Group], weights: Array | None, heard: list[set[int]]) -> list[Kappa]:
    """Exact kappa of every cell; SolverFailure where a unit cannot be both positive and stable."""
    found: list[Kappa | None] = [None] * len(groups)
    for k, (kind, entries) in enumerate(zip(web.network.kinds, web.entries, strict=True)):
        mine = [c for c, group in enumerate(groups) if group.kind == k]
        if not mine:
            continue
        n, m = len(kind.states), len(kind.inputs)
        H = np.abs(kind.H.floats())
        if weights is None:
            used = sorted(heard[k]) or list(range(len(kind.offers)))
            h = np.tile(H[used].sum(axis=0) if used else np.ones(n), (len(mine), 1))
        else:
            w = weights[web.offers_at[np.array(mine)][:, None] + np.arange(len(kind.offers))]
            h = w @ H / np.maximum(w.max(axis=1, keepdims=True, initial=0.0), 1e-300)
        A = np.array([[[float(v) for v in row] for row in groups[c].A] for c in mine]).reshape(len(mine), n, n)
        B = kind.B.floats()
        acting = {e.actuator for e in entries}
        kappa = np.zeros((len(mine), m, n))
        if len(acting) <= 1:
            u = next(iter(acting), 0)
            reach = np.zeros(n)
            for e in entries:
                reach[e.state] += float((e.bound or 0) * abs(e.factor))
            b = B[:, u] if acting else np.zeros(n)
            chosen, good = best_columns(A, b, *ends(A, b, reach), h)
            if acting:
                kappa[:, u] = chosen
        else:
            each = [small_program(A[i], B, entries, h[i]) for i in range(len(mine))]
            good = np.array([one is not None for one in each])
            kappa[good] = np.array([one for one in each if one is not None]).reshape(-1, m, n)
        if not good.all():
            raise SolverFailure(
                f"a unit of {kind.name} has no gains within their bounds that make it stable and positive at once; "
                "widen the bounds, or use the general design: synth design."
            )
        for i, c in enumerate(mine):
            found[c] = _exact(web, groups[c], kappa[i])
    return [kappa for kappa in found if kappa is not None]


def _exact(web: Web, group: Group, kappa: Array) -> Kappa:
    """The exact, positive gains nearest to what a solver returned."""
    found = exact_kappa(web.network.kinds[group.kind], group, web.entries[group.kind], kappa)
    if found is None:
        raise SolverFailure(
            f"gains of {web.network.kinds[group.kind].name} could not be rounded so that the unit stays positive."
        )
    return found


def _by_program(
    web: Web, cells: Cells, judged: Judged, aim: float, smallest: bool, progress: Listener
) -> tuple[Cells, Judged] | None:
    """Gains from the linear program that keep the limits: for ``aim``, or halving down from one."""
    units = [web.units_of(k) for k in range(len(web.network.kinds))]
    opened = [web.open_floats(k) for k in range(len(units))]
    fast = separable(web)
    reference, forced = _reference(web, cells, units)

    def attempt(weaker: float) -> tuple[Cells, Judged] | None:
        if fast:
            solved = least_sizes(web, opened, units, forced, weaker)
        else:
            solved = solve_program(web, opened, units, reference, weaker)
        if solved is None:
            progress(f"no gains keep the limits at radius {weaker:.4g}")
            return None
        kappas: list[Kappa] = [()] * len(web.group)
        for mine, kappa in zip(units, solved.kappa, strict=True):
            for i, one in zip(mine.tolist(), kappa, strict=True):
                kappas[i] = _exact(web, web.groups[web.group[i]], one)
        chosen = Cells(np.arange(len(web.group)), [web.groups[g] for g in web.group], kappas)
        found = judge(web, chosen)
        progress(f"limits kept at radius {found.upper:.6g}" if not found.broken else found.broken[0])
        return chosen, found

    best = attempt(aim if not smallest else 1 - 1e-6)
    if best is None or not smallest:
        return best
    low, high = judged.lower, best[1].upper
    for _ in range(_HALVINGS):
        if high - low <= 1e-3 * high:
            break
        middle = (low + high) / 2
        trial = attempt(middle)
        if trial is None or trial[1].broken:
            low = middle
        else:
            best, high = trial, min(middle, trial[1].upper)
    return best


def _reference(web: Web, cells: Cells, units: list[Index]) -> tuple[Array, Array]:
    """Sizes of all states with the gains at hand, the measure in which the program counts; and |E| w, a trace more."""
    from scipy.sparse.linalg import spsolve

    place = {c: i for k in range(len(units)) for i, c in enumerate(cells.of_kind(k))}
    closed = []
    for k, (kind, mine) in enumerate(zip(web.network.kinds, units, strict=True)):
        numbers = cells.of_kind(k)
        A = closed_floats(kind, [cells.groups[c] for c in numbers], [cells.kappas[c] for c in numbers])
        closed.append(A[[place[c] for c in cells.owner[mine].tolist()]])
    matrix, forced = network_matrix(web, closed, units, 1.0)
    floor = max(float(forced.max(initial=0.0)), 1e-12) * 1e-6
    reference = np.maximum(np.abs(spsolve(matrix.tocsc(), -(forced + floor))), 1e-300)
    diagonal = abs(matrix).max(axis=1).toarray().ravel()
    return reference, forced + EPS * diagonal * reference


def _result(web: Web, cells: Cells, judged: Judged, aim: float, method: str, kmax: object) -> PositiveDesign:
    """Distinct gain sets, and the same per kind where one per kind is enough."""
    network, known = web.network, {}
    sets: list[GainSet] = []
    place = np.empty(len(cells.groups), dtype=np.intp)
    for c, (group, kappa) in enumerate(zip(cells.groups, cells.kappas, strict=True)):
        key = (group.kind, kappa)
        if key not in known:
            known[key] = len(sets)
            kind = network.kinds[group.kind]
            sets.append(gain_set(kind, gain_matrix(kind, web.entries[group.kind], kappa)))
        place[c] = known[key]
    names = [s.kind for s in sets]
    whole = sorted(names) == sorted(kind.name for kind in network.kinds)
    gains = Gains(tuple(sets[names.index(kind.name)] for kind in network.kinds)) if whole else None
    return PositiveDesign(
        gains=gains, sets=tuple(sets), set_of=place[cells.owner], target=aim, lower=judged.lower, upper=judged.upper,
        point=judged.point, sizes=judged.sizes, broken=judged.broken,
        reached=not judged.broken and judged.upper <= aim, method=method,
        provenance=Provenance(network.hash, {"target": aim, "kmax": None if kmax is None else str(kmax)}),
        network=network,
    )  # fmt: skip


def _plain(value: float) -> float | str:
    return value if np.isfinite(value) else "inf"


__all__ = ["PositiveDesign", "positive_design", "positivity"]
