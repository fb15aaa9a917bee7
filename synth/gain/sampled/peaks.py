"""Peak gains of units under sampled control, as flashed: sample period, computation delay, hold, and rounding.

The plant runs on between samples and the links and disturbances act at all times, while the controller sees samples and
the actuators hold. The peak gain is then a supremum over the phase within a period (theory: section 6); looking at the
sampling instants alone is no bound. Units need no common clock: nothing here compares the periods of two units.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from flint import ctx

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix, Number, exact
from synth.gain.closed import ClosedUnit, close_unit
from synth.gain.peak import Matrix, PeakGain, as_matrix, check_width, relative_width
from synth.gain.rounding import down, up
from synth.gain.sampled.loop import BITS, Floats, SampledLoop, Transition
from synth.gain.sampled.sup import Inlet, Outlet, Supremum
from synth.network.model import Kind, Link

Row = tuple[Fraction, ...]


@dataclass(frozen=True)
class SampledUnit:
    """A kind with its sampled loop; what enters it, and what is looked at.

    ``takes``, ``waves`` (disturbances), ``sensors`` (an error of each sensor's sample), ``commands`` (an error of each
    computed command) and ``stored`` (an error added once per period to each state kept in the firmware) are inlets;
    ``lines`` are outlets by role: offers, states, actuators, sensors. ``through`` holds what passes at once, by role:
    a matrix lines x takes and one lines x disturbances.
    """

    kind: Kind
    gains: ExactMatrix
    loop: SampledLoop
    takes: tuple[Inlet, ...]
    waves: tuple[Inlet, ...]
    sensors: tuple[Inlet, ...]
    commands: tuple[Inlet, ...]
    stored: tuple[Inlet, ...]
    offers: tuple[Outlet, ...]
    states: tuple[Outlet, ...]
    actuators: tuple[Outlet, ...]
    readings: tuple[Outlet, ...]
    through: Mapping[str, tuple[ExactMatrix, ExactMatrix]]


@dataclass(frozen=True)
class SampledPeaks:
    """Guaranteed peak gains of one sampled unit, for signals weighted with e^{alpha t}.

    ``gains[role][group]``: arrays (lines of the role, inlets of the group), in line unit per inlet unit; roles offers,
    states, actuators, readings; groups takes, waves, sensors, commands, stored. ``free[role]``: vectors, the largest
    value from initial states and held commands of size one (each in its declared unit), started at a sampling instant.
    """

    gains: Mapping[str, Mapping[str, PeakGain]]
    free: Mapping[str, PeakGain]
    alpha: Fraction


GROUPS = ("takes", "waves", "sensors", "commands", "stored")
ROLES = ("offers", "states", "actuators", "readings")


def sampled_peak_gain(
    A: Matrix,
    B: Matrix,
    R: Matrix,
    D: Matrix,
    H: Matrix,
    period: Number,
    delay: Number = 0,
    F: Matrix | None = None,
    width: float = 1e-6,
) -> PeakGain:
    """Enclose the peak gain of x' = A x + B u + D v, z = H x + F v with u = R x sampled and held.

    ``A`` (n, n) in 1/s, ``B`` (n, m), ``R`` (m, n): the command R x(kT) acts from kT + delay to (k+1)T + delay;
    ``D`` (n, inlets), ``H`` (outlets, n), ``F`` (outlets, inlets) or None; ``period`` and ``delay`` in s, 0 <= delay <=
    period; ``width`` relative. The result holds arrays (outlets, inlets). Law: for period -> 0 it tends to
    peak_to_peak_gain(A + B R, D, H, F).

    Raises UnstableLoop if a mode of the transition over one period is on or outside the unit circle, InputError on
    shapes, times and widths, WidthNotReached if the enclosure does not close. Formula: theory section 6; the branch and
    bound is ours.
    """
    check_width(width)
    a, b, r, d, h = (as_matrix(v, name) for v, name in ((A, "A"), (B, "B"), (R, "R"), (D, "D"), (H, "H")))
    loop = SampledLoop(a, b, r, exact(period), exact(delay))
    n, m = b.shape
    if d.shape[0] != n or h.shape[1] != n:
        raise InputError(f"D must have {n} rows and H {n} columns, not shapes {d.shape} and {h.shape}.")
    f = ExactMatrix.zeros(h.shape[0], d.shape[1]) if F is None else as_matrix(F, "F")
    if f.shape != (h.shape[0], d.shape[1]):
        raise InputError(f"F must be {h.shape[0]} x {d.shape[1]}, not of shape {f.shape}.")
    none, still = (Fraction(0),) * m, (Fraction(0),) * n
    inlets = [Inlet(tuple(d[i, j] for i in range(n)), none, still) for j in range(d.shape[1])]
    outlets = [Outlet((*row, *none)) for row in h.rows]
    low, high = _enclosed(loop, Fraction(0), inlets, outlets, (), width)
    return _plus(low[:, : len(inlets)], high[:, : len(inlets)], f)


def sampled_unit(
    kind: Kind,
    links: tuple[Link, ...],
    K: ExactMatrix,
    period: Number,
    delay: Number = 0,
    stored: Sequence[str] = (),
) -> SampledUnit:
    """Close the loop of ``kind`` with the sampled controller u = K y.

    ``links`` are the network's; own parts of relative links that act on the plant are continuous, the part that a
    sensor hears is sampled with it. ``stored`` names states that the firmware keeps and advances once per period by
    period times their rate, computed from the sample (integrators). Times in s.

    Raises InputError where a stored state is driven by a disturbance, and ValueError where a relative link reads an
    offer with feed-through (see close_unit).
    """
    T, n = exact(period), len(kind.states)
    m = len(kind.inputs)
    # With no gains the closed unit is the plant with the own parts folded in; Fu then acts through the held command.
    plant = close_unit(kind, links, ExactMatrix.zeros(m, len(kind.sensors)))
    R = close_unit(kind, links, K).U
    kept = [kind.index("states", name) for name in stored]
    for i in kept:
        if any(kind.E.rows[i]):
            raise InputError(
                f"state {kind.states[i].name!r} of {kind.name!r} is stored in the firmware and driven by a "
                "disturbance; only what the controller computes can be stored."
            )
    Z = _stored_steps(plant, kind.B, R, kept, T)
    A, B, D = (_without(M, kept) for M in (plant.A, kind.B, kind.D))
    loop = SampledLoop(A, B, R, T, exact(delay), Z if kept else None)
    KN, still, none = K @ kind.N, (Fraction(0),) * n, (Fraction(0),) * m

    def sample(gu: Row, gx: Row = still) -> Inlet:
        """A sampled error of the command, and what the stored states make of it within the same period."""
        moved = [T * sum((b * g for b, g in zip(kind.B.rows[i], gu, strict=True)), Fraction(0)) for i in range(n)]
        return Inlet(still, gu, tuple(x + (moved[i] if i in kept else 0) for i, x in enumerate(gx)))

    takes = []
    for j in range(len(kind.takes)):
        heard = sample(_column(KN, j), tuple(T * kind.D[i, j] if i in kept else Fraction(0) for i in range(n)))
        takes.append(Inlet(_column(D, j), heard.gu, heard.gx))
    controller = getattr(kind, "controller", None)
    integrals = {} if controller is None else dict(controller.integrals)
    sensors = []
    for j, sensor in enumerate(kind.sensors):
        moved = tuple(
            T if i in kept and integrals.get(s.name) == sensor.name else Fraction(0) for i, s in enumerate(kind.states)
        )
        sensors.append(sample(_column(K, j), moved))
    H, feed = plant.H, kind.Fu
    held = [feed.rows[k] if feed is not None else none for k in range(len(kind.offers))]
    readings = _readings(kind, links)
    return SampledUnit(
        kind,
        K,
        loop,
        tuple(takes),
        tuple(Inlet(_column(kind.E, j), none, still) for j in range(len(kind.disturbances))),
        tuple(sensors),
        tuple(sample(_unit(i, m)) for i in range(m)),
        tuple(Inlet(still, none, _unit(i, n)) for i in kept),
        tuple(Outlet((*row, *u)) for row, u in zip(H.rows, held, strict=True)),
        tuple(Outlet((*_unit(i, n), *none)) for i in range(n)),
        tuple(Outlet((*still, *_unit(i, m))) for i in range(m)),
        tuple(Outlet((*row, *none), sampled=True) for row in readings.rows),
        {"offers": (kind.F, kind.Fw), "readings": (kind.N, ExactMatrix.zeros(*_shape(kind)))},
    )


def _shape(kind: Kind) -> tuple[int, int]:
    return len(kind.sensors), len(kind.disturbances)


def _readings(kind: Kind, links: tuple[Link, ...]) -> ExactMatrix:
    """What the sensors read of the unit's own states: C, less the own parts of relative links that they hear."""
    C = kind.C
    for link in links:
        if link.kind == kind.name and link.relative:
            take, offer = kind.index("takes", link.take), kind.index("offers", link.offer)
            C = C - kind.N.column(take) @ kind.H.row(offer).scaled(link.own_strength)
    return C


