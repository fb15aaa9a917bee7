"""Members as graphs: networkx objects, GraphML and node-link JSON, in and out; and CSV tables out.

A node carries ``kind`` and the parameters that differ; an edge goes from the sending to the receiving unit and carries
the columns of ``members.LINK_COLUMNS`` other than from and to. An edge of an undirected graph is two links.

Law: ``read`` of what is written here gives a network with the same hash.
"""

from __future__ import annotations

import itertools
import json
from collections.abc import Iterable, Iterator, Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any
from xml.sax.saxutils import quoteattr

from synth.base.errors import InputError, Place
from synth.base.files import write_text
from synth.base.units import parse_unit
from synth.network.cuts import least_cells, section_of
from synth.network.graphml import EDGE, NODE, parse_graphml
from synth.network.members import LINK_COLUMNS, Records
from synth.network.model import Kind, Link, Network
from synth.network.tables import csv_cell
from synth.network.yaml_map import Problems

if TYPE_CHECKING:
    import networkx as nx

_ATTRIBUTES = tuple(name for name in LINK_COLUMNS if name not in ("from", "to"))
_IGNORED = ("id", "key", "label", "weight_")


def _text(value: object) -> str:
    """An attribute as a text: floats count as the decimal Python prints, truth values as true and false."""
    plain = getattr(value, "item", None)
    value = plain() if callable(plain) else value
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return repr(value) if isinstance(value, float) else str(value).strip()


def records_of(
    nodes: Iterable[tuple[str, Mapping[str, object]]],
    edges: Iterable[tuple[str, str, Mapping[str, object]]],
    directed: bool,
    problems: Problems,
    places: Mapping[tuple[str, int], Place] | None = None,
) -> Records:
    """The records of a graph; unknown attributes of edges are problems, those of nodes must be parameters."""
    node_list, edge_list = list(nodes), list(edges)
    ids = [_text(name) for name, _ in node_list]
    parameters = tuple(dict.fromkeys(a for _, data in node_list for a in data if a not in ("kind", "id")))
    found = places or {}

    def where(sort: str, number: int, column: str) -> tuple[str, Place | None]:
        if sort == "unit":
            return (f"node {ids[number][:40]!r}, {column}" if ids else "the graph"), found.get(("node", number))
        a, b, _ = edge_list[number]
        return f"edge {_text(a)[:40]!r} -> {_text(b)[:40]!r}, {column}", found.get(("edge", number))

    for number, (_, _, data) in enumerate(edge_list):
        for attribute in data:
            if attribute not in _ATTRIBUTES and attribute not in ("id", "key"):
                words, place = where("link", number, attribute)
                problems.add(f"{words}: unknown attribute; accepted are {', '.join(_ATTRIBUTES)}.", place)

    def units() -> Iterator[tuple[int, str, str, tuple[str, ...]]]:
        for number, (_, data) in enumerate(node_list):
            yield number, ids[number], _text(data.get("kind")), tuple(_text(data.get(p)) for p in parameters)

    def links() -> Iterator[tuple[int, Sequence[str]]]:
        for number, (a, b, data) in enumerate(edge_list):
            values = {name: _text(data.get(name)) for name in _ATTRIBUTES}
            for source, to in ((a, b),) if directed else ((a, b), (b, a)):
                row = {**values, "from": _text(source), "to": _text(to)}
                yield number, [row[name] for name in LINK_COLUMNS]

    return Records(parameters, units(), links(), where)


def records_of_networkx(graph: Any, problems: Problems) -> Records:
    """The records of a networkx graph (any of its four classes)."""
    return records_of(graph.nodes(data=True), graph.edges(data=True), bool(graph.is_directed()), problems)


def records_of_graphml(text: str, file: str, problems: Problems) -> Records | None:
    """The records of a GraphML text; None if it cannot be used (which is then recorded)."""
    parsed = parse_graphml(text, file, problems)
    if parsed is None:
        return None
    places = {(NODE, i): node.place for i, node in enumerate(parsed.nodes)}
    places |= {(EDGE, i): edge.place for i, edge in enumerate(parsed.edges)}
    return records_of(
        [(node.name, node.data) for node in parsed.nodes],
        [(edge.source, edge.to, edge.data) for edge in parsed.edges],
        parsed.directed,
        problems,
        places,
    )


