"""The lines of ``synth check`` about one kind: its signals, equations, modes, and what tolerances and curves became."""

from __future__ import annotations

from fractions import Fraction

from synth.base.units import parse_unit
from synth.network.model import Kind, Network
from synth.network.words import counted, said

MOST_VALUES = 6
MOST_ROWS = 4  # of a matrix whose entries are printed


def internal(name: str) -> bool:
    """Whether a signal was made here and not declared by a user: such names contain a space."""
    return " " in name


def mode_text(mode: complex) -> str:
    """A complex number for a person; rounding dust is left out."""
    real = 0.0 if abs(mode.real) < 1e-12 else mode.real
    if abs(mode.imag) < 1e-12:
        return f"{real:.4g}"
    return f"{real:.4g} {'+' if mode.imag > 0 else '-'} {abs(mode.imag):.4g}i"


def kind_text(kind: Kind, modes: tuple[complex, ...], names: tuple[str, ...] = ()) -> list[str]:
    """Everything about one kind, a line per group; ``names`` are those of all kinds that are like it."""

    def band(value: Fraction | None) -> str:
        return "" if value is None else f", band {said(value)}"

    lines = [f"Kinds {' and '.join(names)}, alike" if len(names) > 1 else f"Kind {(*names, kind.name)[0]}"]
    lines += _signals("states", [f"{s.name} ({s.unit}{band(s.band)})" for s in kind.states])
    limits = ["unlimited" if a.limit is None else f"limit {said(a.limit)}" for a in kind.inputs]
    lines += _signals("inputs", [f"{a.name} ({a.unit}, {limit})" for a, limit in zip(kind.inputs, limits, strict=True)])
    disturbances = [w for w in kind.disturbances if not internal(w.name)]
    lines += _signals("disturbances", [f"{w.name} ({w.unit}, peak {said(w.peak)})" for w in disturbances])
    lines += _signals("takes", [f"{s.name} ({s.unit}{band(s.band)})" for s in kind.takes if not internal(s.name)])
    lines += _signals("offers", [f"{s.name} ({s.unit}{band(s.band)})" for s in kind.offers if not internal(s.name)])
    lines += _signals("sensors", [f"{s.name} ({s.unit})" for s in kind.sensors])
    lines += [f"  {key:<13} {text}" for key, text in kind.equations.items()]
    lines += [] if kind.equations else _matrices_text(kind)
    lines += _rest_text(kind)
    lines += inner_text(kind)
    lines.append(f"  {'modes alone':<13} {', '.join(mode_text(m) for m in modes)} (1/s, before any feedback)")
    return lines


def _signals(label: str, parts: list[str]) -> list[str]:
    return [f"  {label:<13} {', '.join(parts)}"] if parts else []


def _matrices_text(kind: Kind) -> list[str]:
    """The dynamics of a kind given by matrices: the entries of small ones, the size of large ones."""
    wanted = (("A", kind.states, kind.states), ("B", kind.states, kind.inputs), ("D", kind.states, kind.takes),
              ("E", kind.states, kind.disturbances), ("C", kind.sensors, kind.states))  # fmt: skip
    lines = []
    for name, down, across in wanted:
        if not down or not across:
            continue
        rows = getattr(kind, name).rows
        if len(down) <= MOST_ROWS and len(across) <= MOST_ROWS:
            text = f"[{'; '.join(' '.join(said(value) for value in row) for row in rows)}]"
        else:
            filled = sum(value != 0 for row in rows for value in row)
            text = f"{len(down)} x {len(across)}, {filled} entries not zero"
        lines.append(f"  {name:<13} {text}")
    lines.append("  (declared units, time in s: x' = A x + B u + D v + E w with inputs u, takes v, disturbances w)")
    return lines


def _rest_text(kind: Kind) -> list[str]:
    """The operating point, in declared units, where it is not zero."""
    dynamics = kind.dynamics
    if dynamics is None or not any(dynamics.point.values()):
        return []
    units = {s.name: s.unit for s in (*kind.states, *kind.takes)}
    units |= {a.name: a.unit for a in kind.inputs} | {w.name: w.unit for w in kind.disturbances}
    values = [
        f"{name} {said(dynamics.point[name] / parse_unit(unit).factor)} {unit}"
        for name, unit in units.items()
        if dynamics.point.get(name)
    ]
    return [f"  {'at rest':<13} {', '.join(values)}; every signal counts from there"] if values else []


def inner_text(kind: Kind) -> list[str]:
    """What each tolerance and each nonlinear term became: a link of the unit to itself, or a disturbance."""
    lines: list[str] = []
    takes, offers = {s.name: s for s in kind.takes}, {s.name: s for s in kind.offers}
    for link in kind.inner:
        offer, take = offers[link.offer], takes[link.take]
        size = f"at most {said(link.strength)} {'' if take.unit == '1' else f'{take.unit} '}per {offer.unit}"
        if link.sort == "tolerance":
            words = f"a link of the unit to itself, {size}, that may change at any time"
        else:
            within = "" if offer.band is None else f" while the argument stays within {said(offer.band)} {offer.unit}"
            words = f"off its straight line by {size}{within}; counted as a link of the unit to itself"
        lines.append(f"  {link.take}: {words}")
    lines += [
        f"  {w.name}: moves the point of rest, counted as a disturbance of at most {said(w.peak)} {w.unit}"
        for w in kind.disturbances
        if internal(w.name)
    ]
    if any(link.sort == "curve" for link in kind.inner):
        lines.append("  (what rests on a band counts only where the proof shows that the band is kept)")
    return lines


def variants_text(network: Network, kind: Kind) -> list[str]:
    """For explicit members: how many sets of parameter values the units of this declared kind have."""
    members = network.members
    if members is None or not members.origins:
        return []
    own = {k.name: origin for k, origin in zip(network.kinds, members.origins, strict=True)}
    name = own[kind.name][0]
    values = [dict(changed) for origin, changed in own.values() if origin == name]
    if len(values) <= 1:
        return []
    parameters = sorted({parameter for changed in values for parameter in changed})
    examples = []
    for parameter in parameters:
        found = list(dict.fromkeys(changed[parameter] for changed in values if parameter in changed))
        more = ", ..." if len(found) > MOST_VALUES else ""
        examples.append(f"{parameter}: {', '.join(found[:MOST_VALUES])}{more}")
    return [f"  {counted(len(values), 'set')} of values; those beside the kind's own: {'; '.join(examples)}"]
