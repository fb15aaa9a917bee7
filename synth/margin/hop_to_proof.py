"""From a hop claim to a real proof: how much of an absolute reference it would take, and what it costs.

A unit that also knows its slot p on the road can use (1 - c) of what it sees of its predecessor and c of its slot: in
every relative signal the predecessor's part is multiplied by 1 - c and the own part kept, p_ahead - p becomes
(1 - c) p_ahead - p. The closed unit does not change, so its hop becomes (1 - c) T. With one signal per delay between
units the gain operator is (1 - c) times sums of peak gains: below 1 for every c > 0 where the peak claim holds and one
delay occurs. What it costs is gap keeping: at rest the gap opens by c times what the unit ahead is off its slot. The
proof itself is made by ``synth.proof.prove`` on the string written that way. Ours.

Set-speed feedback is not enough: where the gap is fed back, a string that is displaced as a whole stays so.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.network.gains import Gains
from synth.network.hop_wish import HopWish
from synth.network.model import Goal, Kind, Link, Network, Signal
from synth.proof import Certificate, prove
from synth.proof.hop_statement import wish_of

SHARES = (Fraction(1, 50), Fraction(1, 20), Fraction(1, 10), Fraction(1, 5), Fraction(1, 2))
SLOT = "slot"


@dataclass(frozen=True)
class Share:
    """One share ``share`` of absolute reference: whether the string then has a proof, its radius bound, its constants.

    ``gap_opens``: gap error at rest per unit of distance that the unit ahead is off its slot, exactly ``share``.
    ``beyond``: kinds whose command may then pass its limit under the declared disturbances, which voids the proof.
    """

    share: Fraction
    proven: bool
    radius: float
    G: float | None
    alpha: float | None
    beyond: tuple[str, ...] = ()

    @property
    def gap_opens(self) -> Fraction:
        """What it costs, see above."""
        return self.share


@dataclass(frozen=True)
class AbsoluteShare:
    """What was tried, smallest share first; ``least``: the smallest one proven within limits, if any.

    ``G`` of a share is in the norm of its own certificate.
    """

    tried: tuple[Share, ...]

    @property
    def least(self) -> Share | None:
        """The smallest share with a proof that no actuator's limit spoils."""
        return next((one for one in self.tried if one.proven and not one.beyond), None)

    def as_json(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "least_share": None if self.least is None else float(self.least.share),
            "tried": [
                {
                    "share": float(one.share),
                    "proven": one.proven,
                    "radius": one.radius if one.radius != float("inf") else "inf",
                    "G": one.G,
                    "alpha": one.alpha,
                    "commands_beyond_limits": list(one.beyond),
                    "gap_opens": float(one.gap_opens),
                }
                for one in self.tried
            ],
        }

    def as_text(self) -> str:
        """For a terminal."""
        if self.least is None:
            lines = [
                "From hop to proof: no share of absolute reference that was tried gives a proof with these gains "
                "and the limits of the actuators."
            ]
        else:
            lines = [
                f"From hop to proof: if every unit also knew its slot, a share of {float(self.least.share):g} of it "
                "beside the gap would make this a real proof that the whole stays calm (in the order of the cell)."
            ]
        for one in self.tried:
            said = f"proven, radius {one.radius:.4g}" if one.proven else f"not proven, radius {one.radius:.4g}"
            if one.proven and one.G is not None:
                said += f", disturbance gain {one.G:.4g}"
            if one.beyond:
                said += f", but the declared disturbances may drive {', '.join(one.beyond)} beyond the actuator's limit"
            lines.append(
                f"  share {float(one.share):g}: {said}; at rest the gap opens by {float(one.gap_opens):g} m per m that "
                "the unit ahead is off its slot"
            )
        return "\n".join(lines) + "\n"


