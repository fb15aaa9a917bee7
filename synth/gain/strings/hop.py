"""Hop gains of a one-way string whose units see only gaps: what can still be said where no proof of calm exists.

Such a string has a motion of all units together that no controller sees, so its radius is at least one and no
exponential claim holds (theory (26)). For signals that come down the string from the leader, one hop multiplies them by
the transfer T from the predecessor's signal to the unit's own (theory (27)):

* the peak hop gain |T|_1 is 1 exactly where T(0) = 1 and the impulse response has one sign; then no peak caused by the
  leader grows, however long the string;
* the mean-square hop gain sup_w |T(jw)| at most 1 says the same of root mean squares only: peaks may still grow;
* the gap error of the first follower is at most |T_e/s|_1 times the peak of the leader's rate of change, and of every
  later one too if the peak hop gain is at most 1;
* disturbances that act on every unit add up along the string and grow with its length (``hop_length``).

This is a weaker claim than input-to-state stability and is never called that.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix, Number, exact
from synth.gain.peak import check_width
from synth.gain.strings.dead_time import DelayLoop
from synth.gain.strings.dead_time_kernel import Enclosure, KernelSign, kernel_sign, peak_of_response
from synth.gain.strings.dead_time_roots import require_stable
from synth.gain.strings.hop_network import HopLoop, hop_loops
from synth.gain.strings.mean_square import MeanSquareGain
from synth.gain.strings.mean_square_loop import fraction_mean_square, level_holds
from synth.network.gains import Gains
from synth.network.model import Network

PEAK, MEAN_SQUARE, NONE = "peak", "mean square", "none"


@dataclass(frozen=True)
class Hop:
    """One hop: follower ``kind`` behind ``after`` (a kind, or "any kind").

    ``steady``: T(0), exact. ``peak``: |T|_1. ``mean_square``: sup_w |T(jw)|. ``mean_square_at_most_one``: proven
    (True), refuted (False) or undecided (None). ``one_sign``: of the impulse response. ``gap_error``: |T_e/s|_1, gap
    error per peak of the predecessor's rate of change (None: no gap error named, or it does not vanish at rest).
    ``disturbances``: |R|_1 by name, hop signal per unit of disturbance.
    """

    kind: str
    after: str
    steady: Fraction
    peak: Enclosure
    mean_square: MeanSquareGain
    mean_square_at_most_one: bool | None
    one_sign: KernelSign
    gap_error: Enclosure | None
    disturbances: Mapping[str, Enclosure]
    loop: HopLoop = field(repr=False)

    @property
    def claim(self) -> str:
        """The strongest of 'peak', 'mean square' and 'none' that is proven for this hop."""
        if self.peak.upper <= 1:
            return PEAK
        return MEAN_SQUARE if self.mean_square_at_most_one else NONE

    def as_json(self) -> dict[str, object]:
        """Plain data."""
        return {
            "kind": self.kind,
            "after": self.after,
            "claim": self.claim,
            "steady": float(self.steady),
            "peak": [self.peak.lower, self.peak.upper],
            "mean_square": [self.mean_square.lower, self.mean_square.upper],
            "mean_square_frequency": self.mean_square.frequency,
            "mean_square_at_most_one": self.mean_square_at_most_one,
            "one_signed": None if self.one_sign.sign is None else self.one_sign.sign != 0,
            "gap_error": None if self.gap_error is None else [self.gap_error.lower, self.gap_error.upper],
            "disturbances": {name: [found.lower, found.upper] for name, found in self.disturbances.items()},
        }


@dataclass(frozen=True)
class HopGains:
    """Every hop that occurs in the string, and what follows for a string of any length made of them.

    ``signal``: the hop signal; ``any_order``: whether every kind may follow every kind.
    Law: the peak of the signal n hops down the string is at most (peak.upper)^n times the leader's.
    """

    signal: str
    signal_unit: str
    any_order: bool
    hops: tuple[Hop, ...]

    @property
    def peak(self) -> Enclosure:
        """The largest peak hop gain."""
        return Enclosure(max(h.peak.lower for h in self.hops), max(h.peak.upper for h in self.hops))

    @property
    def mean_square(self) -> Enclosure:
        """The largest mean-square hop gain."""
        return Enclosure(max(h.mean_square.lower for h in self.hops), max(h.mean_square.upper for h in self.hops))

    @property
    def claim(self) -> str:
        """The weakest claim of all hops: 'peak', 'mean square' or 'none'."""
        order = (NONE, MEAN_SQUARE, PEAK)
        return min((h.claim for h in self.hops), key=order.index)

    @property
    def one_signed(self) -> bool:
        """Whether every hop's impulse response is proven to have one sign."""
        return all(h.one_sign.sign in (1, -1) for h in self.hops)

    def gap_error(self, vehicle: int = 1) -> float | None:
        """Proven bound of the gap error of the ``vehicle``-th follower per peak of the leader's rate of change.

        Where the claim is 'peak' it is the same for every follower, whatever the order and length; otherwise it grows
        with the (vehicle - 1)-th power of the peak hop gain. None if no hop has a gap error.
        """
        found = [h.gap_error.upper for h in self.hops if h.gap_error is not None]
        if not found:
            return None
        growth = self.peak.upper if self.peak.upper > 1 else 1.0
        return max(found) * growth ** (vehicle - 1) * (1 + 2.0**-40 if growth > 1 else 1.0)

    def as_json(self) -> dict[str, object]:
        """Plain data, with the cautions."""
        return {
            "claim": self.claim,
            "meaning": MEANING[self.claim],
            "signal": self.signal,
            "any_order": self.any_order,
            "peak": [self.peak.lower, self.peak.upper],
            "mean_square": [self.mean_square.lower, self.mean_square.upper],
            "one_signed": self.one_signed,
            "gap_error_first": self.gap_error(1),
            "hops": [hop.as_json() for hop in self.hops],
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """The claim in one sentence for a driver, then one line per hop."""
        lines = [MEANING[self.claim], ""]
        for h in self.hops:
            sign = {None: "not decided", 0: "no"}.get(h.one_sign.sign, "yes, proven")
            words = f"{h.kind} behind {h.after}: peak hop gain {_range(h.peak)}"
            words += f", mean-square hop gain {_range(h.mean_square)}, one-signed: {sign}"
            if h.gap_error is not None:
                words += f", gap error {_range(h.gap_error)} per unit of the predecessor's rate of change"
            lines.append(words + ".")
        if self.claim == PEAK and (bound := self.gap_error()) is not None:
            lines.append(f"Gap error of every follower: at most {bound:.6g} times the peak of the leader's rate.")
        return "\n".join([*lines, NOT_ISS]) + "\n"

    def __repr__(self) -> str:
        """The sentence."""
        return f"<HopGains: {MEANING[self.claim]}>"


MEANING = {
    PEAK: (
        "Hop claim for peaks: however long the string, no follower's speed ever swings further than the leader's did; "
        "this is about what the leader does, not about pushes on the followers, which add up along the string."
    ),
    MEAN_SQUARE: (
        "Hop claim for mean squares only: the energy of a swing does not grow from vehicle to vehicle, but its peak "
        "may; a driver far back can be braked harder than the leader was."
    ),
    NONE: "No hop claim: what the leader does may be amplified from vehicle to vehicle.",
}
NOT_ISS = (
    "This is weaker than a proof that the whole stays calm: units that see only gaps drift together, and pushes on "
    "every vehicle add up along the string."
)


def hop_gains(
    network: Network,
    gains: Gains,
    gap_error: str | None = None,
    dead_time: Number = 0,
    sensing: Mapping[str, Number] | None = None,
    any_order: bool = False,
    width: float = 1e-6,
) -> HopGains:
    """Hop gains of a one-way string under ``gains``, asked for explicitly because the claim is a weak one.

    ``gap_error``: name of an offer of every kind (default: the only offer no link reads). ``dead_time`` (s): of every
    command; ``sensing``: sensor -> seconds late. ``any_order``: every kind may follow every kind. ``width``: relative.
    Raises InputError (no one-way string, something declared that this route does not honour), UnstableLoop.
    """
    late = {name: exact(value) for name, value in (sensing or {}).items()}
    signal, loops = hop_loops(network, gains, gap_error, exact(dead_time), late, any_order)
    first = network.cell_kinds[0]
    unit = first.offers[first.index("offers", signal)].unit
    return HopGains(signal, unit, any_order, tuple(hop_of(loop, width) for loop in loops))


def hop_of(hop: HopLoop, width: float = 1e-6) -> Hop:
    """Everything about one hop; see ``Hop``."""
    check_width(width)
    loop = hop.loop
    require_stable(loop.characteristic, f"a {hop.kind} by itself")
    num, den = loop.transfer("hop")
    steady = num.at_zero() / den.at_zero()
    sign = kernel_sign(loop, "hop")
    if sign.sign:  # the integral of a kernel of one sign is its integral without the modulus
        peak = _exact(abs(steady))
    else:
        peak = peak_of_response(loop, "hop", width)
    mean = fraction_mean_square(num, den, width)
    settled = True if peak.upper <= 1 else level_holds(num, den, Fraction(1))
    return Hop(
        hop.kind,
        hop.after,
        steady,
        peak,
        mean,
        settled if isinstance(settled, bool) or settled is None else False,
        sign,
        _gap_error(loop, width),
        {name: peak_of_response(part, "hop", width) for name, part in hop.disturbances.items()},
        hop,
    )


def _exact(value: Fraction) -> Enclosure:
    from synth.gain.rounding import down, up

    return Enclosure(down(value), up(value))


def rest_of(loop: DelayLoop) -> ExactMatrix:
    """The states at rest for a constant hop signal of 1 (n x 1), exactly; InputError if there is no single one."""
    from synth.network.rational import reduced

    n = loop.size
    total, fed = ExactMatrix.zeros(n, n), ExactMatrix.zeros(n, 1)
    for A in loop.A.values():
        total = total + A
    for D in loop.D.values():
        fed = fed + D
    table, pivots = reduced([[*total.rows[i], -fed[i, 0]] for i in range(n)], n + 1)
    if pivots != list(range(n)):
        raise InputError("the follower has no single state of rest for a constant hop signal.")
    return ExactMatrix.of([[row[-1]] for row in table])


def _gap_error(loop: DelayLoop, width: float) -> Enclosure | None:
    """|T_e/s|_1, or None if there is no gap error or it does not vanish for a constant hop signal."""
    if "gap_error" not in loop.H or loop.F.get("gap_error"):
        return None
    rest = rest_of(loop)
    if (loop.H["gap_error"] @ rest)[0, 0] != 0:
        return None
    return peak_of_response(loop, "gap_error", width, rest)


def _range(found: Enclosure | MeanSquareGain) -> str:
    return (
        f"{found.upper:.6g}"
        if found.upper - found.lower <= 2e-6 * found.upper
        else f"{found.lower:.6g} to {found.upper:.6g}"
    )
