"""GraphML read event by event, so that every node and edge has its place and nothing is loaded from anywhere.

Accepted is the flat part of the format: keys, one graph, nodes, edges and their data. A DOCTYPE, nested graphs, ports
and hyperedges are refused.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from xml.parsers import expat

from synth.base.errors import Place
from synth.network.yaml_map import Problems

NODE, EDGE = "node", "edge"


@dataclass(frozen=True)
class GraphNode:
    """A node with its data by attribute name."""

    name: str
    place: Place
    data: dict[str, str]


@dataclass(frozen=True)
class GraphEdge:
    """An edge with its data by attribute name."""

    source: str
    to: str
    place: Place
    data: dict[str, str]


@dataclass
class Graph:
    """What a GraphML text holds."""

    directed: bool = True
    nodes: list[GraphNode] = field(default_factory=list)
    edges: list[GraphEdge] = field(default_factory=list)


class _Stop(Exception):
    """Ends the parse."""


class _Handler:
    """Collects nodes and edges from parser events."""

    def __init__(self, file: str, problems: Problems) -> None:
        self.file = file
        self.problems = problems
        self.graph = Graph()
        self.graphs = 0
        self.keys: dict[str, tuple[str, str]] = {}  # id -> (for, attribute)
        self.defaults: dict[tuple[str, str], str] = {}
        self.key = ""
        self.data_key = ""
        self.text: list[str] | None = None
        self.current: GraphNode | GraphEdge | None = None
        self.parser = expat.ParserCreate(namespace_separator=" ")
        self.parser.buffer_text = True
        self.parser.StartElementHandler = self.start
        self.parser.EndElementHandler = self.end
        self.parser.CharacterDataHandler = self.characters
        self.parser.StartDoctypeDeclHandler = self.doctype

    def place(self) -> Place:
        return Place(self.file, self.parser.CurrentLineNumber, self.parser.CurrentColumnNumber + 1)

    def refuse(self, sentence: str) -> _Stop:
        self.problems.add(sentence, self.place())
        return _Stop()

    def doctype(self, *_: object) -> None:
        raise self.refuse("a DOCTYPE is not accepted in GraphML here; take it out.")

    def characters(self, text: str) -> None:
        if self.text is not None:
            self.text.append(text)

    def needed(self, attributes: dict[str, str], name: str, element: str) -> str:
        if name not in attributes:
            raise self.refuse(f"<{element}> needs the attribute {name!r}.")
        return attributes[name]

    def start(self, name: str, attributes: dict[str, str]) -> None:
        element = name.rpartition(" ")[2]
        if element == "key":
            self.key = self.needed(attributes, "id", element)
            self.keys[self.key] = (attributes.get("for", "all"), attributes.get("attr.name", self.key))
        elif element == "graph":
            self.graphs += 1
            if self.graphs > 1:
                raise self.refuse("a second or nested graph starts here; accepted is one flat graph.")
            self.graph.directed = attributes.get("edgedefault", "directed") != "undirected"
        elif element == NODE:
            self.current = GraphNode(self.needed(attributes, "id", element), self.place(), {})
        elif element == EDGE:
            ends = self.needed(attributes, "source", element), self.needed(attributes, "target", element)
            if (attributes.get("directed", "true") == "true") != self.graph.directed and "directed" in attributes:
                raise self.refuse("an edge of another direction than the graph's is not accepted; write two edges.")
            self.current = GraphEdge(*ends, self.place(), {})
        elif element == "data":
            self.data_key, self.text = self.needed(attributes, "key", element), []
        elif element == "default":
            self.text = []
        elif element in ("hyperedge", "port", "endpoint"):
            raise self.refuse(f"<{element}> is not accepted; a network has nodes and edges.")

    def end(self, name: str) -> None:
        element = name.rpartition(" ")[2]
        text = "".join(self.text or []).strip()
        if element == "data":
            if self.current is not None:
                if self.data_key not in self.keys:
                    raise self.refuse(f"the key {self.data_key[:40]!r} is not declared by a <key> element.")
                self.current.data[self.keys[self.data_key][1]] = text
            self.text = None
        elif element == "default":
            sort, attribute = self.keys.get(self.key, ("all", self.key))
            for each in (NODE, EDGE) if sort == "all" else (sort,):
                self.defaults[each, attribute] = text
            self.text = None
        elif element == NODE and isinstance(self.current, GraphNode):
            self.graph.nodes.append(self.current)
            self.fill(NODE)
        elif element == EDGE and isinstance(self.current, GraphEdge):
            self.graph.edges.append(self.current)
            self.fill(EDGE)

    def fill(self, sort: str) -> None:
        """Defaults for what the element did not say."""
        for (each, attribute), text in self.defaults.items():
            if each == sort and self.current is not None:
                self.current.data.setdefault(attribute, text)
        self.current = None


def parse_graphml(text: str, file: str, problems: Problems) -> Graph | None:
    """Read a GraphML text; what is wrong is added to ``problems``, and None returned if nothing can be used."""
    handler = _Handler(file, problems)
    try:
        handler.parser.Parse(text.encode("utf-8"), True)
    except _Stop:
        return None
    except expat.ExpatError as error:
        problems.add(
            f"this is not valid XML: {expat.errors.messages.get(error.code, 'it cannot be read')}; check the tags up "
            f"to here.",
            Place(file, error.lineno, error.offset + 1),
        )
        return None
    if not handler.graphs:
        problems.add("there is no <graph> in this file; is it GraphML?", Place(file, 1, 1))
        return None
    return handler.graph