def _stored_steps(plant: ClosedUnit, B: ExactMatrix, R: ExactMatrix, kept: Sequence[int], T: Fraction) -> ExactMatrix:
    """Z: T times the rate of every stored state, with the command of the same sample."""
    rate, n = plant.A + B @ R, plant.A.shape[0]
    rows = [tuple(T * v for v in rate.rows[i]) if i in kept else (Fraction(0),) * n for i in range(n)]
    return ExactMatrix(tuple(rows), (n, n))


def _without(matrix: ExactMatrix, kept: Sequence[int]) -> ExactMatrix:
    """The matrix with the rows of stored states set to zero: between samples they stand still."""
    width = matrix.shape[1]
    rows = tuple((Fraction(0),) * width if i in kept else row for i, row in enumerate(matrix.rows))
    return ExactMatrix(rows, matrix.shape)


def _column(matrix: ExactMatrix, j: int) -> Row:
    return tuple(row[j] for row in matrix.rows)


def _unit(i: int, size: int) -> Row:
    return tuple(Fraction(int(i == j)) for j in range(size))


def sampled_peaks(unit: SampledUnit, alpha: Number = Fraction(0), width: float = 1e-6) -> SampledPeaks:
    """All peak gains of a sampled unit, and its largest free responses from a sampling instant on.

    ``alpha`` in 1/s, >= 0, weighs every signal with e^{alpha t}; ``width`` relative. Raises UnstableLoop if the
    weighted transition has a mode on or outside the unit circle, InputError if alpha is negative or the width out of
    range, WidthNotReached if an enclosure does not close. Formula: theory section 6.
    """
    check_width(width)
    alpha = exact(alpha)
    if alpha < 0:
        raise InputError(f"alpha must not be negative, not {float(alpha):g} 1/s.")
    groups = {name: getattr(unit, name) for name in GROUPS}
    inlets = [inlet for name in GROUPS for inlet in groups[name]]
    wanted = {role: getattr(unit, role) for role in ROLES}
    outlets = list(dict.fromkeys(line for role in ROLES for line in wanted[role]))
    try:
        low, high = _enclosed(unit.loop, alpha, inlets, outlets, (1.0,) * unit.loop.size, width)
    except UnstableLoop as error:
        raise UnstableLoop(f"kind {unit.kind.name!r}: {error}") from error
    gains: dict[str, dict[str, PeakGain]] = {}
    free = {}
    for role in ROLES:
        place = [outlets.index(line) for line in wanted[role]]
        gains[role], first = {}, 0
        for name in GROUPS:
            part = slice(first, first + len(groups[name]))
            less, most = low[place][:, part], high[place][:, part]
            direct = unit.through[role][_DIRECT.index(name)] if role in unit.through and name in _DIRECT else None
            if name == "sensors" and role == "readings":
                direct = ExactMatrix.identity(len(unit.kind.sensors))
            gains[role][name] = (
                PeakGain(less, most, relative_width(less, most)) if direct is None else _plus(less, most, direct)
            )
            first = part.stop
        less, most = low[place, -1], high[place, -1]
        free[role] = PeakGain(less, most, relative_width(less, most))
    return SampledPeaks(gains, free, alpha)


