"""Wirings under rules, drawn at random, and links that weaken at random: what may change while a network runs.

Under relative rules the proof folds the largest intake; a unit that hears fewer sources subtracts less than that. What
runs here is the wiring itself: every link that is there subtracts the unit's own value once.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np

from synth.gain.plan import Wiring
from synth.network.model import Link, Network

Random = np.random.Generator


def random_wiring(network: Network, count: int, rng: Random, full: bool = False) -> Wiring:
    """``count`` units of each kind, each with as many sources per rule as chance gives, never more than allowed.

    ``full``: always as many as allowed. A unit may hear any unit of a source kind, itself included where there is no
    other. The links' strengths are those of one link. Law: no unit has more arrivals of a rule than ``most``.
    """
    kinds = network.kinds
    kind = np.repeat(np.arange(len(kinds)), count)
    names = tuple(f"{kinds[k].name} {i}" for k in range(len(kinds)) for i in range(count))
    first = {one.name: k * count for k, one in enumerate(kinds)}
    links: list[Link] = []
    to, source, link = [], [], []

    def add(one: Link, receivers: np.ndarray, senders: np.ndarray) -> None:
        to.append(receivers)
        source.append(senders)
        link.append(np.full(len(receivers), len(links)))
        links.append(one)

    most = {rule.name: rule.most for rule in network.rules}
    # The own part of a late difference is listed for the largest intake, so such a rule is always used to the full.
    always = {one.name for one in network.links if one.own_part and not one.choice}
    choices: dict[str, list[Link]] = {}
    for one in network.links:
        if one.choice:
            choices.setdefault(one.choice, []).append(one)
    for name, options in choices.items():
        units = first[options[0].kind] + np.arange(count)
        own = max((o.own_strength for o in options), key=abs)
        heard = np.full(count, most[name]) if full or name in always else rng.integers(0, most[name] + 1, count)
        receivers = np.repeat(units, heard)
        which = rng.integers(0, len(options), receivers.size)
        single = Fraction(1, most[name])
        for n, option in enumerate(options):
            mine = receivers[which == n]
            senders = first[option.source_kind] + rng.integers(0, count, mine.size)
            if count > 1:  # no unit hears itself
                base = first[option.source_kind]
                senders = np.where(senders == mine, base + (senders - base + 1) % count, senders)
            weak = replace(
                option,
                choice="",
                strength=option.strength * single,
                own_strength=own * single,
                weakens=bool(own),
                at=(),
            )
            add(weak, mine, senders)
            if own:
                # What the proof folds and this unit does not hear: a link whose strength has fallen to nothing.
                lacking = np.repeat(units, most[name] - heard) if n == 0 else units[:0]
                add(
                    replace(weak, strength=Fraction(0), name=f"{weak.name} (absent)"),
                    lacking,
                    np.full(len(lacking), -1),
                )
    for one in network.links:
        if not one.choice:
            units = first[one.kind] + np.arange(count)
            add(replace(one, at=()), units, units)
    joined = [
        np.concatenate(part).astype(np.intp) if part else np.zeros(0, dtype=np.intp) for part in (to, source, link)
    ]
    return Wiring("rules", kinds, tuple(links), names, kind, *joined)


def random_shares(weak: np.ndarray, rng: Random) -> np.ndarray:
    """A strength between none and all of it for every arrival: a third is gone, a third whole, a third between."""
    size = weak.size
    sort = rng.integers(0, 3, size)
    share = np.where(sort == 0, 0.0, np.where(sort == 1, 1.0, rng.uniform(0.0, 1.0, size)))
    return np.where(weak, share, 1.0)
