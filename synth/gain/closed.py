"""Units with their local loop closed: the matrices from which every peak gain is computed.

With u = K y, y = C x + N v, and v_l = sum g z_j - sum g_own z_i (theory: section 1, case R1), the unit's own part
of every relative link is folded in, so that only the neighbour's part is left as an input:

    D_c = D + B K N        A_c = A + B K C - sum over relative links of D_c[:, l] g_own H[k, :]
    u   = U x + UV v       U   = K C - sum of (K N)[:, l] g_own H[k, :]      UV = K N
    z   = H_c x + F_c v    H_c = H + Fu U - sum of F[:, l] g_own H[k, :]     F_c = F + Fu UV

The sums depend only on the total own strength per take and offer, which is what a specification (gain.plan) lists.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.plan import Plan
from synth.network.gains import Gains
from synth.network.model import Kind, Link, Network


@dataclass(frozen=True)
class ClosedUnit:
    """A kind with its loop closed; all matrices exact, in the kind's declared units.

    ``A`` n x n, ``D`` n x takes (neighbour's part only), ``E`` n x disturbances, ``H`` offers x n, ``F`` offers x
    takes, ``Fw`` offers x disturbances, ``U`` inputs x n and ``UV`` inputs x takes (the actuator's command
    u = U x + UV v).
    """

    kind: Kind
    K: ExactMatrix
    A: ExactMatrix
    D: ExactMatrix
    E: ExactMatrix
    H: ExactMatrix
    F: ExactMatrix
    Fw: ExactMatrix
    U: ExactMatrix
    UV: ExactMatrix


def close_unit(kind: Kind, links: tuple[Link, ...], K: ExactMatrix) -> ClosedUnit:
    """Close the loop of ``kind`` with ``K``; ``links`` are those of the network (only the ones entering it are used).

    Raises ValueError where a relative link reads an offer with feed-through: its own part would be an algebraic loop.
    """
    return close_spec(
        kind,
        (
            (kind.index("takes", link.take), kind.index("offers", link.offer), link.own_strength)
            for link in links
            if link.kind == kind.name and link.relative
        ),
        K,
    )


def close_spec(kind: Kind, own: Iterable[tuple[int, int, Fraction]], K: ExactMatrix) -> ClosedUnit:
    """Close the loop of ``kind`` with ``K`` and the own parts (take, offer, strength) folded in, by position.

    Raises ValueError where an own part reads an offer with feed-through: it would be an algebraic loop.
    """
    KN = K @ kind.N
    D = kind.D + kind.B @ KN
    A = kind.A + kind.B @ K @ kind.C
    U, H, F = K @ kind.C, kind.H, kind.F
    for take, offer, strength in own:
        if any(kind.F.rows[offer]) or any(kind.Fw.rows[offer]) or (kind.Fu is not None and any(kind.Fu.rows[offer])):
            raise ValueError(
                f"a relative link into {kind.name}.{kind.takes[take].name} reads the offer "
                f"{kind.offers[offer].name!r}, which has feed-through"
            )
        part = kind.H.row(offer).scaled(strength)
        A = A - D.column(take) @ part
        U = U - KN.column(take) @ part
        H = H - F.column(take) @ part  # an offer that passes on what is taken passes on the own part too
    if kind.Fu is not None:  # z = H x + F v + Fu u with u = U x + UV v
        H, F = H + kind.Fu @ U, F + kind.Fu @ KN
    return ClosedUnit(kind, K, A, D, kind.E, H, F, kind.Fw, U, KN)


def close_network(network: Network, gains: Gains) -> tuple[ClosedUnit, ...]:
    """Every kind of a pattern or of rules with its loop closed, in network order.

    Units of one kind differ in what is folded in where units are listed one by one or stand at an edge: there
    :func:`close_plan` is meant, and this raises InputError.
    """
    network.refuse_beyond("one closed unit per kind", "pattern", "rules")
    return tuple(close_unit(kind, network.links, gains[kind.name].K) for kind in network.kinds)


def close_plan(plan: Plan, gains: Gains, wanted: Iterable[int] | None = None) -> tuple[ClosedUnit, ...]:
    """Every specification of a plan with its loop closed, in the plan's order, or those whose numbers are ``wanted``.

    Raises InputError where a kind has no gains, or a relative link reads an offer with feed-through.
    """
    known = {gain_set.kind: gain_set.K for gain_set in gains.sets}
    closed = []
    for number in range(len(plan.specs)) if wanted is None else wanted:
        spec = plan.specs[number]
        kind = plan.kinds[spec.kind]
        if kind.name not in known:
            raise InputError(f"there are no gains for the kind {kind.name!r}; give a gain set for every kind.")
        try:
            closed.append(close_spec(kind, spec.own, known[kind.name]))
        except ValueError as error:
            raise InputError(
                f"{error} ({plan.units_of(number)[0]}); offer the signal without feed-through, or make the link "
                "absolute."
            ) from error
    return tuple(closed)
