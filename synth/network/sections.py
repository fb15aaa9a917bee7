"""The keys of the problem file, and the readers every part of it shares.

``KEYS`` lists what this version honours; ``LATER`` what is known to a later version. A key of ``LATER`` is refused with
a sentence that says so, because a key that is silently ignored would make a proof about another plant.
"""

from __future__ import annotations

import keyword
import re
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, UnitError, dimension_text, parse_quantity, parse_unit
from synth.network.yaml_map import Entry, Listing, Node, Problems, Scalar, Table

KEYS: dict[str, tuple[str, ...]] = {
    "problem": ("synth", "title", "kinds", "network", "design", "simulation"),
    "kind": (
        "parameters", "states", "inputs", "disturbances", "takes", "offers", "sensors", "equations", "matrices",
        "file", "plant", "operating_point", "controller",
    ),
    "controller": ("integrals", "memory", "estimator"),
    "state": ("in", "band"),
    "input": ("in", "limit"),
    "disturbance": ("in", "peak"),
    "take": ("in", "band"),
    "offer": ("is", "in", "band"),
    "sensor": ("is", "in"),
    "matrices": ("A", "B", "D", "E", "C", "N", "H", "F", "Fw", "Fu"),
    "network": ("pattern", "classes", "edge", "rules", "members"),
    "pattern": ("dimension", "cell", "links"),
    "link": ("name", "from", "at", "to", "strength", "relative", "late", "delay", "weakens"),
    "edge": ("side", "axis", "units", "links"),
    "edge_unit": ("at", "kind", "instead_of"),
    "edge_link": ("name", "from", "along", "to", "strength", "relative", "late", "delay", "weakens"),
    "rule": ("to", "from", "most", "strength", "relative", "late", "delay", "weakens"),
    "members": ("units", "links", "graph"),
    "class": ("sign",),
    "design": ("target", "slowest", "fastest", "period", "gain_bounds", "uses", "gains", "aim", "claim", "hop",
               "computation_delay", "rounding"),
    "rounding": ("sensors", "commands", "products", "stored", "form", "gains"),
    "gain_words": ("word", "fraction"),
    "hop": (
        "notion", "signal", "gap_error", "any_order", "dead_time", "sensing", "jerk", "time_gap", "standstill",
        "gap_parameter", "radio", "least", "leader",
    ),
    "leader": ("acceleration", "speed", "recorded"),
    "aim": ("least", "of"),
    "simulation": ("units", "seconds"),
}  # fmt: skip

LATER: dict[str, tuple[str, ...]] = {
    "problem": ("tables", "operating_points", "measures", "scenarios"),
    "kind": ("curves", "operating_points", "tables", "transport", "diffusion"),
    "controller": (),
    "state": ("tolerance", "peak", "rounding"),
    "input": ("rate_limit", "rounding", "lag", "tolerance", "delay"),
    "disturbance": ("variation", "spectrum"),
    "take": ("most",),
    "offer": ("rounding",),
    "sensor": ("noise", "rounding", "delay", "band"),
    "matrices": ("L",),
    "network": ("file",),
    "pattern": ("boundary",),
    "link": ("loss", "losses", "silence", "hold", "jitter", "rewired", "variation", "tolerance", "message", "most"),
    "edge": (),
    "edge_unit": (),
    "edge_link": (),
    "rule": (),
    "members": (),
    "class": ("tolerance", "cause", "strength", "most"),
    "design": (
        "operating_points", "tables", "messages", "feed_through", "noise", "jitter", "window", "route",
    ),
    "rounding": (),
    "gain_words": (),
    "aim": (),
    "hop": ("loss", "jitter", "period"),
    "leader": (),
    "simulation": ("losses", "silence", "leader", "step", "effects"),
}  # fmt: skip

RESERVED = ("sqrt", "abs", "min", "max", "sin", "cos", "tanh", "exp", "sat", "deadzone", "pi")
LARGEST = Fraction(10) ** 100


def sized(value: Fraction) -> bool:
    """Whether a number can be computed with in double precision without danger (zero, or 1e-100 to 1e100)."""
    return value == 0 or 1 / LARGEST <= abs(value) <= LARGEST


@dataclass(frozen=True)
class Declared:
    """A unit as written in the file, with its meaning."""

    text: str
    unit: Unit


@dataclass(frozen=True)
class Section:
    """A table of the file whose keys have been checked against ``KEYS`` and ``LATER``."""

    table: Table
    problems: Problems
    known: tuple[str, ...]

    def get(self, key: str) -> Node | None:
        """The value of ``key``, None if it is absent or empty."""
        entry = self.table.entries.get(key)
        if entry is None or (isinstance(entry.value, Scalar) and entry.value.value is None):
            return None
        return entry.value

    def need(self, key: str, example: str) -> Node | None:
        """The value of ``key``; its absence is a problem, and the sentence shows the example."""
        node = self.get(key)
        misspelt = [
            k for k in self.table.entries if k not in self.known and nearest(k, self.known) == nearest(key, [key])
        ]
        if node is None and not misspelt:  # a misspelt key has its own sentence already
            self.problems.add(
                f"{_named(self.table)}: the key {key!r} is missing; write for example '{example}'.", self.table
            )
        return node


def _named(node: Node) -> str:
    return node.path or "the file"


