"""May a unit join, or be changed, while everybody else keeps the gains in service? A local test with exact rows.

In service, every outlet i has a promised size s_i with G(s)_i <= target s_i (a certificate's point, or the point of the
radius). The network after joining has the same outlets and those of the new unit. If sizes of the new outlets can be
found so that all rows that changed - the new unit's own, those of units that listen to it, those whose links changed -
stay within target, then G(s) <= target s holds for the whole network after joining, so its radius is at most target
(theory (10)); no other row needs to be looked at. The sizes that ask least of the neighbours are a least fixed point,
and the smallest factor mu at which the changed rows hold gives the slack 1 - mu/target. The last word is exact.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.errors import InputError, SynthError, UnstableLoop, WidthNotReached
from synth.base.progress import Listener, silent
from synth.gain.assembly import Assembly, assemble
from synth.gain.solving.exact_rows import exact_quotient
from synth.local.admit_rows import arrivals, best_sizes, hears
from synth.local.admit_search import local_gains
from synth.local.guarantee import guarantee
from synth.network.gains import Gains, GainSet
from synth.network.model import Kind, Link, Network, need_fixed_pattern

Array = NDArray[np.float64]

_TRIES = 3  # searches with less and less of the actuator limits


@dataclass(frozen=True)
class Admission:
    """The answer: ``admitted``, the ``slack`` left, and one sentence per reason against it.

    ``slack`` is 1 - mu/target, mu the largest quotient G(s)_i / s_i of the changed rows at the best sizes of the new
    outlets, rounded up; negative where the unit asks too much, -inf where no sizes work. ``unit`` names the kind that
    joins or changes ('' where all kinds are in service and only links or units are new); ``gains`` its gains, in
    service or found; ``rows`` the outlets whose rows were checked; ``sizes`` promised sizes of all outlets afterwards.
    """

    admitted: bool
    slack: float
    reasons: tuple[str, ...]
    unit: str
    gains: GainSet | None
    in_service: bool
    target: float
    rows: tuple[str, ...]
    sizes: Mapping[str, float]
    network: Network = field(repr=False)

    def as_json(self) -> dict[str, object]:
        """Plain data with the contract keys ``admitted, slack, reasons`` and more."""
        return {
            "admitted": self.admitted,
            "slack": self.slack if np.isfinite(self.slack) else "-inf",
            "reasons": list(self.reasons),
            "unit": self.unit,
            "gains": {} if self.gains is None else {self.unit: self.gains.as_dict()},
            "gains_in_service": self.in_service,
            "target": self.target,
            "rows": list(self.rows),
            "sizes": dict(self.sizes),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """The verdict, the gains and the cautions."""
        word = "Admitted" if self.admitted else "Not admitted"
        lines = [
            self.network.title,
            "",
            f"{word}: slack {self.slack:.4g} of the target {self.target:g} in the changed rows.",
        ]
        lines += [f"  {reason}" for reason in self.reasons]
        if self.gains is not None:
            whose = "in service" if self.in_service else "found for it"
            lines += ["", f"Gains of {self.unit} ({whose}), u = K y"]
            for actuator, row in zip(self.gains.actuators, self.gains.K.rows, strict=True):
                shown = ", ".join(f"{s} {float(v):.6g}" for s, v in zip(self.gains.signals, row, strict=True))
                lines.append(f"  {actuator}: {shown}")
        lines += ["", f"Rows checked: {', '.join(self.rows[:12])}{' and more' if len(self.rows) > 12 else ''}."]
        lines.append(
            "Limits and bands were looked at from rest, in patterns of fixed links only; prove the network again "
            "before commissioning."
        )
        return "\n".join([*lines, "", cautions_text()])


def admit(
    network: Network,
    gains: Gains,
    joining: Network,
    promised: Mapping[str, Fraction] | None = None,
    target: float | Fraction | None = None,
    candidate: GainSet | None = None,
    seed: int = 0,
    progress: Listener = silent,
) -> Admission:
    """Test whether ``joining``, the network as it will be, may run with everybody else's gains as they are.

    ``network`` and ``gains``: in service. ``joining``: the same description with one kind new or changed, or with more
    units or links of kinds in service. ``promised``: sizes by outlet, 'kind.offer' (pattern, rules) or 'unit.offer'
    (members), such as a certificate's point; absent: the point of the radius in service. ``target`` as for ``design``.
    ``candidate``: gains of the new kind; absent: those in service under its name if they pass, otherwise searched for
    (``seed``).

    Raises InputError where the two networks do not fit together, or a size is missing.
    """
    aim = Fraction(network.goal.target if target is None else target)
    if not 0 < aim < 1:
        raise InputError(f"target must lie between 0 and 1, not {float(aim):g}.")
    kind = _newcomer(network, joining)
    progress("sizes promised in service")
    base = assemble(network, gains)
    s = _promised(base, promised)
    worst = base.upper.upper_bound(s)
    known = {name: float(v) for name, v in zip(map(".".join, base.outlets), s, strict=True)}
    problem = _Joining(network, gains, joining, kind, known, aim)
    if worst > aim:
        return problem.refused(
            f"the network in service does not keep the target: {worst:.6g} at these sizes, against {float(aim):g}"
        )
    options: list[tuple[GainSet | None, bool]] = []
    if kind is None:
        options.append((None, True))
    elif mates := [name for name in joining.gain_groups()[kind.group] if name != kind.name and name in gains]:
        # The newcomer carries the gains of its group, which are in service.
        shared = gains[mates[0]]
        if not _fits(shared, kind):
            raise InputError(f"{kind.name} is to carry the gains of {mates[0]}, but has other actuators or sensors.")
        candidate = replace(shared, kind=kind.name)
        options.append((candidate, True))
    elif candidate is not None:
        options.append((candidate, False))
    elif kind.name in gains and _fits(gains[kind.name], kind):
        options.append((gains[kind.name], True))
    answers = [problem.test(chosen, served) for chosen, served in options]
    answers = [_with_limits(problem, a)[0] if a.admitted else a for a in answers]
    if kind is not None and candidate is None and not any(a.admitted for a in answers):
        progress(f"searching gains of {kind.name}")
        found = _searched(problem, kind, seed, progress)
        answers += [found] if isinstance(found, Admission) else []
        if not answers:
            assert isinstance(found, str)
            return problem.refused(found)
    return max(answers, key=lambda a: (a.admitted, a.slack))


def _with_limits(problem: _Joining, found: Admission) -> tuple[Admission, float]:
    """The same answer, refused where a limit that holds in service breaks after joining (patterns of fixed links).

    Also the largest part of its limits that an actuator of the newcomer reaches (0 where that was not worked out).
    """
    try:
        need_fixed_pattern(problem.joining, "peaks")
    except InputError:
        return found, 0.0  # peaks of other descriptions are not worked out here; the text says so
    before = {(b.cause, b.kind, b.name) for b in guarantee(problem.network, problem.gains).broken}
    after = guarantee(problem.joining, problem.all_gains(found.gains))
    new = tuple(b.sentence for b in after.broken if (b.cause, b.kind, b.name) not in before)
    parts = [p.value / float(p.limit) for p in after.peaks if p.kind == found.unit and p.role == "actuator" and p.limit]
    return replace(found, admitted=not new, reasons=new), max(parts, default=0.0)


def _searched(problem: _Joining, kind: Kind, seed: int, progress: Listener) -> Admission | str:
    """The test with searched gains, or why there are none."""
    if not kind.inputs:
        return _with_limits(problem, problem.test(problem.no_gains(kind), False))[0]
    answer: Admission | None = None
    try:
        arriving, room = problem.surroundings()
        own, share = problem.own_links(), Fraction(1)
        for _ in range(_TRIES):
            chosen = local_gains(problem.joining, kind, own, arriving, room, share, problem.aim, seed, progress)
            answer = problem.test(chosen, False)
            if not answer.admitted:
                break
            answer, part = _with_limits(problem, answer)
            if answer.admitted or part < 1:
                break
            # What disturbs the neighbours is not in the stand-in; leave its actuators as much room as was missing.
            share *= Fraction(f"{0.97 / part:.4g}")
    except InputError:
        raise
    except SynthError as error:
        if answer is None:
            return f"no gains of {kind.name} were found: {error}"
    assert answer is not None
    return answer


def _newcomer(network: Network, joining: Network) -> Kind | None:
    """The one kind that is new or changed; InputError where the networks do not fit together."""
    for given, name in ((network, "the network in service"), (joining, "the network to join")):
        if not isinstance(given, Network):
            raise InputError(
                f"{name} must be a network, not {type(given).__name__}; read a problem file: synth.read(path)."
            )
        given.refuse_beyond("admitting a unit", "pattern", "rules", "members")
    if network.description != joining.description:
        raise InputError("both networks must be given alike: by a pattern, by rules or by members.")
    old = {kind.name: kind for kind in network.kinds}
    changed = [kind for kind in joining.kinds if old.get(kind.name) != kind]
    if len(changed) > 1:
        raise InputError(
            f"{', '.join(k.name for k in changed)} are new or changed; admit one kind at a time, others as they are."
        )
    before = set(old) if network.members is None else set(network.members.names)
    after = {k.name for k in joining.kinds} if joining.members is None else set(joining.members.names)
    if before - after:
        raise InputError(
            f"{sorted(before - after)[0]} is missing from the network to join; all that is in service must be there."
        )
    return changed[0] if changed else None


def _promised(base: Assembly, promised: Mapping[str, Fraction] | None) -> Array:
    names = [".".join(outlet) for outlet in base.outlets]
    if promised is None:
        found = base.radius()
        exponent = getattr(found, "exponent", None)
        return np.asarray(found.point if exponent is None else np.ldexp(found.point, exponent), dtype=np.float64)
    missing = [name for name in names if name not in promised]
    if missing:
        raise InputError(f"no size is promised for {missing[0]}; sizes are needed for {', '.join(names[:6])}.")
    s = np.array([float(promised[name]) for name in names])
    if not np.all(np.isfinite(s) & (s > 0)):
        raise InputError("promised sizes must be above zero and finite.")
    return s


def _fits(chosen: GainSet, kind: Kind) -> bool:
    same = tuple(a.name for a in kind.inputs), tuple(s.name for s in kind.sensors)
    return (chosen.actuators, chosen.signals) == same


class _Joining:
    """The network after joining, what was promised, and the rows that changed."""

    def __init__(
        self,
        network: Network,
        gains: Gains,
        joining: Network,
        kind: Kind | None,
        known: Mapping[str, float],
        aim: Fraction,
    ) -> None:
        """Remember the parts; ``changed`` names the units whose rows must be looked at."""
        self.network, self.gains, self.joining, self.kind, self.known, self.aim = (
            network,
            gains,
            joining,
            kind,
            known,
            aim,
        )
        before, after = arrivals(network), arrivals(joining)
        new = {u for u in after if u not in before} | ({kind.name} if kind and joining.members is None else set())
        if kind and joining.members is not None:
            number = [k.name for k in joining.kinds].index(kind.name)
            new |= {u for u, k in zip(joining.members.names, joining.members.kind.tolist(), strict=True) if k == number}
        self.new = new
        self.changed = {u for u, links in after.items() if u in new or before.get(u) != links or hears(links, new)}

    def refused(self, reason: str) -> Admission:
        """A no without any sizes."""
        name = "" if self.kind is None else self.kind.name
        return Admission(
            False, -np.inf, (reason,), name, None, False, float(self.aim), (), self.known, self.joining
        )  # fmt: skip

    def no_gains(self, kind: Kind) -> GainSet:
        """The empty gain set of a kind that has no actuator."""
        from synth.base.exact import ExactMatrix
        from synth.network.gains import gain_set

        return gain_set(kind, ExactMatrix.zeros(0, len(kind.sensors)))

    def all_gains(self, chosen: GainSet | None) -> Gains:
        """Everybody's gains in service, and ``chosen`` for the newcomer."""
        sets = []
        for kind in self.joining.kinds:
            if self.kind is not None and kind.name == self.kind.name and chosen is not None:
                sets.append(chosen)
            else:
                sets.append(self.gains[kind.name])
        return Gains(tuple(sets))

    def test(self, chosen: GainSet | None, served: bool) -> Admission:
        """Sizes for the new outlets by the smallest factor, then the changed rows in exact arithmetic."""
        name = "" if self.kind is None else self.kind.name

        def answer(slack: float, reasons: list[str], rows: tuple[str, ...], sizes: Mapping[str, float]) -> Admission:
            return Admission(
                not reasons, slack, tuple(reasons), name, chosen, served, float(self.aim), rows, sizes, self.joining
            )

        if chosen is not None and self.kind is not None:
            broken = _outside_bounds(self.joining, self.kind, chosen)
            if broken:
                return answer(-np.inf, broken, (), self.known)
        try:
            whole = assemble(self.joining, self.all_gains(chosen))
        except (UnstableLoop, WidthNotReached) as error:
            return answer(-np.inf, [f"{error}".rstrip(".")], (), self.known)
        names = [".".join(outlet) for outlet in whole.outlets]
        rows = [i for i, outlet in enumerate(whole.outlets) if outlet[0] in self.changed]
        fresh = np.array([i for i, outlet in enumerate(whole.outlets) if outlet[0] in self.new], dtype=np.intp)
        s = np.array([self.known.get(n, 0.0) for n in names])
        s[fresh] = 0.0
        found = best_sizes(whole, s, fresh, np.array(rows, dtype=np.intp), float(self.aim))
        if found is None:
            return answer(
                -np.inf, [f"no sizes of {name or 'new outlets'} satisfy its own rows, whatever the neighbours allow"],
                tuple(names[i] for i in rows), self.known,
            )  # fmt: skip
        quotients = {i: exact_quotient(whole.upper, i, found, None)[1] for i in rows}
        worst = max(quotients.values(), default=0.0)
        reasons = [
            f"{names[i]} would be {q / float(self.aim):.4g} times what was promised for it"
            for i, q in sorted(quotients.items(), key=lambda pair: -pair[1])
            if q > self.aim
        ]
        sizes = {n: float(v) for n, v in zip(names, found, strict=True)}
        return answer(1 - worst / float(self.aim), reasons, tuple(names[i] for i in rows), sizes)

    def own_links(self) -> list[Link]:
        """The links that enter the first unit of the new kind: their own parts are folded into its dynamics."""
        for unit, links in arrivals(self.joining).items():
            if unit in self.new:
                return [link for (_, link) in links.elements()]
        return []

    def surroundings(self) -> tuple[dict[str, float], dict[str, float]]:
        """What arrives at each take of the new kind at promised sizes, and the room listeners leave each offer.

        Estimates for the search only: the largest arrival over the units of the kind; the smallest room over listeners,
        with the peak gains that the listeners have in the network after joining.
        """
        open_kind = self.kind
        assert open_kind is not None
        arriving = {take.name: 0.0 for take in open_kind.takes}
        for unit, links in arrivals(self.joining).items():
            if unit in self.new:
                found = dict.fromkeys(arriving, 0.0)
                for (source, link), count in links.items():
                    if source not in self.new:
                        found[link.take] += count * abs(float(link.strength)) * self.known[f"{source}.{link.offer}"]
                arriving = {take: max(v, found[take]) for take, v in arriving.items()}
        return arriving, self._room(open_kind)

    def _room(self, kind: Kind) -> dict[str, float]:
        """The largest size of each offer with which every listener's row still holds, its offers taken alike."""
        room = {offer.name: np.inf for offer in kind.offers}
        listeners = {
            u: links for u, links in arrivals(self.joining).items() if u not in self.new and hears(links, self.new)
        }
        if not listeners:
            return dict.fromkeys(room, 1.0)
        kinds = {k.name: k for k in self.joining.kinds}
        for unit, links in listeners.items():
            listener = kinds[self._kind_of(unit)]
            p = _listener_peaks(listener, [link for (_, link) in links.elements()], self.gains)
            for o, offer in enumerate(listener.offers):
                left, heard = float(self.aim) * self.known[f"{unit}.{offer.name}"], 0.0
                for (source, link), count in links.items():
                    weight = count * p[o, listener.index("takes", link.take)] * abs(float(link.strength))
                    if source in self.new:
                        heard += weight
                    else:
                        left -= weight * self.known[f"{source}.{link.offer}"]
                if heard > 0:
                    most = max(left, 1e-6 * float(self.aim) * self.known[f"{unit}.{offer.name}"]) / heard
                    room = {name: min(v, most) for name, v in room.items()}
        return {name: v if np.isfinite(v) else 1.0 for name, v in room.items()}

    def _kind_of(self, unit: str) -> str:
        members = self.joining.members
        if members is None:
            return unit
        return self.joining.kinds[int(members.kind[members.names.index(unit)])].name


def _listener_peaks(kind: Kind, links: list[Link], gains: Gains) -> Array:
    from synth.gain.closed import close_unit
    from synth.gain.unit import unit_engine

    unit = close_unit(kind, tuple(links), gains[kind.name].K)
    return np.asarray(unit_engine(unit, unit.H.rows, Fraction(0), 1e-3).gains(unit.D, unit.F).upper)


def _outside_bounds(network: Network, kind: Kind, chosen: GainSet) -> list[str]:
    """Bounds of the goal on entries of K that the gains do not keep, exactly."""
    found = []
    for actuator, entries in network.goal.gain_bounds.get(kind.name, {}).items():
        for sensor, bound in entries.items():
            if abs(chosen.K[kind.index("inputs", actuator), kind.index("sensors", sensor)]) > bound:
                found.append(f"the gain from {sensor} to {actuator} of {kind.name} exceeds its bound {float(bound):g}")
    return found
