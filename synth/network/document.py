"""The exact plain data of a network: what its hash is taken of, and what tells two networks apart.

Laws: a network without edges, rules and members has the document it always had, so hashes in old certificates stay
good; the documents of rules and members do not depend on the order in which units, kinds and links are listed.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from typing import Any

from synth.base.provenance import canonical
from synth.network.layout import Edge
from synth.network.model import Kind, Link, Network, Signal


def model_document(network: Network) -> dict[str, object]:
    """Everything a proof is about, as plain data with exact numbers."""
    kinds = [kind_document(kind) for kind in network.kinds]
    links = [link_document(link) for link in network.links]
    document: dict[str, object] = {"description": network.description, "dimension": network.dimension}
    if network.members is not None:
        return document | _members_document(network, kinds, links)
    if network.rules:
        kinds.sort(key=_name)
        links.sort(key=canonical)
        rules = [{"name": r.name, "kind": r.kind, "take": r.take, "most": r.most} for r in network.rules]
        return document | {"kinds": kinds, "links": links, "rules": sorted(rules, key=canonical)}
    document |= {"kinds": kinds, "links": links}
    if network.cell is not None:
        document["cell"] = list(network.cell)
    if network.edges:
        document["edges"] = sorted((_edge_document(edge) for edge in network.edges), key=canonical)
    return document


def sorted_document(network: Network) -> dict[str, object]:
    """The model document with kinds, links and cell in alphabetical order."""
    document = dict(model_document(network))
    for key, by in (("kinds", _name), ("links", canonical), ("cell", str)):
        value: Any = document.get(key)
        if isinstance(value, list) and network.members is None:
            document[key] = sorted(value, key=by)
    return document


def _name(document: dict[str, object]) -> str:
    return str(document["name"])


def _text(value: Fraction | None) -> str | None:
    return None if value is None else str(value)


def _edge_document(edge: Edge) -> dict[str, object]:
    units = [{"name": u.name, "kind": u.kind, "at": u.at, "instead_of": u.instead_of} for u in edge.units]
    links = [
        {"to_place": e.to, "slot": e.slot, "source_slot": e.source_slot, **link_document(e.link)} for e in edge.links
    ]
    across = {"axis": edge.axis} if edge.axis else {}
    return {"side": edge.side, **across, "units": sorted(units, key=canonical), "links": sorted(links, key=canonical)}


def _ranks(items: list[Any], key: Callable[[Any], str]) -> tuple[list[int], list[int]]:
    """The order that sorts ``items``, and the place of each item in it."""
    texts = [key(item) for item in items]
    order = sorted(range(len(items)), key=texts.__getitem__)
    ranks = [0] * len(items)
    for rank, i in enumerate(order):
        ranks[i] = rank
    return order, ranks


def _members_document(
    network: Network, kinds: list[dict[str, object]], links: list[dict[str, object]]
) -> dict[str, object]:
    """Units in the order of their names; every link as [its sort, receiving unit, sending unit], sorted."""
    import numpy as np

    members = network.members
    assert members is not None  # the caller has looked
    used = sorted(set(members.kind.tolist()))
    kind_order, kind_ranks = _ranks([kinds[i] for i in used], _name)
    to, source, sort = members.expanded()
    present = sorted(set(sort.tolist()))
    text_of = {i: canonical(links[i]) for i in present}
    by_text = {text: links[i] for i, text in text_of.items()}
    texts = sorted(by_text)
    known = {text: i for i, text in enumerate(texts)}
    order, ranks = _ranks(list(members.names), str)
    rank = np.array([*ranks, -1], dtype=np.int64)  # the last entry answers for source -1
    sort_rank = np.full(len(links) + 1, -1, dtype=np.int64)
    for i in present:
        sort_rank[i] = known[text_of[i]]
    rows = np.stack([sort_rank[sort], rank[to], rank[source]], axis=1) if len(to) else np.zeros((0, 3), dtype=np.int64)
    rows = rows[np.lexsort((rows[:, 2], rows[:, 1], rows[:, 0]))]
    place = {j: kind_ranks[n] for n, j in enumerate(used)}
    kind_of = members.kind.tolist()
    return {
        "kinds": [kinds[used[i]] for i in kind_order],
        "links": [by_text[text] for text in texts],
        "members": {
            "units": [members.names[i] for i in order],
            "kind_of": [place[kind_of[i]] for i in order],
            "links": rows.tolist(),
        },
    }


def kind_document(kind: Kind) -> dict[str, object]:
    """Signals and exact matrices of a kind; the texts of its equations are not part of it."""

    def signals(group: tuple[Signal, ...]) -> list[dict[str, object]]:
        return [{"name": s.name, "in": s.unit, "band": _text(s.band)} for s in group]

    document: dict[str, object] = {
        "name": kind.name,
        "states": signals(kind.states),
        "inputs": [{"name": a.name, "in": a.unit, "limit": _text(a.limit)} for a in kind.inputs],
        "disturbances": [{"name": w.name, "in": w.unit, "peak": str(w.peak)} for w in kind.disturbances],
        "takes": signals(kind.takes),
        "offers": signals(kind.offers),
        "sensors": signals(kind.sensors),
    }
    for name in ("A", "B", "D", "E", "C", "N", "H", "F", "Fw"):
        document[name] = getattr(kind, name).texts()
    if kind.Fu is not None:
        document["Fu"] = kind.Fu.texts()
    return document


def link_document(link: Link) -> dict[str, object]:
    """A link with exact numbers; what is new since the first version stands there only where it is used."""
    return {
        "name": link.name,
        "from": {"kind": link.source_kind, "offer": link.offer},
        "at": list(link.at),
        "to": {"kind": link.kind, "take": link.take},
        "strength": str(link.strength),
        "own_strength": str(link.own_strength),
        "delay": str(link.delay),
        **({} if link.sort == "link" else {"sort": link.sort}),
        **({"weakens": True} if link.weakens else {}),
        **({"own_part": True} if link.own_part else {}),
        **({"choice": link.choice} if link.choice else {}),
    }
