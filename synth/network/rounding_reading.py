"""Reads how the code is timed and what it rounds: the keys ``computation_delay`` and ``rounding`` of ``design``."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, parse_unit
from synth.network.model import Goal, Kind
from synth.network.rounding import Rounding
from synth.network.sections import Declared, Section, named_entries, quantity, section, text_of, whole
from synth.network.settings import TIME, Nameable, is_known, kinds_named
from synth.network.yaml_map import Entry, Node, Problems, Table

FORMS = ("exact", "single", "double")
_GROUPS = {"sensors": "sensors", "commands": "inputs", "products": "inputs", "stored": "states"}
_EXAMPLE = "{sensors: {hauler: {slot: 1 mm}}}"


def with_code(goal: Goal, design: Node | None, known: Nameable, problems: Problems) -> Goal:
    """``goal`` with the computation delay and the rounding written in the section ``design``."""
    if not isinstance(design, Table) or not {"computation_delay", "rounding"} & set(design.entries):
        return goal
    part = Section(design, problems, ("computation_delay", "rounding"))  # its keys were checked with the goal
    period_written = "period" in design.entries
    delay = _delay(part, goal.period, period_written, problems)
    return replace(goal, computation_delay=delay, rounding=_rounding(part, known, period_written, problems))


def _delay(part: Section, period: Fraction | None, period_written: bool, problems: Problems) -> Fraction:
    """From sample to command in force, in s: 0 to the period."""
    node = part.get("computation_delay")
    delay = quantity(node, TIME, problems)
    if delay is None:
        return Fraction(0)
    if not period_written:
        _needs_period(part, "computation_delay", problems, node)
    elif period is not None and not 0 <= delay <= period:
        problems.add(
            f"{part.table.path}.computation_delay: the command is in force zero to one period ({float(period):g} s) "
            f"after its sample, and {float(delay):g} s is not; a longer delay belongs into the model, as states.",
            node,
        )
    return delay


def _needs_period(part: Section, key: str, problems: Problems, node: Node | None) -> None:
    problems.add(
        f"{part.table.path}.{key}: this is about sampled code, and no sample period is declared; add for example "
        "'period: 0.02 s'.",
        node,
    )


def _rounding(design: Section, known: Nameable, period_written: bool, problems: Problems) -> Rounding:
    """What is rounded; where the key is absent, nothing."""
    node = design.get("rounding")
    part = section(node, "rounding", problems, _EXAMPLE)
    if part is None:
        return Rounding()
    if not period_written:
        _needs_period(design, "rounding", problems, node)
    form = text_of(part.get("form"), problems, f"the form of arithmetic ({', '.join(FORMS)})") or "exact"
    if form not in FORMS:
        problems.add(
            f"{part.table.path}.form: unknown form of arithmetic {form!r}{nearest(form, FORMS)}; accepted are "
            f"{', '.join(FORMS)}.",
            part.get("form"),
        )
    word, fraction = _words(part, form, problems)
    found = {key: _quanta(part, key, known, problems) for key in _GROUPS}
    if form != "exact" and found["stored"]:
        problems.add(
            f"{part.table.path}.stored: states that are kept in {form} precision are not proven by this version; keep "
            "them in fixed point (form: exact).",
            part.get("stored"),
        )
    return Rounding(**found, form=form, word=word, fraction=fraction)


def _words(part: Section, form: str, problems: Problems) -> tuple[int | None, int | None]:
    """The fixed-point words that hold the gains."""
    node = part.get("gains")
    words = section(node, "gain_words", problems, "{word: 16, fraction: 12}")
    if words is None:
        return None, None
    if form != "exact":
        problems.add(
            f"{part.table.path}.gains: gains are kept either in fixed-point words or in {form} precision; leave out "
            "'gains' or 'form'.",
            node,
        )
    word = whole(words.need("word", "word: 16"), problems, 2, 64)
    fraction = whole(words.need("fraction", "fraction: 12"), problems, -64, 128)
    return word, fraction


def _quanta(part: Section, key: str, known: Nameable, problems: Problems) -> dict[str, Fraction]:
    """``kind: {signal: distance of neighbouring numbers}``, by "kind.signal"."""
    result: dict[str, Fraction] = {}
    example = f"{{hauler: {{{'demand' if key in ('commands', 'products') else 'slot'}: 0.01}}}}"
    for kind, entry, about in kinds_named(part.get(key), known, problems, example):
        for signal in named_entries(entry.value, problems, "{slot: 1 mm}"):
            size = _quantum(kind, key, entry, signal, problems)
            if size is not None:
                result |= {f"{name}.{signal.key}": size for name in about}
    return result


def _quantum(kind: Kind, key: str, entry: Entry, signal: Entry, problems: Problems) -> Fraction | None:
    group = _GROUPS[key]
    names = {s.name: s.unit for s in getattr(kind, group)}
    if not is_known(entry, signal.key, names, f"{group[:-1]} of {kind.name}", problems, signal):
        return None
    text = names[signal.key]
    unit = Unit() if text == "1" else parse_unit(text)
    size = quantity(signal.value, Declared(text, unit), problems)
    if size is not None and size < 0:
        problems.add(f"{signal.value.path}: the distance of neighbouring numbers must be zero or more.", signal.value)
        return None
    return size
