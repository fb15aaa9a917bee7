"""Units with their local loop closed: the matrices from which every peak gain is computed.

With u = K y, y = C x + N v, and v_l = sum g z_j - sum g_own z_i (theory: section 1, case R1), the unit's own part
of every relative link is folded in, so that only the neighbour's part is left as an input:

    D_c = D + B K N        A_c = A + B K C - sum over relative links of D_c[:, l] g_own H[k, :]
    u   = U x + UV v       U   = K C - sum of (K N)[:, l] g_own H[k, :]      UV = K N
    z   = H_c x + F_c v    H_c = H + Fu U - sum of F[:, l] g_own H[k, :]     F_c = F + Fu UV
"""

from __future__ import annotations

from dataclasses import dataclass

from synth.base.exact import ExactMatrix
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
    KN = K @ kind.N
    D = kind.D + kind.B @ KN
    A = kind.A + kind.B @ K @ kind.C
    U, H, F = K @ kind.C, kind.H, kind.F
    for link in links:
        if link.kind != kind.name or not link.relative:
            continue
        take, offer = kind.index("takes", link.take), kind.index("offers", link.offer)
        if any(kind.F.rows[offer]) or any(kind.Fw.rows[offer]) or (kind.Fu is not None and any(kind.Fu.rows[offer])):
            raise ValueError(f"relative link {link.name!r} reads the offer {link.offer!r}, which has feed-through")
        own = kind.H.row(offer).scaled(link.own_strength)
        A = A - D.column(take) @ own
        U = U - KN.column(take) @ own
        H = H - F.column(take) @ own  # an offer that passes on what is taken passes on the own part too
    if kind.Fu is not None:  # z = H x + F v + Fu u with u = U x + UV v
        H, F = H + kind.Fu @ U, F + kind.Fu @ KN
    return ClosedUnit(kind, K, A, D, kind.E, H, F, kind.Fw, U, KN)


def close_network(network: Network, gains: Gains) -> tuple[ClosedUnit, ...]:
    """Every kind with its loop closed, in network order."""
    return tuple(close_unit(kind, network.links, gains[kind.name].K) for kind in network.kinds)
