"""A window: the units around a centre, coupled exactly, and the links that are still only known by their strength.

    x' = A x + sum over inlets of d_e v_e        z_centre = rows x + through v                       (theory (20))

Inside, a link that is exactly known becomes part of A. What stays a link, with |v| <= strength sup|z|: a link whose
source stands outside, and every link that is only known by its strength (late, weakening, alternatives, tolerances) or
whose strength may be off (its uncertainty). Where units pass taken signals on (F), the direct paths are followed.

A cut may leave a mode at the window's edge that grows although the whole network is calm. Then the missing neighbour is
replaced by a stand-in from inside the window, and the replacement is taken back at the edge: g z_outside =
g f z_inside + (g z_outside - g f z_inside), the bracket being two links of the class. Stand-ins: the receiving unit's
own outlet ('mirror', with factor f), or the unit that a ring closed around the window would put there ('ring').
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass, field
from fractions import Fraction
from typing import NamedTuple

from synth.base.errors import InputError
from synth.gain.window.places import Arrival, Place, Places
from synth.network.model import Link

Sparse = dict[int, Fraction]
# How far an exactly known link may be off: its neighbour's part and its own part, each >= 0.
Slack = Callable[[Link], tuple[Fraction, Fraction]]


@dataclass(frozen=True)
class Closure:
    """How a window is closed: 'cut', 'mirror' (missing neighbour = ``factor`` times the unit's own) or 'ring'."""

    way: str = "cut"
    factor: Fraction = Fraction(1)

    def __post_init__(self) -> None:
        """Refuse unknown ways."""
        if self.way not in ("cut", "mirror", "ring"):
            raise InputError(f"a window is closed by 'cut', 'mirror' or 'ring', not {self.way!r}.")

    def __str__(self) -> str:
        """One word, with the factor where it is not one."""
        return self.way if self.way != "mirror" or self.factor == 1 else f"mirror times {self.factor}"


class Entering(NamedTuple):
    """A term of the operator: ``inlet`` numbers the window's inlets, ``source`` is a row of the operator.

    ``strength`` >= 0; ``delay`` in s; terms with equal ``choice`` >= 0 are alternatives; ``number`` is the link's.
    """

    inlet: int
    source: int
    strength: Fraction
    delay: Fraction
    choice: int
    number: int


@dataclass(frozen=True)
class Window:
    """A window in exact numbers; see the head of this module.

    ``A`` rows of A (n of them) as sparse rows; ``columns`` d_e per inlet; ``rows`` and ``through`` per outlet of the
    centre (states; inlets), whose operator rows are ``outlets``. ``places`` lists the units, those in the middle first;
    ``first_state`` says where the states of each begin. ``disturbances``: numbers of the inlets that are disturbances;
    ``centre_states``: how many outlets behind the offers are states of the centre (commands follow).
    """

    places: tuple[Place, ...]
    first_state: tuple[int, ...]
    A: tuple[Sparse, ...]
    inlets: tuple[tuple[Place, int], ...]  # (place, take); disturbances count on behind the takes
    columns: tuple[Sparse, ...]
    outlets: tuple[int, ...]
    rows: tuple[Sparse, ...]
    through: tuple[Sparse, ...]
    entering: tuple[Entering, ...]
    closure: Closure
    disturbances: tuple[int, ...] = ()
    centre_states: int = 0

    @property
    def size(self) -> int:
        """Number of states."""
        return len(self.A)

    def __repr__(self) -> str:
        """A short text; the numbers are too many to print."""
        return (
            f"Window({len(self.places)} units, {self.size} states, {len(self.inlets)} inlets, {len(self.entering)} "
            f"terms, {self.closure})"
        )


def loosely_known(link: Link, loose: Collection[str] = ()) -> bool:
    """Whether a link stays a link inside a window: late, weakening, an alternative, a tolerance, or named ``loose``."""
    known = link.sort == "link" and not (link.delay or link.weakens or link.own_part or link.choice)
    return not known or link.name in loose


def build_window(
    places: Places,
    centre: tuple[Place, ...],
    reach: int,
    closure: Closure = Closure(),
    loose: Collection[str] = (),
    slack: Slack | None = None,
    box: bool = False,
    everything: bool = False,
) -> Window:
    """The window of all units within ``reach`` steps of ``centre``.

    ``loose``: classes of links that are known only by their strength everywhere; ``slack``: how far an exactly known
    link may be off, at any time and in any way (None: not at all; with one, every link gets its terms, of strength zero
    too). ``box`` takes the cube of cells instead of the ball (a ring needs it). ``everything``: behind the offers of
    the centre also its states and commands (``outlets`` -1), behind the inlets one per disturbance of every unit.
    Raises InputError where offers that pass on taken signals form a closed direct path.
    """
    return _Builder(places, centre, reach, closure, frozenset(loose), slack, box, everything).window()


@dataclass
class _Builder:
    places: Places
    centre: tuple[Place, ...]
    reach: int
    closure: Closure
    loose: frozenset[str]
    slack: Slack | None
    box: bool
    everything: bool
    first: dict[Place, int] = field(default_factory=dict)
    inlets: dict[tuple[Place, int], int] = field(default_factory=dict)
    entering: list[Entering] = field(default_factory=list)
    inner: dict[tuple[Place, int], list[tuple[Fraction, Place, int]]] = field(default_factory=dict)
    known: dict[tuple[Place, int], tuple[Sparse, Sparse] | None] = field(default_factory=dict)
    groups: dict[str, int] = field(default_factory=dict)

    def window(self) -> Window:
        box = self.box or self.closure.way == "ring"
        listed = self.places.around(self.centre, self.reach, box)
        states = 0
        for place in listed:
            self.first[place] = states
            states += self.places.unit(place).A.shape[0]
        for place in listed:
            for count, arrival in enumerate(self.places.arrivals(place)):
                self._place(place, count, arrival)
        if self.everything:
            for place in listed:
                kind = self.places.unit(place).kind
                for w in range(len(kind.disturbances)):
                    self.inlets[place, len(kind.takes) + w] = len(self.inlets)
        A: list[Sparse] = [{} for _ in range(states)]
        columns: list[Sparse] = [{} for _ in self.inlets]
        for place in listed:
            self._unit(place, A, columns)
        outlets, rows, through = [], [], []
        for place in self.centre:
            for k in range(len(self.places.unit(place).kind.offers)):
                x, v = self._outlet(place, k)
                outlets.append(self.places.first_row(place) + k)
                rows.append(_tidy(x))
                through.append(_tidy(v))
        found = [pair for place in self.centre if self.everything for pair in self._states(place)]
        states = len(found)
        found += [pair for place in self.centre if self.everything for pair in self._commands(place)]
        for x, v in found:
            outlets.append(-1)
            rows.append(_tidy(x))
            through.append(_tidy(v))
        noise = tuple(
            n for n, (place, take) in enumerate(self.inlets) if take >= len(self.places.unit(place).kind.takes)
        )
        return Window(
            tuple(listed), tuple(self.first.values()), tuple(map(_tidy, A)), tuple(self.inlets),
            tuple(map(_tidy, columns)), tuple(outlets), tuple(rows), tuple(through), tuple(self.entering), self.closure,
            noise, states,
        )  # fmt: skip

    def _place(self, place: Place, count: int, arrival: Arrival) -> None:
        """Sort one arrival into what is exactly known and what stays a link."""
        link = arrival.link
        take = self.places.unit(place).kind.index("takes", link.take)
        at = (place, take)
        offer = self._offer(arrival.source, link.offer)
        inside = arrival.source in self.first
        off, off_own = (Fraction(0), Fraction(0)) if self.slack is None else self.slack(link)
        if self.slack is not None and link.relative:
            self._enter(at, arrival, place, self._offer(place, link.offer), off_own, fresh=True)
        if loosely_known(link, self.loose):
            choice = self._choice(place, count, link)
            self._enter(at, arrival, arrival.source, offer, abs(link.strength) + off, choice)
            if link.weakens:
                own, strength = self._offer(place, link.offer), abs(link.own_strength) + off_own
                self._enter(at, arrival, place, own, strength, choice, fresh=True)
            return
        if inside:
            self.inner.setdefault(at, []).append((link.strength, arrival.source, offer))
            if self.slack is not None:
                self._enter(at, arrival, arrival.source, offer, off)
            return
        self._enter(at, arrival, arrival.source, offer, abs(link.strength) + off)
        stand_in, factor = self._stand_in(place, arrival)
        if stand_in is not None and factor and link.strength:
            other = self._offer(stand_in, link.offer)
            self.inner.setdefault(at, []).append((link.strength * factor, stand_in, other))
            self._enter(at, arrival, stand_in, other, abs(link.strength * factor))

    def _stand_in(self, place: Place, arrival: Arrival) -> tuple[Place | None, Fraction]:
        """The place inside that stands in for a source outside, and the factor on what it offers."""
        if self.closure.way == "ring":
            found = self.places.wrapped(arrival.source, self.reach)
            return (found if found in self.first else None), Fraction(1)
        if self.closure.way == "mirror" and any(
            signal.name == arrival.link.offer for signal in self.places.unit(place).kind.offers
        ):
            return place, self.closure.factor
        return None, Fraction(0)

    def _choice(self, place: Place, count: int, link: Link) -> str:
        if link.choice:
            return f"{place}: {link.choice}"
        return f"{place}, {count}" if link.weakens else ""

    def _enter(
        self, at: tuple[Place, int], arrival: Arrival, source: Place, offer: int, strength: Fraction,
        choice: str = "", fresh: bool = False,
    ) -> None:  # fmt: skip
        inlet = self.inlets.setdefault(at, len(self.inlets))
        delay = Fraction(0) if fresh else arrival.link.delay
        group = -1 if not choice else self.groups.setdefault(choice, len(self.groups))
        row = self.places.first_row(source) + offer
        self.entering.append(Entering(inlet, row, strength, delay, group, arrival.number))

    def _offer(self, place: Place, name: str) -> int:
        return self.places.unit(place).kind.index("offers", name)

    def _outlet(self, place: Place, offer: int) -> tuple[Sparse, Sparse]:
        """An offered signal by states and by inlets, direct paths followed."""
        key = (place, offer)
        if key in self.known:
            found = self.known[key]
            if found is None:
                raise InputError(
                    f"the offer {self.places.unit(place).kind.offers[offer].name!r} of "
                    f"{self.places.unit(place).kind.name!r} passes on what it takes along a closed path of links; the "
                    "window route needs a state somewhere on every closed path."
                )
            return found
        self.known[key] = None
        unit, start = self.places.unit(place), self.first[place]
        x = {start + j: value for j, value in enumerate(unit.H.rows[offer]) if value}
        v: Sparse = {}
        for take, factor in enumerate(unit.F.rows[offer]):
            if factor:
                taken_x, taken_v = self._intake(place, take)
                _add(x, taken_x, factor)
                _add(v, taken_v, factor)
        for w, factor in enumerate(unit.Fw.rows[offer]):
            self._disturb(v, place, w, factor)
        self.known[key] = (x, v)
        return x, v

    def _disturb(self, v: Sparse, place: Place, number: int, factor: Fraction) -> None:
        inlet = self.inlets.get((place, len(self.places.unit(place).kind.takes) + number))
        if inlet is not None and factor:
            _add(v, {inlet: Fraction(1)}, factor)

    def _states(self, place: Place) -> list[tuple[Sparse, Sparse]]:
        start = self.first[place]
        return [({start + i: Fraction(1)}, {}) for i in range(self.places.unit(place).A.shape[0])]

    def _commands(self, place: Place) -> list[tuple[Sparse, Sparse]]:
        """Every command u = U x + UV v of a unit by states and by inlets."""
        unit, start = self.places.unit(place), self.first[place]
        found: list[tuple[Sparse, Sparse]] = []
        for own, taken in zip(unit.U.rows, unit.UV.rows, strict=True):
            x: Sparse = {start + j: value for j, value in enumerate(own) if value}
            v: Sparse = {}
            for take, factor in enumerate(taken):
                if factor:
                    from_x, from_v = self._intake(place, take)
                    _add(x, from_x, factor)
                    _add(v, from_v, factor)
            found.append((x, v))
        return found

    def _intake(self, place: Place, take: int) -> tuple[Sparse, Sparse]:
        """A taken signal by states and by inlets."""
        x: Sparse = {}
        v: Sparse = {}
        for strength, source, offer in self.inner.get((place, take), ()):
            from_x, from_v = self._outlet(source, offer)
            _add(x, from_x, strength)
            _add(v, from_v, strength)
        inlet = self.inlets.get((place, take))
        if inlet is not None:
            _add(v, {inlet: Fraction(1)}, Fraction(1))
        return x, v

    def _unit(self, place: Place, A: list[Sparse], columns: list[Sparse]) -> None:
        unit, start = self.places.unit(place), self.first[place]
        for i, row in enumerate(unit.A.rows):
            _add(A[start + i], {start + j: value for j, value in enumerate(row) if value}, Fraction(1))
        for take in range(unit.D.shape[1]):
            x, v = self._intake(place, take)
            for i in range(unit.A.shape[0]):
                factor = unit.D.rows[i][take]
                if factor:
                    _add(A[start + i], x, factor)
                    for inlet, value in v.items():
                        _add(columns[inlet], {start + i: value}, factor)
        for w in range(unit.E.shape[1]):
            inlet_of = self.inlets.get((place, len(unit.kind.takes) + w))
            if inlet_of is not None:
                column = {start + i: row[w] for i, row in enumerate(unit.E.rows)}
                _add(columns[inlet_of], column, Fraction(1))


def _add(to: Sparse, terms: Sparse, factor: Fraction) -> None:
    for key, value in terms.items():
        to[key] = to.get(key, Fraction(0)) + factor * value


def _tidy(terms: Sparse) -> Sparse:
    return {key: value for key, value in sorted(terms.items()) if value}
