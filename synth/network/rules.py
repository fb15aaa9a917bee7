"""Rules: how many links of a class a unit may receive, whatever the wiring, however many units, rewired at any time.

    rules:
      follow: {to: hauler.ahead, from: [hauler.place], most: 2, strength: 0.5 1/s^2, relative: true}

The worst admissible intake of a unit is ``most`` links of full strength from the source with the largest signal
(theory (13)). Absolute: one term most * |g| max_c s_c. Relative: a unit may have any number of links from none to
``most``, so the own part is folded for the largest intake and the term is most * |g| max(max_c s_c, s_self), which is
case R2 for the whole rule. A late difference is not folded: most * |g| from the sources and as much from itself.
"""

from __future__ import annotations

from dataclasses import replace

from synth.network.layout import Form, Rule
from synth.network.links import End, Known, Positions, links_of, read_end, read_form
from synth.network.model import Link
from synth.network.sections import Section, items_of, named_entries, section, whole
from synth.network.yaml_map import Entry, Listing, Node, Problems

MOST = 10_000
EXAMPLE = "{to: hauler.ahead, from: [hauler.place], most: 2, strength: 0.5 1/s^2}"


def read_rules(
    node: Node, known: Known, positions: Positions, problems: Problems
) -> tuple[tuple[Rule, ...], tuple[Link, ...]]:
    """The rules and the links they allow, ``choice`` naming the rule."""
    rules: list[Rule] = []
    links: list[Link] = []
    for entry in named_entries(node, problems, f"{{follow: {EXAMPLE}}}"):
        part = section(entry.value, "rule", problems, EXAMPLE)
        if part is None:
            continue
        positions.names.append(entry.key)
        found = _rule(part, entry, known, positions, problems)
        if found is not None:
            rules.append(found[0])
            links += found[1]
    return tuple(rules), tuple(links)


def _rule(
    part: Section, entry: Entry, known: Known, positions: Positions, problems: Problems
) -> tuple[Rule, tuple[Link, ...]] | None:
    before = problems.count
    target = read_end(part.need("to", "to: hauler.ahead"), "takes", known, problems)
    from_node = part.need("from", "from: [hauler.place]")
    items = (
        items_of(from_node, problems, "[hauler.place]")
        if isinstance(from_node, Listing)
        else ((from_node,) if from_node is not None else ())
    )
    if isinstance(from_node, Listing) and not items:
        problems.add(f"{from_node.path}: name at least one signal, such as [hauler.place].", from_node)
    ends = [read_end(item, "offers", known, problems) for item in items]
    sources = [end for end in ends if end is not None]
    most = whole(part.need("most", "most: 2"), problems, 1, MOST)
    _distinct(part, sources, items, problems)
    forms: list[Form] = []
    none: list[End | None] = [None]
    for source in sources or none:
        count = problems.count
        form = read_form(part, source, target, known, problems)
        if form is not None:
            forms.append(form)
        if problems.count > count:
            break  # the same sentence once, not once per source
    if problems.count > before or most is None or target is None or not forms or len(forms) != len(sources):
        return None
    positions.strengths.append((entry.key, forms[0], part.get("strength") or entry.value))
    return Rule(entry.key, target.kind.name, target.signal, most), _links(entry.key, sources, target, forms, most)


def _distinct(part: Section, sources: list[End], items: tuple[Node, ...], problems: Problems) -> None:
    """Each source once; and a relative rule subtracts one signal, so its sources share the signal's name."""
    seen: set[tuple[str, str]] = set()
    for source, item in zip(sources, items, strict=False):
        if (source.kind.name, source.signal) in seen:
            problems.add(f"{item.path}: this source stands twice; keep one of them.", item)
        seen.add((source.kind.name, source.signal))
    if part.get("relative") is not None and len({source.signal for source in sources}) > 1:
        problems.add(
            f"{part.table.path}.from: a relative rule subtracts the unit's own signal of the same name, so all its "
            "sources must have one name; offer them under one name, or write one rule per name.",
            part.get("from"),
        )


def _links(name: str, sources: list[End], target: End, forms: list[Form], most: int) -> tuple[Link, ...]:
    """One alternative per source; the own part is folded (or kept as a self-link) once, with the first of them."""
    links: list[Link] = []
    for n, (source, form) in enumerate(zip(sources, forms, strict=True)):
        whole_intake = form.times(most)
        if form.own is not None and not form.difference:
            whole_intake = replace(whole_intake, low=whole_intake.peak, high=whole_intake.peak, weakens=True)
        parts = links_of(whole_intake, name, source, target, (), name)
        if n:
            parts = (replace(parts[0], own_strength=parts[0].own_strength * 0, weakens=False),)
        links += parts
    return tuple(links)
