"""Explicit members as wired: their one large closed loop, its rightmost mode, and how far it can be driven.

Eigenvalues alone mislead in long chains: a one-way string of any finite length has the modes of one unit whatever its
links, and yet amplifies without bound as it gets longer. So the static gain stands beside them, a lower bound of the
peak gain from all disturbances to any state (the response to constant disturbances of the worst signs). Theory
section 9.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.base.errors import InputError
from synth.gain.closed import ClosedUnit
from synth.gain.window.build import Window, build_window
from synth.gain.window.doubles import doubles_of
from synth.gain.window.norm import MOST_STATES, rightmost_real, verified_norm
from synth.gain.window.places import Place, places_of
from synth.network.gains import Gains
from synth.network.model import Network


@dataclass(frozen=True)
class MembersLoop:
    """``rightmost``: largest real part of a mode, 1/s, as doubles; ``stable_certified``: a verified Lyapunov norm shows
    that every mode decays; ``static_gain``: at least this many state units per unit of disturbance (inf if unstable);
    ``states`` of the whole.
    """

    rightmost: float
    stable_certified: bool
    static_gain: float
    states: int


def members_loop(
    network: Network, gains: Gains, factor: Fraction = Fraction(1), classes: tuple[str, ...] | None = None,
    own_parts: bool = True, certify: bool = True,
) -> MembersLoop:  # fmt: skip
    """The closed loop of explicit members with the links of ``classes`` (None: all) times ``factor``.

    Links count as fresh, with the declared sign and strength; tolerances stand at their middle. Raises InputError for
    other descriptions, links with a delay, and missing gains.
    """
    network.refuse_beyond("the modes of the whole", "members")
    for link in network.links:
        if link.delay:
            raise InputError(
                f"link {link.name!r} has a delay of {float(link.delay):g} s; the modes of members are offered for "
                "fresh links."
            )
    scaled = network.without_self_links().scaled(factor, classes, own_parts)
    places = places_of(scaled, gains)
    everybody = tuple(place for centre in places.centres for place in centre)
    window = build_window(places, everybody, 0)
    system = doubles_of(window)
    if system is None:
        raise InputError("a number of the closed loop is outside the range of doubles; choose other units.")
    if not system.size:
        return MembersLoop(-math.inf, True, 0.0, 0)
    rightmost = rightmost_real(system)
    sure = certify and verified_norm(system, rightmost) is not None
    gain = _static_gain(window, places.unit, rightmost)
    return MembersLoop(rightmost, sure, gain, system.size)


def _static_gain(window: Window, unit_at: Callable[[Place], ClosedUnit], rightmost: float) -> float:
    """max over states of sum over disturbances of |A^{-1} E|, in the declared units."""
    if rightmost >= 0:
        return math.inf
    if window.size > MOST_STATES:
        return math.nan
    A = np.zeros((window.size, window.size))
    for i, row in enumerate(window.A):
        for j, value in row.items():
            A[i, j] = float(value)
    columns = []
    for place, start in zip(window.places, window.first_state, strict=True):
        E = unit_at(place).E.floats()
        wide = np.zeros((window.size, E.shape[1]))
        wide[start : start + E.shape[0]] = E
        columns.append(wide)
    reached = np.linalg.solve(A, np.hstack(columns))
    return float(np.abs(reached).sum(axis=1).max(initial=0.0))
