"""The statement of a hop claim: what is proven of a string that sees only gaps, in words weaker than a proof of calm.

It is no certificate. It has no radius and no constants, the stand-alone checker does not read it, and it says so. What
decides it is exact (Sturm sequences in rationals, one sign of an impulse response) or ball arithmetic (dead times), in
``synth.gain``; what is compared with it is a frequency response worked out anew here from the network's own matrices,
in floating point and by other code. Theory (27).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError, SolverFailure, UnstableLoop
from synth.base.files import write_text
from synth.base.progress import Listener, silent
from synth.base.provenance import canonical, sha256, versions
from synth.gain.strings.dead_time_kernel import Enclosure, peak_of_response
from synth.gain.strings.hop import MEAN_SQUARE, MEANING, NONE, NOT_ISS, PEAK, HopGains, hop_gains
from synth.local.hop_task import time_gap, with_rate
from synth.network.gains import Gains
from synth.network.hop_reading import per_second
from synth.network.hop_wish import HopWish
from synth.network.model import Kind, Network
from synth.network.rational import reduced
from synth.proof.hop_response import largest_response

ORDER = (NONE, MEAN_SQUARE, PEAK)
COVERS = (
    "Strings of any length made of the declared kinds, {order}.",
    "Whatever the leader does, as long as no actuator saturates and the vehicles start from steady driving.",
)
EXCLUDES = (
    "Pushes on the followers (slope, wind): they add up along the string and are bounded by nothing here.",
    "Drift of the whole string: units that see only gaps move together and no controller notices.",
    "Sampled firmware, rounding, lost or jittering messages; dead times and delays are taken as constant, as declared.",
    "Saturation, braking distance, separation and safety of any kind: this is not collision avoidance.",
)
RECHECKED = (
    "Decided by exact rational arithmetic and ball arithmetic of this program, and compared with a frequency response "
    "worked out separately in floating point. No stand-alone checker exists for hop statements: check.py does not read "
    "them, and this file is no certificate."
)


@dataclass(frozen=True)
class HopBound:
    """A proven bound under the declared leader: of ``what`` of a ``kind``, in ``unit``, with its ``limit`` if any."""

    kind: str
    what: str
    value: float
    unit: str
    limit: float | None = None


@dataclass(frozen=True)
class HopStatement:
    """What is proven of a string under the notion asked for.

    ``proven``: the claim asked for, and nothing more; ``time_gaps``: kind -> -T'(0) in s, exact; ``bounds``: under the
    declared leader, for every follower (peak claim only); ``reasons``: why not proven; ``look``: the largest |T| seen
    by the separate frequency response. ``hops`` is None where a closed unit is unstable by itself.
    """

    proven: bool
    notion: str
    hops: HopGains | None
    time_gaps: Mapping[str, Fraction]
    bounds: tuple[HopBound, ...]
    reasons: tuple[str, ...]
    covers: tuple[str, ...]
    look: float
    document: dict[str, Any] = field(repr=False, default_factory=dict)

    @property
    def claim(self) -> str:
        """What holds: 'peak', 'mean square' or 'none'."""
        return NONE if self.hops is None else self.hops.claim

    @property
    def sentence(self) -> str:
        """The claim in words, with what it is not."""
        if not self.proven:
            return f"Nothing is proven: the hop claim for {_of(self.notion)} was asked for and does not stand."
        return f"{MEANING[self.notion if self.claim == PEAK else self.claim]} {NOT_ISS}"

    def as_json(self) -> dict[str, Any]:
        """The keys of a proof; what a hop claim does not have (radius, constants) is null, never a number."""
        return {
            "proven": self.proven,
            "route": "hop",
            "weaker_than_calm": True,
            "claim": self.sentence,
            "notion": self.notion,
            "holds": self.claim,
            "target": None,
            "radius": {"lower": None, "upper": None},
            "constants": {"C": None, "alpha": None, "G": None, "norm": None},
            "peaks": {f"{b.kind}.{b.what}": {"value": b.value, "in": b.unit, "limit": b.limit} for b in self.bounds},
            "validity": {"X0": None, "w": None, "meaning": self._validity()},
            "time_gaps": {name: float(value) for name, value in self.time_gaps.items()},
            "hops": None if self.hops is None else self.hops.as_json(),
            "covers": list(self.covers),
            "excludes": list(EXCLUDES),
            "reasons": list(self.reasons),
            "rechecked": RECHECKED,
            "largest_response_seen": self.look,
            "certificate": None,
            "hash": self.document.get("hash"),
            "cautions": list(CAUTIONS),
        }

    def _validity(self) -> str:
        over = [b for b in self.bounds if b.limit is not None and b.value > b.limit]
        if over:
            worst = max(over, key=lambda b: b.value / (b.limit or 1.0))
            return (
                "The claim needs actuators that do not saturate; under the declared leader the command of "
                f"{worst.kind} may reach {worst.value:.4g} {worst.unit}, beyond its limit of {worst.limit:.4g}."
            )
        if any(b.what == "command" for b in self.bounds):
            return "Under the declared leader no actuator reaches its limit."
        return "As long as no actuator saturates."

    def as_text(self) -> str:
        """For a terminal."""
        lines = ["Hop statement (weaker than a proof of calm).", self.sentence]
        lines += [f"  not proven: {reason}" for reason in self.reasons]
        if self.hops is not None:
            lines += self.hops.as_text().splitlines()[2:-1]
        lines += [f"Time gap kept by a {name}: {float(value):.6g} s." for name, value in self.time_gaps.items()]
        for b in self.bounds:
            limit = "" if b.limit is None else f" (limit {b.limit:.4g})"
            lines.append(
                f"Under the declared leader, {b.what} of every {b.kind}: at most {b.value:.4g} {b.unit}{limit}."
            )
        lines.append(self._validity())
        lines += [f"Covers: {text}" for text in self.covers] + [f"Not covered: {text}" for text in EXCLUDES]
        return "\n".join([*lines, RECHECKED]) + "\n"

    def save(self, path: str | Path) -> Path:
        """Write the statement as JSON in one step; InputError if nothing was proven."""
        if not self.proven:
            raise InputError("nothing was proven, so there is no hop statement to save; see its reasons.")
        return write_text(path, json.dumps(self.document, indent=1, ensure_ascii=False, allow_nan=False) + "\n")


def _of(notion: str) -> str:
    return "peaks" if notion == PEAK else "mean squares"


def wish_of(network: Network) -> HopWish:
    """What the file asks for; InputError if it asks for no hop claim."""
    if network.goal.hop is None:
        raise InputError(
            "no hop claim is asked for; it is weaker than a proof of calm, so the file must name it: write "
            "'claim: hop' and 'hop: {notion: peak, signal: speed}' in the section design."
        )
    return network.goal.hop


def prove_hop(network: Network, design_or_gains: Any, progress: Listener = silent, width: float = 1e-6) -> HopStatement:
    """Decide the hop claim that the file asks for, for ``design_or_gains`` (u = K y).

    Raises InputError where the file asks for none or the network is no string the hop route can take, SolverFailure if
    the separate frequency response contradicts the exact decision. A claim that fails is no error: ``proven`` is False.
    """
    wish = wish_of(network)
    gains = getattr(design_or_gains, "gains", design_or_gains)
    if not isinstance(gains, Gains):
        raise InputError(f"gains or a design were expected, not {type(design_or_gains).__name__}.")
    order = "in any order" if wish.any_order else "in the order of the cell"
    covers = tuple(text.format(order=order) for text in COVERS)
    progress("deciding the hop claim")
    try:
        hops = hop_gains(network, gains, wish.gap_error, wish.dead_time, wish.sensing, wish.any_order, width)
    except UnstableLoop as error:
        return HopStatement(False, wish.notion, None, {}, (), (str(error),), covers, float("inf"))
    if hops.signal != wish.signal:
        raise InputError(
            f"design.hop.signal: the signal that comes down this string is {hops.signal!r}, not {wish.signal!r}; every "
            "other signal that is heard is derived from it."
        )
    progress("comparing with a frequency response worked out separately")
    look = largest_response(network, gains, wish)
    proven = ORDER.index(hops.claim) >= ORDER.index(wish.notion)
    if hops.claim != NONE and look > 1 + 1e-6:
        raise SolverFailure(
            f"the hop claim was decided, but a frequency response of {look:.6g} was found; report this."
        )
    gaps = {hop.kind: time_gap(hop.loop.loop) for hop in hops.hops}
    reasons = () if proven else tuple(_reasons(hops, wish))
    bounds = tuple(_bounds(network, hops, wish)) if hops.claim == PEAK else ()
    document = _document(network, gains, wish, hops) if proven else {}
    return HopStatement(proven, wish.notion, hops, gaps, bounds, reasons, covers, look, document)


def _reasons(hops: HopGains, wish: HopWish) -> list[str]:
    out = []
    for hop in hops.hops:
        if wish.notion == PEAK and hop.peak.upper > 1:
            out.append(
                f"{hop.kind} behind {hop.after}: the peak hop gain is {_shown(hop.peak)}, above 1"
                if hop.peak.lower > 1
                else f"{hop.kind} behind {hop.after}: the peak hop gain ({_shown(hop.peak)}) is not decided against 1"
            )
        elif wish.notion == MEAN_SQUARE and not (hop.mean_square_at_most_one or hop.peak.upper <= 1):
            what = "above 1" if hop.mean_square_at_most_one is False else "not decided against 1"
            out.append(
                f"{hop.kind} behind {hop.after}: the mean-square hop gain is {hop.mean_square.upper:.6g} near "
                f"{hop.mean_square.frequency:.4g} rad/s, {what}"
            )
    return out


def _shown(found: Enclosure) -> str:
    return f"{found.lower:.6g} to {found.upper:.6g}"


def _bounds(network: Network, hops: HopGains, wish: HopWish) -> list[HopBound]:
    """Bounds of every follower when the leader's rate of change stays below what the file declares."""
    a = wish.leader.acceleration
    if a is None:
        return []
    out: list[HopBound] = []
    for name in dict.fromkeys(hop.kind for hop in hops.hops):
        mine = [hop for hop in hops.hops if hop.kind == name]
        kind = network.kind(name)
        rate = per_second(hops.signal_unit)
        out.append(HopBound(name, "acceleration", up(float(a)), rate))
        if all(hop.gap_error is not None for hop in mine):
            error = max(hop.gap_error.upper for hop in mine if hop.gap_error is not None)
            unit = kind.offers[kind.index("offers", wish.gap_error)].unit if wish.gap_error else f"{hops.signal_unit}*s"
            out.append(HopBound(name, "gap error", up(error * float(a)), unit))
        jerk = max(peak_of_response(with_rate(hop.loop.loop), "rate", 1e-4).upper for hop in mine)
        limit = None if wish.jerk is None else float(wish.jerk)
        out.append(HopBound(name, "jerk", up(jerk * float(a)), per_second(rate), limit))
        command = _command(kind, wish, jerk)
        if command is not None:
            most = kind.inputs[0].limit
            out.append(
                HopBound(
                    name, "command", up(command * float(a)), kind.inputs[0].unit, None if most is None else float(most)
                )
            )
    return out