def records_of_json(text: str, file: str, problems: Problems) -> Records | None:
    """The records of a node-link JSON text (``nodes`` with ``id``; ``edges`` or ``links`` with source and target)."""
    top = Place(file, 1, 1)
    try:
        data = json.loads(text, parse_float=str, parse_int=str, parse_constant=str)
    except json.JSONDecodeError as error:
        place = Place(file, error.lineno, error.colno)
        problems.add(f"this is not valid JSON: {error.msg}; check the commas and brackets up to here.", place)
        return None
    except RecursionError:
        problems.add("this JSON is nested too deeply; a graph needs a few levels.", top)
        return None
    nodes = data.get("nodes") if isinstance(data, dict) else None
    edges = (data.get("edges", data.get("links"))) if isinstance(data, dict) else None
    if not isinstance(nodes, list) or not isinstance(edges, list):
        problems.add("node-link JSON is one object with the lists 'nodes' and 'edges' (or 'links').", top)
        return None
    before = problems.count
    for sort, items, keys in (("nodes", nodes, ("id",)), ("edges", edges, ("source", "target"))):
        for number, item in enumerate(items):
            missing = [key for key in keys if not isinstance(item, dict) or key not in item]
            if missing:
                problems.add(f"{sort}[{number}]: the key {missing[0]!r} is missing in this object.", top)
            elif any(isinstance(value, (dict, list)) for value in item.values()):
                problems.add(f"{sort}[{number}]: a list or an object is not accepted as a value here.", top)
    if problems.count > before:
        return None
    return records_of(
        [(_text(n["id"]), {k: v for k, v in n.items() if k != "id"}) for n in nodes],
        [
            (_text(e["source"]), _text(e["target"]), {k: v for k, v in e.items() if k not in ("source", "target")})
            for e in edges
        ],
        data.get("directed", True) is not False,
        problems,
    )


def graph_of(network: Network, cells: int) -> nx.MultiDiGraph:
    """Members as a graph that can be read again; a pattern as a finite section for looking at."""
    import networkx as nx

    graph = nx.MultiDiGraph(title=network.title)
    if network.members is not None:
        graph.add_nodes_from(_nodes(network))
        graph.add_edges_from(_edges(network))
    elif network.rules:
        raise InputError("rules describe every wiring that obeys them, so there is no one graph to show.")
    elif network.edges:
        first = network.edges[0]
        whole = section_of(network, first, max(cells, least_cells(first)), cells)
        graph.add_nodes_from(_nodes(whole))
        graph.add_edges_from(_edges(whole, cut=True))
    else:
        _pattern(network, cells, graph)
    return graph


def _pattern(network: Network, cells: int, graph: nx.MultiDiGraph) -> None:
    def name(at: tuple[int, ...]) -> object:
        return at[0] if len(at) == 1 else at

    places = list(itertools.product(range(cells), repeat=network.dimension))
    for place in places:
        for kind in network.kinds:
            graph.add_node((kind.name, name(place)), kind=kind.name)
    for place in places:
        for link in network.links:
            source = tuple(a + b for a, b in zip(place, link.at, strict=True))
            if link.sort == "link" and all(0 <= c < cells for c in source):
                graph.add_edge(
                    (link.source_kind, name(source)), (link.kind, name(place)),
                    name=link.name, strength=float(link.strength),
                )  # fmt: skip


def _nodes(network: Network) -> Iterator[tuple[str, dict[str, str]]]:
    members = network.members
    assert members is not None
    data = [{"kind": base, **values} for base, values in members.origins]
    for name, kind in zip(members.names, members.kind.tolist(), strict=True):
        yield name, dict(data[kind])


def _edges(network: Network, cut: bool = False) -> Iterator[tuple[str, str, dict[str, str]]]:
    """The links as edges; of a ``cut`` network, those whose neighbour lies outside are left away."""
    members = network.members
    assert members is not None
    kinds = {kind.name: kind for kind in network.kinds}
    forms = [_form(tuple(network.links[i] for i in part), kinds) for part in members.parts]
    names = members.names
    for to, source, form in zip(members.to.tolist(), members.source.tolist(), members.form.tolist(), strict=True):
        data = forms[form]
        if source < 0 and cut:
            continue
        if source < 0:
            raise InputError("this network is a cut of a larger one (some neighbours lie outside), so no file has it.")
        if data is not None:
            yield names[source], names[to], dict(data)