_DIRECT = ("takes", "waves")


def sampled_gains(unit: SampledUnit, inlets: Sequence[Inlet], outlets: Sequence[Outlet], width: float) -> PeakGain:
    """Peak gains of a sampled unit from some inlets to some outlets, what passes at once left out; shape and errors as
    sampled_peaks."""
    check_width(width)
    try:
        low, high = _enclosed(unit.loop, Fraction(0), inlets, outlets, (), width)
    except UnstableLoop as error:
        raise UnstableLoop(f"kind {unit.kind.name!r}: {error}") from error
    low, high = low[:, : len(inlets)], high[:, : len(inlets)]
    return PeakGain(low, high, relative_width(low, high))


def _enclosed(
    loop: SampledLoop,
    alpha: Fraction,
    inlets: Sequence[Inlet],
    outlets: Sequence[Outlet],
    free: Sequence[float],
    width: float,
) -> tuple[Floats, Floats]:
    """Lower and upper ends (outlets, inlets + 1); exact zeros where no path leads from an inlet to an outlet."""
    low, high = (np.zeros((len(outlets), len(inlets) + 1)) for _ in range(2))
    reached = np.array([_reached(loop, inlet) for inlet in inlets], dtype=bool).reshape(len(inlets), loop.size)
    with ctx.workprec(BITS):
        supremum = Supremum(Transition(loop, alpha), inlets, free)
        for k, outlet in enumerate(outlets):
            looked = np.array([v != 0 for v in outlet.row], dtype=bool)
            unseen = ~(reached & looked[None]).any(axis=1)
            low[k], high[k] = supremum.outlet(outlet, width, np.append(unseen, not free))
    return low, high


def _reached(loop: SampledLoop, inlet: Inlet) -> list[bool]:
    """Which states and commands an inlet can move at all, by the pattern of non-zero entries."""
    n = loop.states
    found = [bool(d) or bool(x) for d, x in zip(inlet.D, inlet.gx, strict=True)] + [bool(u) for u in inlet.gu]
    arrows = [
        [bool(a) or (loop.Z is not None and bool(loop.Z[i, j])) for j, a in enumerate(loop.A.rows[i])]
        + [bool(b) for b in loop.B.rows[i]]
        for i in range(n)
    ] + [[bool(v) for v in row] + [False] * (loop.size - n) for row in loop.R.rows]
    for _ in range(loop.size):
        found = [
            here or any(a and b for a, b in zip(row, found, strict=True))
            for here, row in zip(found, arrows, strict=True)
        ]
    return found


def _plus(low: Floats, high: Floats, direct: ExactMatrix) -> PeakGain:
    """Add the moduli of what passes at once, rounded outward."""
    low, high = low.copy(), high.copy()
    for i, row in enumerate(direct.rows):
        for j, value in enumerate(row):
            if value:
                low[i, j] = down(Fraction(float(low[i, j])) + abs(value))
                high[i, j] = up(Fraction(float(high[i, j])) + abs(value))
    return PeakGain(low, high, relative_width(low, high))
