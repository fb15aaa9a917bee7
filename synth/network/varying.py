"""The same problem file with other values of some parameters: how a string looks at another time gap or lag."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.units import UnitError, parse_quantity
from synth.network.hop_wish import HopWish
from synth.network.model import Network
from synth.network.reader import network_from
from synth.network.yaml_map import Entry, Problems, Scalar, Table


def parameters_of(network: Network) -> dict[str, dict[str, tuple[Fraction, str]]]:
    """Declared kind -> parameter -> (value, unit as written), of a file that asks for a hop claim."""
    found: dict[str, dict[str, tuple[Fraction, str]]] = {}
    for kind, table in _tables(_root(network)).items():
        for entry in table.entries.values():
            if isinstance(entry.value, Scalar):
                try:
                    value, _, _ = parse_quantity(entry.value.text)
                except UnitError:
                    continue  # a parameter with a tolerance: not varied
                found.setdefault(kind, {})[entry.key] = (value, _unit(entry.value.text))
    return found


def with_parameters(network: Network, values: Mapping[str, Mapping[str, Fraction]]) -> Network:
    """``network`` read again with other parameters, each in the unit the file writes it in.

    Laws: with the values the file has, the result equals ``network``. Raises InputError for names the file does not
    have, and what reading raises.
    """
    root = _root(network)
    known = parameters_of(network)
    kinds = _table(root, "kinds")
    entries = dict(kinds.entries)
    for kind, changed in values.items():
        for name, value in changed.items():
            if name not in known.get(kind, {}):
                raise InputError(f"the kind {kind!r} has no parameter {name!r} with a plain value.")
            unit = known[kind][name][1]
            text = f"{value} {unit}".strip()
            whole = _as_table(entries[kind])
            parameters = _as_table(whole.entries["parameters"])
            old = parameters.entries[name]
            plain: Fraction | str = text if unit else value
            new = Scalar(old.value.path, old.value.place, plain, text)
            parameters = replace(parameters, entries={**parameters.entries, name: replace(old, value=new)})
            inner = {**whole.entries, "parameters": replace(whole.entries["parameters"], value=parameters)}
            entries[kind] = replace(entries[kind], value=replace(whole, entries=inner))
    changed_kinds = replace(root.entries["kinds"], value=replace(kinds, entries=entries))
    problems = Problems()
    again = network_from(replace(root, entries={**root.entries, "kinds": changed_kinds}), network.file, None, problems)
    if problems.found or again is None:
        raise InputError(problems.in_order())
    return again


def _root(network: Network) -> Table:
    wish = network.goal.hop
    if not isinstance(wish, HopWish) or not isinstance(wish.root, Table):
        raise InputError("only a network read from a problem file that asks for a hop claim can be read again.")
    return wish.root


def _table(root: Table, key: str) -> Table:
    return _as_table(root.entries[key])


def _as_table(entry: Entry) -> Table:
    if not isinstance(entry.value, Table):
        raise InputError(f"{entry.value.path}: a mapping is expected here.")
    return entry.value


def _tables(root: Table) -> dict[str, Table]:
    """Declared kind -> its table of parameters, where it has one."""
    found = {}
    for entry in _table(root, "kinds").entries.values():
        part = entry.value.entries.get("parameters") if isinstance(entry.value, Table) else None
        if part is not None and isinstance(part.value, Table):
            found[entry.key] = part.value
    return found


def _unit(text: str) -> str:
    """What follows the number in a quantity as written."""
    found = re.match(r"[-+]?[0-9./eE]*(?:[eE][-+]?[0-9]+)?\s*(.*)", text.strip())
    return found[1].strip() if found else ""