def _form(group: tuple[Link, ...], kinds: Mapping[str, Kind]) -> dict[str, str] | None:
    """The columns that give these parts when they are read; None for parts that belong to the kind."""
    link = group[0]
    if link.sort != "link":
        return None
    source, target = kinds[link.source_kind], kinds[link.kind]
    offered = parse_unit(source.offers[source.index("offers", link.offer)].unit)
    wanted = parse_unit(target.takes[target.index("takes", link.take)].unit) / offered

    def quantity(value: Fraction) -> str:
        return f"{value * wanted.factor} {wanted.text}" if wanted.text != "1" else f"{value * wanted.factor}"

    data = {"name": link.name, "offer": link.offer, "take": link.take, "strength": quantity(link.strength)}
    if link.delay:
        data["delay"] = f"{link.delay} s"
    if not link.relative and len(group) == 1:
        return data
    own = parse_unit(target.offers[target.index("offers", link.offer)].unit).factor / offered.factor
    data |= {"relative": "true", "late": "neighbour"}
    own_part = group[1].strength if len(group) > 1 else Fraction(0)
    if link.strength * own != link.own_strength - own_part:
        raise InputError(
            f"the own part of the relative link {link.name!r} was scaled apart from the neighbour's, which no file "
            f"can say."
        )
    if link.weakens:
        data["weakens"] = "true"
    elif len(group) > 1 and link.own_strength == 0 and group[1].delay == link.delay:
        data["late"] = "difference"
    elif len(group) > 1:
        ends = sorted((link.strength, 2 * link.own_strength / own - link.strength))
        data["strength"] = f"{quantity(ends[0])}..{quantity(ends[1])}"
    return data


def write_node_link(network: Network, path: str | Path) -> Path:
    """Write members as node-link JSON; InputError if the network has no members."""
    nodes = [{"id": name, **data} for name, data in _nodes(_with_members(network))]
    edges = [{"source": a, "target": b, **data} for a, b, data in _edges(network)]
    document = {"directed": True, "multigraph": True, "graph": {"title": network.title}, "nodes": nodes, "edges": edges}
    return write_text(path, json.dumps(document, indent=1, ensure_ascii=False) + "\n")


def write_graphml(network: Network, path: str | Path) -> Path:
    """Write members as GraphML; InputError if the network has no members."""
    nodes, edges = list(_nodes(_with_members(network))), list(_edges(network))
    lines = ['<?xml version="1.0" encoding="UTF-8"?>', '<graphml xmlns="http://graphml.graphdrawing.org/xmlns">']
    keys: dict[tuple[str, str], str] = {}
    for sort, data in [(NODE, d) for _, d in nodes] + [(EDGE, d) for _, _, d in edges]:
        for name in data:
            if (sort, name) not in keys:
                keys[sort, name] = f"d{len(keys)}"
                lines.append(
                    f'  <key id="d{len(keys) - 1}" for="{sort}" attr.name={quoteattr(name)} attr.type="string"/>'
                )

    def values(sort: str, data: Mapping[str, str]) -> str:
        from xml.sax.saxutils import escape

        return "".join(f'<data key="{keys[sort, name]}">{escape(value)}</data>' for name, value in data.items())

    lines.append('  <graph edgedefault="directed">')
    lines += [f"    <node id={quoteattr(name)}>{values(NODE, data)}</node>" for name, data in nodes]
    lines += [
        f"    <edge source={quoteattr(a)} target={quoteattr(b)}>{values(EDGE, data)}</edge>" for a, b, data in edges
    ]
    return write_text(path, "\n".join([*lines, "  </graph>", "</graphml>", ""]))


def write_csv(network: Network, units: str | Path, links: str | Path) -> tuple[Path, Path]:
    """Write members as the two tables ``units`` and ``links``; InputError if the network has no members."""
    nodes, edges = list(_nodes(_with_members(network))), list(_edges(network))
    columns = list(dict.fromkeys(name for _, data in nodes for name in data))
    rows = [",".join(["id", *columns])]
    rows += [",".join(map(csv_cell, [name, *(data.get(c, "") for c in columns)])) for name, data in nodes]
    table = [",".join(LINK_COLUMNS)]
    for a, b, data in edges:
        row = {**data, "from": a, "to": b}
        table.append(",".join(csv_cell(row.get(c, "")) for c in LINK_COLUMNS))
    return write_text(units, "\n".join(rows) + "\n"), write_text(links, "\n".join(table) + "\n")


def _with_members(network: Network) -> Network:
    network.refuse_beyond("writing a table of units and links", "members")
    return network