def up(value: float) -> float:
    """A little above, so that a rounded product of bounds stays a bound."""
    return value * (1 + 2.0**-48)


def _command(kind: Kind, wish: HopWish, jerk: float) -> float | None:
    """Peak of the command per unit of the leader's rate, where the hop signal's second derivative is p s' + q u.

    Then |u| <= (|s''| + |p| |s'|)/|q|, and |s'| is at most the leader's under the peak claim. None for other units.
    """
    row = kind.H.row(kind.index("offers", wish.signal))
    if len(kind.inputs) != 1 or any((row @ kind.B).rows[0]) or any((row @ kind.D).rows[0]):
        return None
    first = row @ kind.A
    q = (first @ kind.B)[0, 0]
    second = first @ kind.A
    if q == 0 or any((first @ kind.D).rows[0]):
        return None
    table, pivots = reduced([[first[0, i], second[0, i]] for i in range(first.shape[1])], 2)
    if pivots != [0]:
        return None
    return float((Fraction(jerk) + abs(table[0][1])) / abs(q))


def _document(network: Network, gains: Gains, wish: HopWish, hops: HopGains) -> dict[str, Any]:
    """The file: everything the statement is about, exact, and its hash."""
    document: dict[str, Any] = {
        "schema": "localgain hop statement",
        "version": 1,
        "is_not": "a certificate, a proof that the whole stays calm, or collision avoidance",
        "network_hash": network.hash,
        "model": network.model_document(),
        "asked": wish.document(),
        "gains": [
            {
                "kind": name,
                "actuators": list(found.actuators),
                "signals": list(found.signals),
                "K": [[str(value) for value in row] for row in found.K.rows],
            }
            for name, found in gains.items()
        ],
        "found": hops.as_json(),
        "excludes": list(EXCLUDES),
        "rechecked": RECHECKED,
        "versions": dict(sorted(versions().items())),
    }
    return {**document, "hash": sha256(canonical(document))}
