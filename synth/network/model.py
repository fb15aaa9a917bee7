"""The frozen description of a network that every later stage works on.

Symbols (docs/notation.md): for a unit with states x, inputs u, taken signals v, disturbances w

    x' = A x + B u + D v + E w      z = H x + F v + Fw w  (offered)      y = C x + N v  (what its controller reads)

All numbers are exact rationals in the units the user declared; time is in seconds.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.base.exact import ExactMatrix
from synth.base.provenance import canonical, sha256

if TYPE_CHECKING:
    import networkx as nx


@dataclass(frozen=True)
class Signal:
    """A named scalar with its physical unit as the user wrote it; ``band`` is its allowed peak (None: no bound)."""

    name: str
    unit: str
    band: Fraction | None = None


@dataclass(frozen=True)
class Actuator:
    """An input; ``limit`` is the largest absolute command it can carry out (None: unlimited)."""

    name: str
    unit: str
    limit: Fraction | None = None


@dataclass(frozen=True)
class Disturbance:
    """An outside signal with the largest absolute value it is declared to reach."""

    name: str
    unit: str
    peak: Fraction


@dataclass(frozen=True)
class Kind:
    """One kind of unit: its signals and its exact matrices (shapes by number of states n, inputs m, sensors p, ...)."""

    name: str
    states: tuple[Signal, ...]
    inputs: tuple[Actuator, ...]
    disturbances: tuple[Disturbance, ...]
    takes: tuple[Signal, ...]
    offers: tuple[Signal, ...]
    sensors: tuple[Signal, ...]
    A: ExactMatrix  # n x n
    B: ExactMatrix  # n x m
    D: ExactMatrix  # n x takes
    E: ExactMatrix  # n x disturbances
    C: ExactMatrix  # sensors x n
    N: ExactMatrix  # sensors x takes: a sensor that hears what a link delivers
    H: ExactMatrix  # offers x n
    F: ExactMatrix  # offers x takes
    Fw: ExactMatrix  # offers x disturbances
    equations: Mapping[str, str] = field(default_factory=dict)

    def index(self, group: str, name: str) -> int:
        """Position of ``name`` among the ``group`` ('states', 'inputs', ...); KeyError if it is not there."""
        for i, signal in enumerate(getattr(self, group)):
            if signal.name == name:
                return i
        raise KeyError(f"{self.name} has no {name!r} among its {group}")


@dataclass(frozen=True)
class Link:
    """A directed connection repeated along the pattern: receiving unit i takes from the unit at i + ``at``.

    ``strength`` multiplies the neighbour's offered signal; ``own_strength`` multiplies the unit's own fresh value,
    which is subtracted (equal to ``strength`` for a relative link as written, zero for an absolute one).
    ``delay`` bounds the age, in seconds, of the neighbour's value that is used; zero means always fresh.
    """

    name: str
    source_kind: str
    offer: str
    at: tuple[int, ...]
    kind: str
    take: str
    strength: Fraction
    own_strength: Fraction = Fraction(0)
    delay: Fraction = Fraction(0)

    @property
    def relative(self) -> bool:
        """Whether the unit subtracts its own value (case R1: own part fresh, the neighbour's part may be late)."""
        return self.own_strength != 0


@dataclass(frozen=True)
class Goal:
    """What the design must reach; rates in 1/s, gain bounds in (actuator unit)/(sensor unit).

    ``gain_bounds[kind][actuator][sensor]`` bounds one entry's absolute value; ``uses[kind][actuator]`` lists the
    sensors an actuator may use (absent: all). ``period`` is the controller's sample period in seconds, printed in the
    gain table; the proofs of this version are about the continuous loop.
    """

    target: Fraction = Fraction(9, 10)
    slowest: Fraction | None = None
    fastest: Fraction | None = None
    period: Fraction | None = None
    gain_bounds: Mapping[str, Mapping[str, Mapping[str, Fraction]]] = field(default_factory=dict)
    uses: Mapping[str, Mapping[str, tuple[str, ...]]] = field(default_factory=dict)


@dataclass(frozen=True)
class SimulationPlan:
    """How large and how long the simulated section is; it never enters a proof."""

    units: int = 50
    seconds: Fraction = Fraction(60)


@dataclass(frozen=True)
class Network:
    """A cell with one unit of each kind, repeated along the lattice Z^dimension without end."""

    title: str
    kinds: tuple[Kind, ...]
    links: tuple[Link, ...]
    goal: Goal = Goal()
    simulation: SimulationPlan = SimulationPlan()
    dimension: int = 1
    description: str = "pattern"
    file: str | None = None

    @property
    def units(self) -> int | None:
        """Number of units, None for a pattern: it has no end."""
        return None

    def kind(self, name: str) -> Kind:
        """The kind of that name; KeyError if there is none."""
        for kind in self.kinds:
            if kind.name == name:
                return kind
        raise KeyError(f"no kind named {name!r}")

    def classes(self) -> tuple[str, ...]:
        """Names of the link classes in order of first appearance."""
        return tuple(dict.fromkeys(link.name for link in self.links))

    def scaled(self, factor: Fraction, classes: tuple[str, ...] | None = None, own_parts: bool = True) -> Network:
        """The same network with link strengths times ``factor`` (of the given classes, or all).

        ``own_parts`` says whether the unit's own part of a relative link grows with it.
        """
        changed = tuple(
            replace(
                link,
                strength=link.strength * factor,
                own_strength=link.own_strength * factor if own_parts else link.own_strength,
            )
            if classes is None or link.name in classes
            else link
            for link in self.links
        )
        return replace(self, links=changed)

    def model_document(self) -> dict[str, object]:
        """Exact plain data of everything a proof is about (no title, no goal, no simulation)."""
        return {
            "description": self.description,
            "dimension": self.dimension,
            "kinds": [_kind_document(kind) for kind in self.kinds],
            "links": [_link_document(link) for link in self.links],
        }

    @property
    def hash(self) -> str:
        """SHA-256 of the canonical model document: equal for equal networks however they were written."""
        return sha256(canonical(self.model_document()))

    def to_networkx(self, cells: int = 3) -> nx.MultiDiGraph:
        """A finite section of the pattern as a networkx graph with ``cells`` cells and open ends, for looking at."""
        import networkx as nx

        graph = nx.MultiDiGraph(title=self.title)
        for i in range(cells):
            for kind in self.kinds:
                graph.add_node((kind.name, i), kind=kind.name)
        for i in range(cells):
            for link in self.links:
                j = i + link.at[0]
                if 0 <= j < cells:
                    graph.add_edge((link.source_kind, j), (link.kind, i), name=link.name, strength=float(link.strength))
        return graph


def _text(value: Fraction | None) -> str | None:
    return None if value is None else str(value)


def _kind_document(kind: Kind) -> dict[str, object]:
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
    return document


def _link_document(link: Link) -> dict[str, object]:
    return {
        "name": link.name,
        "from": {"kind": link.source_kind, "offer": link.offer},
        "at": list(link.at),
        "to": {"kind": link.kind, "take": link.take},
        "strength": str(link.strength),
        "own_strength": str(link.own_strength),
        "delay": str(link.delay),
    }
