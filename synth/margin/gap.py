"""The smallest time gap a string can keep: proven at one gap, shown to fail at a slightly smaller one.

A string that sees only gaps has no tolerable coupling to ask for; what may be made tighter is the time gap h. Under the
notion 'peak' a gap holds if the peak hop gain is at most 1, under 'mean square' if the mean-square hop gain is. Both
are decided with certainty or not at all: one sign of the impulse response and exact or interval arithmetic over
frequencies (synth.gain.strings.hop). Whether a gap holds need not be monotone in h; what is reported is one gap that
holds and a smaller one that does not, found by bisection, and the gaps tried on the way.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix, Number, exact
from synth.gain.strings.dead_time import DelayLoop, QuasiPolynomial, loop_of_transfer
from synth.gain.strings.dead_time_kernel import kernel_sign, peak_of_response
from synth.gain.strings.dead_time_roots import UndecidedError, zeros_right_of
from synth.gain.strings.mean_square_loop import level_holds

PEAK, MEAN_SQUARE = "peak", "mean square"
NOTIONS = (PEAK, MEAN_SQUARE)
_TRIES = 60


@dataclass(frozen=True)
class TimeGapPolicy:
    """A vehicle with a drive train's lag that keeps a constant time gap h; all times in seconds.

    spacing = gap - h speed; demand = speed_gain closing + gap_gain spacing + radio_weight (predecessor's acceleration),
    carried out ``dead_time`` late; gap and closing speed are read ``sensing`` late; the radio value ``radio_delay``
    late. drive' = (demand - drive)/lag. Gains left out follow h: speed_gain = (1 - radio_weight)/h and gap_gain =
    convergence speed_gain (radio_weight 0: the law of Swaroop and Rajagopal 1999, u = (closing + lambda spacing)/h).
    """

    lag: Number
    convergence: Number = "0.1"
    dead_time: Number = 0
    sensing: Number = 0
    radio_weight: Number = 0
    radio_delay: Number = 0
    speed_gain: Number | None = None
    gap_gain: Number | None = None

    def __post_init__(self) -> None:
        """InputError for a lag that is not positive, negative times, and a weight outside [0, 1)."""
        if not exact(self.lag) > 0:
            raise InputError("the lag must be positive, in seconds.")
        if min(exact(self.dead_time), exact(self.sensing), exact(self.radio_delay)) < 0:
            raise InputError("dead_time, sensing and radio_delay must not be negative, in seconds.")
        if not 0 <= exact(self.radio_weight) < 1:
            raise InputError("radio_weight must lie in [0, 1).")

    def loop(self, h: Fraction) -> DelayLoop:
        """The hop at the time gap ``h``: states gap, speed, drive; outlets 'hop' (speed) and 'gap_error' (spacing)."""
        tau, weight = exact(self.lag), exact(self.radio_weight)
        kv = (1 - weight) / h if self.speed_gain is None else exact(self.speed_gain)
        kp = exact(self.convergence) * kv if self.gap_gain is None else exact(self.gap_gain)
        act, see, radio = exact(self.dead_time), exact(self.sensing), exact(self.radio_delay)
        zero = Fraction(0)
        A = {zero: ExactMatrix.of([[0, -1, 0], [0, 0, 1], [0, 0, -1 / tau]])}
        # The own speed in the spacing is known at once; the gap and the closing speed come from the ranging sensor.
        zeros = [zero, zero, zero]
        for late, row in ((act + see, [kp, -kv, zero]), (act, [zero, -kp * h, zero])):
            rows = ExactMatrix.of([zeros, zeros, [v / tau for v in row]])
            A[late] = A[late] + rows if late in A else rows
        D = {zero: ExactMatrix.of([[1], [0], [0]])}
        _put(D, act + see, [0, 0, kv / tau])
        if weight:
            # The predecessor's acceleration is its speed's derivative: move the state, x^ = x - column v(t - late).
            late = act + radio
            column = ExactMatrix.of([[0], [0], [weight / tau]])
            for b, part in A.items():
                moved = part @ column
                if any(row[0] for row in moved.rows):
                    _put(D, late + b, [row[0] for row in moved.rows])
        return DelayLoop(A, D, {"hop": ExactMatrix.of([[0, 1, 0]]), "gap_error": ExactMatrix.of([[1, -h, 0]])})


def _put(D: dict[Fraction, ExactMatrix], late: Fraction, column: Sequence[Number]) -> None:
    add = ExactMatrix.of([[v] for v in column])
    D[late] = D[late] + add if late in D else add


Single = DelayLoop | tuple[QuasiPolynomial, QuasiPolynomial]
Builder = Callable[[Fraction], "Single | list[DelayLoop]"]


@dataclass(frozen=True)
class SmallestGap:
    """The answer under one notion; gaps in seconds.

    ``proven``: a gap that holds (None: none of those tried does); ``breaks``: a smaller gap proven not to hold (None:
    none was found down to ``lowest``). ``tried``: gap -> True (holds), False (does not), None (not decided).
    ``constant_distance``: every gap tried keeps the same distance at every speed, which never holds.
    """

    notion: str
    proven: Fraction | None
    breaks: Fraction | None
    lowest: Fraction
    highest: Fraction
    tried: tuple[tuple[Fraction, bool | None], ...]
    constant_distance: bool

    def as_json(self) -> dict[str, object]:
        """Plain data, with the cautions."""
        return {
            "claim": self.notion,
            "proven": None if self.proven is None else float(self.proven),
            "breaks": None if self.breaks is None else float(self.breaks),
            "searched": [float(self.lowest), float(self.highest)],
            "constant_distance": self.constant_distance,
            "meaning": self.sentence(),
            "cautions": list(CAUTIONS),
        }

    def sentence(self) -> str:
        """The answer in one sentence."""
        what = "peaks caused by the leader" if self.notion == PEAK else "mean squares (peaks may grow)"
        if self.constant_distance:
            return "A string that keeps a constant distance amplifies what its leader does, whatever the gains."
        if self.proven is None:
            return f"No time gap from {float(self.lowest):g} to {float(self.highest):g} s was proven for {what}."
        words = f"Hop claim for {what}: proven at a time gap of {float(self.proven):.5g} s"
        if self.breaks is None:
            return f"{words}; no gap down to {float(self.lowest):g} s was shown to fail."
        return f"{words}, shown to fail at {float(self.breaks):.5g} s. This is not a proof that the string stays calm."


def smallest_gap(
    policy: TimeGapPolicy | Builder,
    notion: str = PEAK,
    low: Number = "0.01",
    high: Number = 30,
    width: float = 1e-3,
) -> SmallestGap:
    """Bracket the smallest time gap h (s) in [low, high] at which the hop claim of ``notion`` holds.

    ``policy``: a TimeGapPolicy, or a call that gives, for an exact h, a DelayLoop with the outlet 'hop', a list of
    such (all must hold) or a pair (numerator, denominator). ``width``: relative width of the bracket, 1e-6 to 0.5.
    Raises InputError for these.
    Law: the gap ``proven`` holds and ``breaks`` < ``proven`` does not, both decided in exact or interval arithmetic.
    """
    if notion not in NOTIONS:
        raise InputError(f"the notion is {notion!r}; accepted are 'peak' and 'mean square'.")
    lowest, highest = exact(low), exact(high)
    if not 0 < lowest < highest:
        raise InputError("low and high must be time gaps with 0 < low < high, in seconds.")
    if not 1e-6 <= width <= 0.5:
        raise InputError(f"width is {width}; a relative width between 1e-6 and 0.5 is accepted.")
    search = _Search(policy.loop if isinstance(policy, TimeGapPolicy) else policy, notion)
    proven, breaks = search.bracket(lowest, highest, width)
    tried = tuple(sorted(search.tried.items()))
    flat = proven is None and all(search.constant_distance(h) for h, _ in tried)
    return SmallestGap(notion, proven, breaks, lowest, highest, tried, flat)


class _Search:
    """Decisions gap by gap, remembered."""

    def __init__(self, build: Builder, notion: str) -> None:
        self.build, self.notion = build, notion
        self.tried: dict[Fraction, bool | None] = {}

    def holds(self, h: Fraction) -> bool | None:
        """Whether the claim holds at ``h``; None if neither was shown."""
        if h not in self.tried:
            verdicts = [holds_at(one, self.notion) for one in self._all(h)]
            self.tried[h] = False if False in verdicts else None if None in verdicts else True
        return self.tried[h]

    def _all(self, h: Fraction) -> list[Any]:
        built = self.build(h)
        return list(built) if isinstance(built, list) else [built]

    def constant_distance(self, h: Fraction) -> bool:
        """Whether the string keeps the same distance at every speed: T(0) = 1 and T'(0) = 0, exactly."""
        for built in self._all(h):
            num, den = _fraction(built)
            n, d = num.taylor(1), den.taylor(1)
            if n[0] == d[0] and n[1] == d[1]:
                return True
        return False

    def bracket(self, lowest: Fraction, highest: Fraction, width: float) -> tuple[Fraction | None, Fraction | None]:
        """A gap that holds and the largest smaller one found that does not."""
        rungs = _ladder(lowest, highest)
        good = next((h for h in rungs if self.holds(h)), None)
        if good is None:
            return None, None
        bad = None
        for h in rungs[rungs.index(good) + 1 :]:
            if not self.holds(h):
                bad = h
                break
            good = h
        if bad is None:
            return good, None
        for _ in range(_TRIES):
            if float(good / bad) <= 1 + width:
                break
            middle = _between(bad, good)
            if self.holds(middle):
                good = middle
            else:
                bad = middle
        if self.holds(bad) is False:
            return good, bad
        # The last gap is undecided: look a little below it for one that certainly fails.
        for i in range(1, 40):
            below = _rounded(float(bad) * (1 - width * 2.0 ** (i / 2)))
            if below < lowest:
                break
            if self.holds(below) is False:
                return good, below
        return good, None


def _ladder(lowest: Fraction, highest: Fraction) -> list[Fraction]:
    """Gaps from the highest down by factors of 1.5, the lowest at last."""
    found, here = [highest], highest
    while here / Fraction(3, 2) > lowest:
        here = _rounded(float(here) / 1.5)
        found.append(here)
    return [*found, lowest]


def _rounded(value: float) -> Fraction:
    return Fraction(f"{value:.9g}")


def _between(one: Fraction, two: Fraction) -> Fraction:
    return _rounded(math.sqrt(float(one) * float(two)))


def _fraction(built: Single) -> tuple[QuasiPolynomial, QuasiPolynomial]:
    return built.transfer("hop") if isinstance(built, DelayLoop) else built


def holds_at(built: Single, notion: str) -> bool | None:
    """Whether the hop claim of ``notion`` holds for a loop: True or False, both proven, or None.

    An unstable loop does not hold. Peak: with T(0) = 1 the peak hop gain is 1 iff the impulse response has one sign.
    """
    num, den = _fraction(built)
    try:
        if zeros_right_of(built.characteristic if isinstance(built, DelayLoop) else den, Fraction(0)) > 0:
            return False
    except UndecidedError:
        return None
    if notion == MEAN_SQUARE:
        found = level_holds(num, den, Fraction(1))
        return found if found is None or isinstance(found, bool) else False
    loop = built if isinstance(built, DelayLoop) else loop_of_transfer(num, den)
    steady = abs(num.at_zero() / den.at_zero())
    if steady > 1:
        return False
    sign = kernel_sign(loop, "hop").sign
    if sign:
        return True
    if steady == 1:
        return None if sign is None else False
    peak = peak_of_response(loop, "hop", 1e-4)
    return True if peak.upper <= 1 else (False if peak.lower > 1 else None)


@dataclass(frozen=True)
class GapRow:
    """One row of the table: what was changed, to which value, and the bracket found."""

    what: str
    value: str
    gap: SmallestGap


def gap_table(
    policy: TimeGapPolicy,
    notion: str = PEAK,
    lags: Sequence[Number] = (),
    dead_times: Sequence[Number] = (),
    sensing: Sequence[Number] = (),
    radio_delays: Sequence[Number] = (),
    width: float = 1e-3,
) -> tuple[GapRow, ...]:
    """How the smallest gap moves, one thing changed at a time; the first row is the policy as it is.

    With a radio_weight the last row is the radio lost for good: the law without it, the gap to fall back to.
    """
    cases: list[tuple[str, str, TimeGapPolicy]] = [("as it is", "", policy)]
    for field, name, values in (
        ("lag", "lag", lags),
        ("dead_time", "dead time of the command", dead_times),
        ("sensing", "dead time of the ranging sensor", sensing),
        ("radio_delay", "delay of the radio", radio_delays),
    ):
        cases += [(name, f"{float(exact(v)):g} s", replace(policy, **{field: v})) for v in values]
    if exact(policy.radio_weight):
        cases.append(("radio lost", "", replace(policy, radio_weight=0)))
    return tuple(GapRow(what, value, smallest_gap(case, notion, width=width)) for what, value, case in cases)


def table_text(rows: Sequence[GapRow]) -> str:
    """The table as lines of text."""
    return "\n".join(f"{row.what}{' ' + row.value if row.value else ''}: {row.gap.sentence()}" for row in rows) + "\n"
