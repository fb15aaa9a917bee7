"""The frozen description of a network that every later stage works on.

Symbols (docs/notation.md): for a unit with states x, inputs u, taken signals v, disturbances w

    x' = A x + B u + D v + E w      z = H x + F v + Fw w  (offered)      y = C x + N v  (what its controller reads)

All numbers are exact rationals in the units the user declared; time is in seconds.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.base.provenance import canonical, sha256
from synth.network.layout import Edge, Members, Rule
from synth.network.rounding import Rounding

if TYPE_CHECKING:
    import networkx as nx

    from synth.network.controller import Controller
    from synth.network.dynamics import Dynamics
    from synth.network.hop_wish import HopWish

_DESCRIPTIONS = {
    "pattern": ("a pattern", "patterns"),
    "edge pattern": ("a pattern with an edge", "edge patterns"),
    "rules": ("rules", "networks given by rules"),
    "members": ("members", "members"),
}


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
class SelfLink:
    """An internal connection of a unit to itself that stands for a tolerance or a nonlinear term (theory section 6).

    ``sort`` is 'tolerance' or 'curve'; ``strength`` bounds |what is taken| / |what is offered| at every time.
    """

    offer: str
    take: str
    strength: Fraction
    sort: str


@dataclass(frozen=True)
class Kind:
    """One kind of unit: its signals and its exact matrices (shapes by number of states n, inputs m, sensors p, ...).

    ``group`` names the gain set that the kind's controllers carry; kinds of one group carry the same gains, as the
    places of a cell do that hold units of one declared kind. Left empty, it becomes the kind's own name.
    """

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
    Fu: ExactMatrix | None = None  # offers x inputs: feed-through from the unit's own commands (None: none)
    inner: tuple[SelfLink, ...] = ()  # what tolerances and nonlinear terms add; every network of this kind has them
    dynamics: Dynamics | None = field(
        default=None, compare=False, repr=False
    )  # the equations as written, if not linear
    group: str = ""
    controller: Controller | None = None  # which states, inputs and sensors its controller makes (None: it has none)

    def __post_init__(self) -> None:
        """A kind without a group is a group of its own."""
        if not self.group:
            object.__setattr__(self, "group", self.name)

    def self_links(self, dimension: int) -> tuple[Link, ...]:
        """``inner`` as links of a network whose links have ``dimension`` whole numbers in ``at`` (all zero here)."""
        at = (0,) * dimension
        return tuple(
            Link(s.take, self.name, s.offer, at, self.name, s.take, s.strength, sort=s.sort) for s in self.inner
        )

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
    ``sort`` says where the link comes from: 'link' is a connection the user wrote; 'tolerance' and 'curve' are
    self-links (``at`` all zero) that stand for an uncertain parameter or a nonlinear term; they are never scaled as
    couplings. ``at`` has one whole number per dimension of the pattern, and none in networks given by members or rules.

    ``weakens`` (case R2): the strength may be anything from zero to ``strength``, changing at any time; the row entry
    is p max(|strength| s_source, |own_strength| s_self) with the own part folded. ``own_part``: a self-link that
    carries the unit's own value of a relative link which is not folded (case R3, or the width of an interval of
    strengths). ``choice``: links of one kind that share a choice are alternatives, and a row counts the largest of
    their terms only.

    Law: taken literally, the links of one written link are the member of its class with the largest absolute strength.
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
    sort: str = "link"
    weakens: bool = False
    own_part: bool = False
    choice: str = ""

    @property
    def relative(self) -> bool:
        """Whether the unit subtracts its own value (case R1: own part fresh, the neighbour's part may be late)."""
        return self.own_strength != 0


@dataclass(frozen=True)
class Goal:
    """What the design must reach; rates in 1/s, gain bounds in (actuator unit)/(sensor unit).

    ``gain_bounds[kind][actuator][sensor]`` bounds one entry's absolute value; ``uses[kind][actuator]`` lists the
    sensors an actuator may use (absent: all). ``period`` is the controller's sample period and
    ``computation_delay`` the time from a sample to its command in force, in seconds, 0 <= delay <= period; ``rounding``
    is what the code rounds: the firmware route proves the loop with them, the other routes and all margins are about
    the continuous loop. ``aim`` is what the design makes small:
    'radius', or, with the radius no larger than the target, 'effort' (the guaranteed peak of the actuators) or 'peak'
    (the guaranteed peak of the signals ``aim_of``, pairs of kind and signal). ``hop``: what is asked for instead of a
    proof of calm, for strings that see only gaps.
    """

    target: Fraction = Fraction(9, 10)
    slowest: Fraction | None = None
    fastest: Fraction | None = None
    period: Fraction | None = None
    gain_bounds: Mapping[str, Mapping[str, Mapping[str, Fraction]]] = field(default_factory=dict)
    uses: Mapping[str, Mapping[str, tuple[str, ...]]] = field(default_factory=dict)
    aim: str = "radius"
    aim_of: tuple[tuple[str, str], ...] = ()
    hop: HopWish | None = None
    computation_delay: Fraction = Fraction(0)
    rounding: Rounding = field(default_factory=Rounding)


@dataclass(frozen=True)
class SimulationPlan:
    """How large and how long the simulated section is; it never enters a proof."""

    units: int = 50
    seconds: Fraction = Fraction(60)


@dataclass(frozen=True)
class Network:
    """Units of some kinds and the links between them, by one of four descriptions (theory section 1).

    'pattern': a cell with one unit of each kind, repeated along the lattice Z^dimension without end. Where a cell has
    several units of one declared kind, each of its places is a kind here, and their ``group`` is the same.
    'edge pattern': the same on half lines (half planes, half spaces), with the ``edges``; ``cell`` names the kinds that
    make up the cell.
    'rules': every wiring in which no unit receives more than its ``rules`` allow, of any size, rewired at any time.
    'members': the units and links of ``members``; ``links`` then holds each sort of link once.
    """

    title: str
    kinds: tuple[Kind, ...]
    links: tuple[Link, ...]
    goal: Goal = Goal()
    simulation: SimulationPlan = SimulationPlan()
    dimension: int = 1
    description: str = "pattern"
    file: str | None = None
    edges: tuple[Edge, ...] = ()
    cell: tuple[str, ...] | None = None
    rules: tuple[Rule, ...] = ()
    members: Members | None = None
    notes: tuple[str, ...] = field(default=(), compare=False)  # remarks of the reader, for a person

    @property
    def units(self) -> int | None:
        """Number of units of explicit members; None where there is no end or any number."""
        return None if self.members is None else len(self.members.names)

    @property
    def cell_kinds(self) -> tuple[Kind, ...]:
        """The kinds of which every cell of the pattern has one unit (all, where no edge adds others)."""
        return self.kinds if self.cell is None else tuple(kind for kind in self.kinds if kind.name in self.cell)

    def gain_groups(self) -> dict[str, tuple[str, ...]]:
        """The gain sets to be found, each with the names of the kinds that carry it, in the order of the kinds."""
        groups: dict[str, tuple[str, ...]] = {}
        for kind in self.kinds:
            groups[kind.group] = (*groups.get(kind.group, ()), kind.name)
        return groups

    def refuse_beyond(self, stage: str, *supported: str) -> None:
        """Raise InputError unless the description is one of ``supported``; ``stage`` names the work: 'design'."""
        if self.description in supported:
            return
        given, plural = _DESCRIPTIONS[self.description]
        offered = " and ".join(_DESCRIPTIONS[name][1] for name in supported)
        raise InputError(
            f"this network is given by {given}; {stage} of {plural} is not offered by this version "
            f"({offered or 'nothing'} {'are' if offered else 'is'})."
        )

    def refuse_beyond_fixed_links(self, stage: str) -> None:
        """Raise InputError unless this is a pattern of links whose strengths do not weaken and are no alternatives.

        The gain rows of links that weaken (case R2) or are alternatives (rules) are not sums, so the stages that work
        with sums must not take them.
        """
        self.refuse_beyond(stage, "pattern")
        for link in self.links:
            if link.weakens or link.choice:
                raise InputError(
                    f"link {link.name!r} may weaken down to zero; {stage} with such links is not offered by this "
                    "version: write a fixed strength, or an interval that does not reach zero."
                )

    def without_self_links(self) -> Network:
        """The same network with every tolerance at its middle and every nonlinear term on its centre line."""
        still = tuple(link if link.sort == "link" else replace(link, strength=Fraction(0)) for link in self.links)
        return replace(self, links=still)

    def kind(self, name: str) -> Kind:
        """The kind of that name; KeyError if there is none."""
        for kind in self.kinds:
            if kind.name == name:
                return kind
        raise KeyError(f"no kind named {name!r}")

    def classes(self) -> tuple[str, ...]:
        """Names of the link classes in order of first appearance."""
        return tuple(dict.fromkeys(link.name for link in self.links if link.sort == "link"))

    def scaled(self, factor: Fraction, classes: tuple[str, ...] | None = None, own_parts: bool = True) -> Network:
        """The same network with link strengths times ``factor`` (of the given classes, or all).

        ``own_parts`` says whether the unit's own part of a relative link grows with it.
        """
        changed = tuple(
            replace(
                link,
                strength=link.strength * factor if own_parts or not link.own_part else link.strength,
                own_strength=link.own_strength * factor if own_parts else link.own_strength,
            )
            if link.sort == "link" and (classes is None or link.name in classes)
            else link
            for link in self.links
        )
        edges = tuple(
            replace(
                edge,
                links=tuple(
                    replace(
                        e, link=replace(self, links=(e.link,), edges=()).scaled(factor, classes, own_parts).links[0]
                    )
                    for e in edge.links
                ),
            )
            for edge in self.edges
        )
        return replace(self, links=changed, edges=edges)

    def model_document(self) -> dict[str, object]:
        """Exact plain data of everything a proof is about (no title, no goal, no simulation).

        Kinds and links of a pattern stand in the order of the file; of rules and members, where order means nothing,
        they are sorted.
        """
        from synth.network.document import model_document

        return model_document(self)

    @cached_property
    def hash(self) -> str:
        """SHA-256 of the canonical model document: equal for equal networks however they were written."""
        return sha256(canonical(self.model_document()))

    def same_model(self, other: Network) -> bool:
        """Whether both describe the same units and links, in whatever order they list them."""
        from synth.network.document import sorted_document

        return sorted_document(self) == sorted_document(other)

    def to_networkx(self, cells: int = 3) -> nx.MultiDiGraph:
        """The members as a networkx graph that ``read`` accepts again, or a finite section of a pattern to look at.

        A section has ``cells`` cells along every dimension and open ends; at an edge it begins with the edge's units.
        InputError for rules (they describe every wiring) and for members whose own parts were scaled apart.
        """
        from synth.network.graphs import graph_of

        return graph_of(self, cells)


def need_fixed_pattern(network: object, stage: str) -> None:
    """Raise InputError unless ``network`` is a Network that ``stage`` can work on (see refuse_beyond_fixed_links)."""
    if not isinstance(network, Network):
        raise InputError(
            f"{stage} needs a network, not {type(network).__name__}; read a problem file first: synth.read(path)."
        )
    network.refuse_beyond_fixed_links(stage)
