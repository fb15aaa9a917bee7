"""A second look at a hop: |T(jw)| on a grid, in floating point, straight from the network's matrices.

It shares no code with the exact route (``synth.gain.strings.hop_network``): the loop is closed anew at every frequency,
and what a unit hears of its predecessor beside the hop signal is found from the predecessor's response to its own
command. It can contradict a claim, never support one.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.network.gains import Gains
from synth.network.hop_wish import HopWish
from synth.network.model import Kind, Link, Network

Complex = NDArray[np.complex128]
_COUNT = 400


def largest_response(network: Network, gains: Gains, wish: HopWish) -> float:
    """The largest |T(jw)| seen over all pairs of follower and predecessor and 400 frequencies."""
    kinds = network.cell_kinds
    s = np.asarray(1j * np.geomspace(1e-3, 1e3, _COUNT), dtype=np.complex128)
    worst = 0.0
    for kind in kinds:
        mine = [link for link in network.links if link.kind == kind.name]
        before = {link.source_kind for link in mine if not link.own_part}
        for ahead in kinds if wish.any_order else [k for k in kinds if k.name in before]:
            worst = max(worst, float(np.abs(hop_response(kind, ahead, mine, gains, wish, s)).max()))
    return worst


def hop_response(kind: Kind, ahead: Kind, links: list[Link], gains: Gains, wish: HopWish, s: Complex) -> Complex:
    """T(s) of a ``kind`` behind an ``ahead``; ``links`` are those into the kind. Any complex s that is no pole."""
    n, takes = len(kind.states), len(kind.takes)
    A, B, C, D, N, H = (getattr(kind, name).floats() for name in ("A", "B", "C", "D", "N", "H"))
    K = gains[kind.name].K.floats()
    late = np.array([float(wish.dead_time + wish.sensing.get(q.name, 0)) for q in kind.sensors])
    hop = kind.index("offers", wish.signal)
    out = np.empty(len(s), dtype=np.complex128)
    own = np.zeros((takes, len(kind.offers)))
    for link in links:
        own[kind.index("takes", link.take), kind.index("offers", link.offer)] += float(link.own_strength)
    for i, value in enumerate(s):
        alone = np.linalg.solve(value * np.eye(len(ahead.states)) - ahead.A.floats(), ahead.B.floats()[:, 0])
        offered = ahead.H.floats() @ alone
        offered = offered / offered[ahead.index("offers", wish.signal)]
        heard = np.zeros(takes, dtype=np.complex128)
        for link in links:
            if not link.own_part:
                k = ahead.index("offers", link.offer)
                heard[kind.index("takes", link.take)] += (
                    float(link.strength) * np.exp(-value * float(link.delay)) * offered[k]
                )
        KE = K * np.exp(-value * late)
        left = value * np.eye(n) - A - B @ KE @ C + (B @ KE @ N + D) @ own @ H
        x = np.linalg.solve(left, (B @ KE @ N + D) @ heard)
        out[i] = H[hop] @ x
    return out
