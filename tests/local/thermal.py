"""Thermal networks on given graphs: every zone has air and wall, neighbours exchange heat (all data invented)."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.network.layout import Members
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal
from tests.build import M


def zone(name: str, wall: str = "0.2", loss: str = "0.05", limit: str | None = None) -> Kind:
    """air' = wall (mass - air) - loss air + heat + draught + sun, mass' = wall/4 (air - mass): rates in 1/min."""
    w, a = Fraction(wall), Fraction(loss)
    return Kind(
        name=name,
        states=(Signal("air", "K"), Signal("mass", "K")),
        inputs=(Actuator("heat", "K/s", None if limit is None else Fraction(limit)),),
        disturbances=(Disturbance("sun", "K/s", Fraction("0.02")),),
        takes=(Signal("draught", "K/s"),),
        offers=(Signal("warmth", "K"),),
        sensors=(Signal("air", "K"), Signal("mass", "K")),
        A=M([[-w - a, w], [w / 4, -w / 4]]), B=M([[1], [0]]), D=M([[1], [0]]), E=M([[1], [0]]),
        C=ExactMatrix.identity(2), N=ExactMatrix.zeros(2, 1), H=M([[1, 0]]),
        F=ExactMatrix.zeros(1, 1), Fw=ExactMatrix.zeros(1, 1),
    )  # fmt: skip


def thermal(
    edges: Sequence[tuple[int, int]] | NDArray[np.intp],
    units: int,
    seed: int = 0,
    limit: str | None = None,
    target: str = "0.9",
    kinds: int = 4,
) -> Network:
    """Zones on an undirected graph; each edge carries heat both ways with one of five invented strengths."""
    rng = np.random.default_rng(seed)
    made = tuple(zone(f"zone{k}", f"0.{1 + k % 4}", f"0.0{4 + k % 5}", limit) for k in range(kinds))
    kind = rng.integers(0, kinds, units).astype(np.int32)
    strengths = [Fraction(k, 50) for k in (1, 2, 3, 4, 5)]
    pairs = np.asarray(edges, dtype=np.int32).reshape(-1, 2)
    which = rng.integers(0, 5, len(pairs))
    to = np.concatenate([pairs[:, 0], pairs[:, 1]])
    source = np.concatenate([pairs[:, 1], pairs[:, 0]])
    which = np.concatenate([which, which])
    key = (kind[to].astype(np.int64) * kinds + kind[source]) * 5 + which
    sorts, form = np.unique(key, return_inverse=True)
    links = []
    for sort in sorts.tolist():
        g, ends = strengths[sort % 5], divmod(sort // 5, kinds)
        links.append(Link("air", f"zone{ends[1]}", "warmth", (), f"zone{ends[0]}", "draught", g, g))
    names = tuple(f"z{i}" for i in range(units))
    members = Members(
        names, kind, to, source, form.astype(np.int32), tuple((k,) for k in range(len(links))),
        tuple((k.name, {}) for k in made),
    )  # fmt: skip
    return Network(
        "Invented thermal zones", made, tuple(links), Goal(Fraction(target)), dimension=0, description="members",
        members=members,
    )  # fmt: skip


def grid(side: int) -> NDArray[np.intp]:
    """Edges of a square grid of side * side zones."""
    number = np.arange(side * side).reshape(side, side)
    across = np.stack([number[:, :-1].ravel(), number[:, 1:].ravel()], axis=1)
    down = np.stack([number[:-1].ravel(), number[1:].ravel()], axis=1)
    return np.concatenate([across, down])
