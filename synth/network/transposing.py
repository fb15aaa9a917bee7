"""The two questions of theory (26) for members, as one: what is not seen, and, transposed, what is not reached.

Law: the transposed network has offers for takes, inputs for sensors, and every link the other way round.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

from synth.network.model import Kind, Network
from synth.network.rational import Rows, transposed

Couplings = Mapping[int, list[tuple[int, int, int, Fraction]]]


@dataclass(frozen=True)
class Side:
    """One of the two questions, in the words of 'not seen': matrices per kind, and links as signals received.

    ``entered[k]`` are the takes of kind k at which anything may arrive; ``couplings[i]`` lists (take, sending unit,
    offer, exact strength) of unit i, own parts included, and is worked out when it is asked for.
    """

    cause: str
    kind: Sequence[int]
    A: Sequence[Rows]
    D: Sequence[Rows]
    H: Sequence[Rows]
    F: Sequence[Rows]
    C: Sequence[Rows]
    N: Sequence[Rows]
    entered: Sequence[set[int]]
    listed: Callable[[], Couplings]

    @cached_property
    def couplings(self) -> Couplings:
        """What every unit receives."""
        return self.listed()


def _couplings(network: Network, across: bool) -> Couplings:
    """The links as signals received; ``across``: of the transposed network, where offers receive and takes send."""
    members = network.members
    assert members is not None
    found: dict[int, list[tuple[int, int, int, Fraction]]] = {}
    ends = []
    for link in network.links:
        source, target = network.kind(link.source_kind), network.kind(link.kind)
        own = target.index("offers", link.offer) if link.relative else -1
        take, offer = target.index("takes", link.take), source.index("offers", link.offer)
        ends.append((take, offer, own, link.strength, -link.own_strength, link.sort == "link"))
    to, source_of, sort = members.expanded()
    for i, j, k in zip(to.tolist(), source_of.tolist(), sort.tolist(), strict=True):
        take, offer, own, g, own_g, counts = ends[k]
        if counts and j >= 0 and g:
            entry = (j, (offer, i, take, g)) if across else (i, (take, j, offer, g))
            found.setdefault(entry[0], []).append(entry[1])
        if counts and own >= 0:
            found.setdefault(i, []).append((own, i, take, own_g) if across else (take, i, own, own_g))
    return found


def _entered(network: Network, across: bool) -> list[set[int]]:
    """Per kind, the takes at which links arrive (``across``: the offers that links read, own parts included)."""
    place = {kind.name: k for k, kind in enumerate(network.kinds)}
    found: list[set[int]] = [set() for _ in network.kinds]
    ends = {
        (link.source_kind, link.offer, link.kind, link.take, link.relative)
        for link in network.links
        if link.sort == "link"
    }
    for source, offer, target, take, relative in ends:
        if not across:
            found[place[target]].add(network.kind(target).index("takes", take))
            continue
        found[place[source]].add(network.kind(source).index("offers", offer))
        if relative:
            found[place[target]].add(network.kind(target).index("offers", offer))
    return found


def sides(network: Network) -> Iterator[Side]:
    """The network as it is, and transposed."""
    members, kinds = network.members, network.kinds
    assert members is not None
    kind = members.kind.tolist()

    def rows(name: str) -> list[Rows]:
        return [[list(r) for r in getattr(k, name).rows] for k in kinds]

    def across(name: str) -> list[Rows]:
        return [transposed(getattr(k, name).rows, getattr(k, name).shape[1]) for k in kinds]

    heard = [_heard(kind_, network) for kind_ in kinds]
    C = [[r for i, r in enumerate(m) if i in h] for m, h in zip(rows("C"), heard, strict=True)]
    N = [[r for i, r in enumerate(m) if i in h] for m, h in zip(rows("N"), heard, strict=True)]
    yield Side(
        "not seen",
        kind,
        rows("A"),
        rows("D"),
        rows("H"),
        rows("F"),
        C,
        N,
        _entered(network, False),
        lambda: _couplings(network, False),
    )
    drive = [
        [[Fraction(0)] * len(k.offers) for _ in k.inputs] if k.Fu is None else transposed(k.Fu.rows, len(k.inputs))
        for k in kinds
    ]
    yield Side(
        "not reached",
        kind,
        across("A"),
        across("H"),
        across("D"),
        across("F"),
        across("B"),
        drive,
        _entered(network, True),
        lambda: _couplings(network, True),
    )


def _heard(kind: Kind, network: Network) -> set[int]:
    """The sensors that some actuator of the kind may use."""
    uses = network.goal.uses.get(kind.name, {})
    used: set[int] = set()
    for actuator in kind.inputs:
        allowed = uses.get(actuator.name)
        used |= {i for i, s in enumerate(kind.sensors) if allowed is None or s.name in allowed}
    return used