def absolute_share(network: Network, gains: Gains, shares: tuple[Fraction, ...] = SHARES) -> AbsoluteShare:
    """Try shares of absolute reference, smallest first; InputError where it cannot be written.

    Dead times of commands and sensors are refused: the proof of calm does not know them.
    """
    wish = wish_of(network)
    if wish.dead_time or any(wish.sensing.values()):
        raise InputError("dead times of commands and sensors are outside the proof of calm.")
    tried: list[Share] = []
    for share in shares:
        other, used = with_share(network, gains, share)
        found = prove(other, used, route="peak", target=Fraction(999, 1000))
        constants = found.constants
        radius = found.radius.upper
        tried.append(
            Share(
                share,
                found.proven,
                radius,
                None if constants is None else constants.G,
                None if constants is None else constants.alpha,
                _beyond(found, network),
            )
        )
    return AbsoluteShare(tuple(tried))


def _beyond(found: Certificate, network: Network) -> tuple[str, ...]:
    limits = {(kind.name, a.name): a.limit for kind in network.kinds for a in kind.inputs}
    passed = []
    for peak in found.peaks:
        limit = limits.get((peak.kind, peak.signal)) if peak.role == "actuator" else None
        if limit is not None and peak.value > limit:
            passed.append(peak.kind)
    return tuple(dict.fromkeys(passed))


def with_share(network: Network, gains: Gains, share: Fraction) -> tuple[Network, Gains]:
    """The string in which every unit uses ``share`` of its slot (0: the same string, with slots instead of gaps).

    States: the gap becomes the slot (slot' = the hop signal); between units go, per delay, sums that enter the loop.
    """
    wish = wish_of(network)
    network.refuse_beyond_fixed_links("absolute reference")
    if not 0 <= share < 1:
        raise InputError("the share of absolute reference must lie in [0, 1).")
    written = {kind.name: _Written(kind, network, gains, wish) for kind in network.cell_kinds}
    delays = sorted({delay for one in written.values() for delay in one.heard})
    kinds, links = [], []
    for kind in network.cell_kinds:
        own = written[kind.name]
        source = next(k for k in network.links if k.kind == kind.name and not k.own_part)
        follower = {link.source_kind: written[link.kind] for link in network.links if not link.own_part}[kind.name]
        kinds.append(own.unit(follower, written, delays))
        links += [
            Link(
                f"ahead {i}",
                source.source_kind,
                f"sum {i}",
                source.at,
                kind.name,
                f"sum {i}",
                1 - share,
                delay=delay,
            )
            for i, delay in enumerate(delays)
        ]
    plain = Network(network.title, tuple(kinds), tuple(links), Goal(target=Fraction(999, 1000)), network.simulation, 1)
    return plain, gains


