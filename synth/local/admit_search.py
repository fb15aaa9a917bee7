"""Gains for one kind against promised sizes: a small network of that kind alone that stands for its surroundings.

With what arrives, v_l, and the room r_k that listeners leave, the kind is fit where sum_l p_kl v_l <= target r_k for
every offer k. A pattern of the kind alone, in which each of its n offers k' enters each take l with the strength
v_l / (n r_k'), has the matrix M = (p v) (1/r)' / n and so the radius mean_k (p_k v) / r_k: small where the kind is fit.
It is what the search makes small; whether the kind is admitted is decided elsewhere, exactly.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from fractions import Fraction

from synth.base.progress import Listener
from synth.local.designing import design
from synth.network.gains import GainSet
from synth.network.model import Kind, Link, Network


def local_gains(
    joining: Network,
    kind: Kind,
    own: Sequence[Link],
    arriving: Mapping[str, float],
    room: Mapping[str, float],
    share: Fraction,
    aim: Fraction,
    seed: int,
    progress: Listener,
) -> GainSet:
    """Gains of ``kind``, which ``own`` links enter, for what arrives and the room of its offers.

    Within the goal's bounds and ``share`` of its actuator limits.

    Raises what ``design`` raises: SolverFailure where nothing stabilises it.
    """
    links: list[Link] = []
    largest = max(arriving.values(), default=0.0)
    offers = [offer.name for offer in kind.offers]
    for take in kind.takes:
        strength = arriving[take.name] if largest > 0 else 1.0
        for offer in offers:
            value = Fraction(f"{strength / (len(offers) * room[offer]):.6g}")
            links.append(Link("surroundings", kind.name, offer, (1,), kind.name, take.name, value))
    # The unit's own part of relative links belongs to its dynamics and stays; the neighbour's part is in what arrives.
    links += [
        replace(
            link, name="own", source_kind=kind.name, at=(1,), strength=Fraction(0), delay=Fraction(0), weakens=False,
            choice="",
        )
        for link in own
        if link.relative
    ]  # fmt: skip
    links += [replace(link, at=(0,)) for link in own if link.sort != "link" and link.source_kind == kind.name]
    inputs = tuple(a if a.limit is None else replace(a, limit=a.limit * share) for a in kind.inputs)
    kind = replace(kind, inputs=inputs)
    stand_in = Network(
        f"{kind.name} among promised sizes",
        (kind,),
        tuple(links),
        replace(joining.goal, aim="radius", aim_of=()),
        joining.simulation,
        dimension=1,
    )
    found = design(stand_in, target=float(aim), seed=seed, starts=4, progress=progress, check_obstruction=False)
    return found.gains[kind.name]
