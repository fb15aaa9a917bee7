"""All peak gains of one closed unit: from every take and disturbance to every offer, state and actuator command.

The outlets share one verified decay, one set of steps and one trajectory per inlet, and equal outlet rows are enclosed
once. With a rate alpha the numbers are those of A + alpha I (theory (4)): they bound e^{alpha t} times the signals.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix, exact
from synth.gain.closed import ClosedUnit
from synth.gain.free import free_responses
from synth.gain.peak import PeakGain, Peaks, check_width, relative_width
from synth.gain.rounding import down, up

Row = tuple[Fraction, ...]


@dataclass(frozen=True)
class UnitPeaks:
    """Guaranteed peak gains of one closed unit, for A + alpha I.

    ``X_takes`` and ``X_dist`` are arrays (X, takes) and (X, disturbances) for X = offers, states, actuators, in unit of
    X per unit of the take or disturbance; ``X_free`` vectors (X,), in unit of X per unit of the initial states (largest
    absolute value over the unit's states). Actuators are the commands u = U x + UV v.
    """

    offers_takes: PeakGain
    offers_dist: PeakGain
    states_takes: PeakGain
    states_dist: PeakGain
    actuators_takes: PeakGain
    actuators_dist: PeakGain
    offers_free: PeakGain
    states_free: PeakGain
    actuators_free: PeakGain
    alpha: Fraction


def shifted(unit: ClosedUnit, alpha: Fraction) -> ExactMatrix:
    """A + alpha I of the closed unit."""
    return unit.A + ExactMatrix.identity(unit.A.shape[0]).scaled(alpha)


def unit_engine(unit: ClosedUnit, rows: Sequence[Row], alpha: Fraction, width: float) -> Peaks:
    """The shared work for the given outlet rows; UnstableLoop names the kind and the rate."""
    n = unit.A.shape[0]
    try:
        return Peaks(shifted(unit, alpha), ExactMatrix(tuple(rows), (len(rows), n)), width)
    except UnstableLoop as error:
        rate = f" with the rate alpha = {float(alpha):g} 1/s added" if alpha else ""
        raise UnstableLoop(f"kind {unit.kind.name!r}{rate}: {error}") from error


def state_peaks(closed_unit: ClosedUnit, alpha: Fraction | float | str = Fraction(0), width: float = 1e-6) -> UnitPeaks:
    """Peak gains and free responses to every offer, state and actuator command of one closed unit.

    ``alpha`` in 1/s, >= 0; ``width`` relative. Raises UnstableLoop if A + alpha I is not Hurwitz, InputError if alpha
    is negative or the width out of range, WidthNotReached if an enclosure does not close. Theory (3), (4), 3c.
    """
    check_width(width)
    alpha = exact(alpha)
    if alpha < 0:
        raise InputError(f"alpha must not be negative, not {float(alpha):g} 1/s.")
    unit, n = closed_unit, closed_unit.A.shape[0]
    wanted: list[Row] = [*unit.H.rows, *ExactMatrix.identity(n).rows, *unit.U.rows]
    distinct = list(dict.fromkeys(wanted))
    place = [distinct.index(row) for row in wanted]
    peaks = unit_engine(unit, distinct, alpha, width)
    takes, dist = peaks.gains(unit.D), peaks.gains(unit.E)
    free = free_responses(peaks)
    k = unit.H.shape[0]
    offers, states, actuators = place[:k], place[k : k + n], place[k + n :]
    return UnitPeaks(
        offers_takes=_with(takes, offers, unit.F),
        offers_dist=_with(dist, offers, unit.Fw),
        states_takes=_picked(takes, states),
        states_dist=_picked(dist, states),
        actuators_takes=_with(takes, actuators, unit.UV),
        actuators_dist=_picked(dist, actuators),
        offers_free=_picked(free, offers),
        states_free=_picked(free, states),
        actuators_free=_picked(free, actuators),
        alpha=alpha,
    )


def _picked(gains: PeakGain, rows: list[int]) -> PeakGain:
    lower, upper = gains.lower[rows], gains.upper[rows]
    return PeakGain(lower, upper, relative_width(lower, upper))


def _with(gains: PeakGain, rows: list[int], F: ExactMatrix) -> PeakGain:
    """The picked rows plus the modulus of the feed-through, rounded outward (this never widens the relative width)."""
    lower, upper = gains.lower[rows].copy(), gains.upper[rows].copy()
    for i, row in enumerate(F.rows):
        for j, value in enumerate(row):
            if value:
                lower[i, j] = down(Fraction(float(lower[i, j])) + abs(value))
                upper[i, j] = up(Fraction(float(upper[i, j])) + abs(value))
    return PeakGain(lower, upper, relative_width(lower, upper))