def section(node: Node | None, sort: str, problems: Problems, example: str) -> Section | None:
    """Check that ``node`` is a table with the keys of ``sort``; unknown and later keys are problems."""
    if node is None:
        return None
    if not isinstance(node, Table):
        problems.add(f"{_named(node)}: a mapping is expected here, such as '{example}'.", node)
        return None
    for key, entry in node.entries.items():
        if key in LATER[sort] and key not in KEYS[sort]:
            problems.add(
                f"{_named(node)}: the key {key!r} is not honoured by this version; take it out, "
                "and bear in mind that no result is then about it.",
                entry,
            )
        elif key not in KEYS[sort]:
            close = nearest(key, KEYS[sort])
            problems.add(f"{_named(node)}: unknown key {key!r}{close}; accepted are {', '.join(KEYS[sort])}.", entry)
    return Section(node, problems, KEYS[sort])


def named_entries(node: Node | None, problems: Problems, example: str) -> Iterator[Entry]:
    """The entries of a table whose keys are names chosen by the user; names that cannot be used are problems."""
    if node is None:
        return
    if not isinstance(node, Table):
        form = "list or mapping" if example.startswith("[") else "mapping"
        problems.add(f"{_named(node)}: a {form} of names is expected here, such as '{example}'.", node)
        return
    for entry in node.entries.values():
        if name_is_good(entry.key, problems, entry, node.path):
            yield entry


def name_is_good(name: str, problems: Problems, where: Node | Entry, path: str) -> bool:
    """Whether ``name`` can stand for a signal, a kind or a class; if not, say why."""
    if not re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]{0,62}", name, re.ASCII):
        comma = "; a number has a decimal point and no comma" if re.match(r"\d+(\s|$)", name) else ""
        problems.add(
            f"{path}: {name[:70]!r} cannot be a name{comma}; accepted are up to 63 letters, digits and underscores, "
            "not starting with a digit.",
            where,
        )
        return False
    if keyword.iskeyword(name) or name in RESERVED:
        problems.add(
            f"{path}: {name!r} is a reserved word of expressions; choose another name, such as '{name}_1'.", where
        )
        return False
    return True


def text_of(node: Node | None, problems: Problems, what: str) -> str | None:
    """The text of a scalar as written (a number counts as its text); anything else is a problem."""
    if node is None:
        return None
    if isinstance(node, Scalar) and node.value is not None:
        return node.text
    problems.add(f"{_named(node)}: {what} is expected here.", node)
    return None


def unit_of(node: Node | None, problems: Problems) -> Declared | None:
    """The unit written at ``node``, such as ``m/s^2`` (``1`` if there is none)."""
    text = text_of(node, problems, "a unit, such as 'm/s^2', or '1' for a number without unit,")
    if text is None or node is None:
        return None
    try:
        return Declared(text, parse_unit(text))
    except UnitError as error:
        problems.add(f"{_named(node)}: {error}.", node)
        return None


def quantity(node: Node | None, declared: Declared, problems: Problems, bare: bool = True) -> Fraction | None:
    """A number in the declared unit, or a quantity text of the same dimension; the result is in the declared unit.

    ``bare`` says whether a number without a unit means the declared unit; if not, a unit must be written unless the
    declared unit is dimensionless.
    """
    if node is None:
        return None
    asked = f"'2.5 {declared.text}'" if declared.text != "1" else "'2.5'"
    if not isinstance(node, Scalar) or node.value is None or isinstance(node.value, bool):
        problems.add(f"{_named(node)}: a number is expected here, such as {asked}.", node)
        return None
    if isinstance(node.value, Fraction):
        value, unit, written = node.value, Unit(), False
    else:
        if "+-" in node.text or "±" in node.text:
            problems.add(
                f"{_named(node)}: a tolerance ('+-') is not honoured by this version; write the nominal value, "
                "and bear in mind that no result is then about the tolerance.",
                node,
            )
            return None
        try:
            value, unit, written = parse_quantity(node.text)
        except UnitError as error:
            problems.add(f"{_named(node)}: {error}; accepted is for example {asked}.", node)
            return None
    if (not written and (bare or declared.unit.dimension == Unit().dimension)) or (not written and value == 0):
        unit = declared.unit
    elif unit.dimension != declared.unit.dimension:
        given = (
            f"{node.text!r} has the unit {dimension_text(unit.dimension)}" if written else f"{node.text} has no unit"
        )
        problems.add(f"{_named(node)}: {given}, but {declared.text} is needed here; write for example {asked}.", node)
        return None
    result = value * unit.factor / declared.unit.factor
    if not sized(result):
        problems.add(
            f"{_named(node)}: {node.text[:40]} is too large or too small to compute with (1e-100 to 1e100).", node
        )
        return None
    return result


def whole(node: Node | None, problems: Problems, least: int, most: int) -> int | None:
    """A whole number within bounds."""
    if node is None:
        return None
    value = node.value if isinstance(node, Scalar) else None
    if isinstance(value, Fraction) and value.denominator == 1 and least <= value <= most:
        return int(value)
    said = f", not {node.text[:30]!r}" if isinstance(node, Scalar) else ""
    problems.add(f"{_named(node)}: a whole number from {least} to {most} is expected here{said}.", node)
    return None


def truth(node: Node | None, problems: Problems) -> bool:
    """``true`` or ``false``; absent counts as false."""
    if node is None:
        return False
    if isinstance(node, Scalar) and isinstance(node.value, bool):
        return node.value
    problems.add(f"{_named(node)}: true or false is expected here (yes and no are text).", node)
    return False


def items_of(node: Node | None, problems: Problems, example: str) -> tuple[Node, ...]:
    """The items of a list; anything else is a problem."""
    if node is None:
        return ()
    if isinstance(node, Listing):
        return node.items
    problems.add(f"{_named(node)}: a list is expected here, such as '{example}'.", node)
    return ()