class _Written:
    """A kind with slot instead of gap, loop unchanged; what it hears as rows on the predecessor's offers."""

    def __init__(self, kind: Kind, network: Network, gains: Gains, wish: HopWish) -> None:
        self.kind, self.links = kind, [k for k in network.links if k.kind == kind.name and not k.own_part]
        if len(kind.inputs) != 1:
            raise InputError(f"{kind.name!r} has {len(kind.inputs)} actuators; this is worked out for exactly one.")
        self.gap = _gap_state(kind, self.links, wish)
        self.K = gains[kind.name].K
        n = len(kind.states)
        self.speed = kind.H.row(kind.index("offers", wish.signal))
        # The command reads the gap through K C; with slots that part is heard (ahead) and owned (minus).
        reads = self.K @ kind.C
        self.reads = reads
        self.weight = reads[0, self.gap]
        for j in range(n):
            if j != self.gap and kind.A[j, self.gap]:
                raise InputError(f"the gap of {kind.name!r} acts on {kind.states[j].name!r} without the controller.")
        self.heard: dict[Fraction, list[tuple[str, Fraction]]] = {Fraction(0): [(SLOT, self.weight)]}
        for link in self.links:
            take = kind.index("takes", link.take)
            for j in range(n):
                if j != self.gap and kind.D[j, take]:
                    raise InputError(f"{link.take!r} acts on {kind.name!r} without the controller.")
            value = (self.K @ kind.N)[0, take] * link.strength
            if value:
                self.heard.setdefault(link.delay, []).append((link.offer, value))

    def unit(self, follower: _Written, written: dict[str, _Written], delays: list[Fraction]) -> Kind:
        """The kind: offers for its follower, one take per delay that enters with the command."""
        kind, n = self.kind, len(self.kind.states)
        own = [[-v if j == self.gap else v for j, v in enumerate(row)] for row in kind.C.rows]
        C = ExactMatrix.of(own)
        rows = [list(row) for row in kind.A.rows]
        rows[self.gap] = list(self.speed.rows[0])
        own_parts = ExactMatrix.zeros(len(kind.sensors), n)
        for link in self.links:
            if link.relative:
                column = kind.N.column(kind.index("takes", link.take)).scaled(-link.own_strength)
                own_parts = own_parts + column @ kind.H.row(kind.index("offers", link.offer))
        offers = [follower._offered(delay, self) for delay in delays]
        signals = tuple(Signal(f"sum {i}", kind.inputs[0].unit) for i in range(len(delays)))
        count = len(delays)
        E = (
            ExactMatrix.of(
                [
                    [Fraction(0)] * len(kind.disturbances) if i == self.gap else list(r)
                    for i, r in enumerate(kind.E.rows)
                ]
            )
            if kind.disturbances
            else kind.E
        )
        return replace(
            kind,
            states=tuple(Signal(SLOT, s.unit) if i == self.gap else s for i, s in enumerate(kind.states)),
            inputs=tuple(replace(a, limit=None) for a in kind.inputs),  # whether they are kept is looked at afterwards
            takes=signals,
            offers=signals,
            A=ExactMatrix.of(rows),
            D=ExactMatrix.of([[kind.B[i, 0]] * count for i in range(n)]),
            E=E,
            C=C + own_parts,
            N=ExactMatrix.zeros(len(kind.sensors), count),
            H=ExactMatrix.of([row.rows[0] for row in offers]),
            F=ExactMatrix.zeros(count, count),
            Fw=ExactMatrix.zeros(count, len(kind.disturbances)),
            Fu=None,
            equations={},
            inner=(),
            dynamics=None,
        )

    def _offered(self, delay: Fraction, ahead: _Written) -> ExactMatrix:
        """What this unit hears with ``delay``, as a row on the states of the unit ahead of it (slot included)."""
        kind, n = ahead.kind, len(ahead.kind.states)
        row = ExactMatrix.zeros(1, n)
        for offer, value in self.heard.get(delay, []):
            if offer == SLOT:
                unit = ExactMatrix.of([[Fraction(int(j == ahead.gap)) for j in range(n)]])
                row = row + unit.scaled(value)
                continue
            seen = kind.H.row(kind.index("offers", offer))
            if seen[0, ahead.gap]:
                raise InputError(f"{offer!r} of {kind.name!r} passes on its gap, which has no slot form.")
            row = row + seen.scaled(value)
        return row


def _gap_state(kind: Kind, links: list[Link], wish: HopWish) -> int:
    """The state whose derivative is the predecessor's hop signal minus the own one, exactly."""
    hop = kind.H.row(kind.index("offers", wish.signal))
    heard = [link for link in links if link.offer == wish.signal and not link.delay]
    for i in range(len(kind.states)):
        if any(kind.B.rows[i]):
            continue
        for link in heard:
            take = kind.index("takes", link.take)
            others = [j for j in range(len(kind.takes)) if j != take and kind.D[i, j]]
            own = kind.A.row(i)
            if link.relative:
                own = own + hop.scaled(-kind.D[i, take] * link.own_strength)
            if not others and kind.D[i, take] * link.strength == 1 and own == hop.scaled(Fraction(-1)):
                return i
    raise InputError(
        f"{kind.name!r} has no state that integrates the difference between the {wish.signal} ahead and its own, so it "
        "has no gap that a slot could replace."
    )
