"""Units of their own for all signals of a search, so that the numbers in it are near one whatever the user declared."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.gain.plan import Plan
from synth.network.model import Kind, Network

Array = NDArray[np.float64]

_SIGNALS = ("states", "inputs", "takes", "offers", "sensors")


def scales_of(network: Network, plan: Plan, tables: list[dict[str, Array]]) -> list[dict[str, Array]]:
    """Scale of every state, input, take, offer and sensor of every specification: a least-squares fit in logarithms.

    Kinds of one gain group share the scales of inputs and sensors; kinds of members that come from one declared kind
    differ in numbers only and share all scales.
    """
    places: dict[int, dict[str, slice]] = {}
    shared: dict[tuple[object, ...], slice] = {}
    count = 0
    members = network.members
    for k, kind in enumerate(plan.kinds):
        place = {}
        origin = members.origins[k][0] if members is not None and members.origins else None
        for group in _SIGNALS:
            signals = getattr(kind, group)
            names = tuple((s.name, s.unit) for s in signals)
            key: tuple[object, ...] = (group, k) if origin is None else (group, "declared", origin, names)
            if group in ("inputs", "sensors"):
                key = (group, "set", kind.group) if origin is None else key
            if key not in shared:
                shared[key] = slice(count, count + len(signals))
                count += len(signals)
            place[group] = shared[key]
        places[k] = place
    if members is not None:
        _join_sets(plan.kinds, places)
    rows: dict[tuple[int, int, float], None] = {}  # log value + scale of column - scale of row = 0
    for spec, table in zip(plan.specs, tables, strict=True):
        place = places[spec.kind]
        for name, to, source in (
            ("A", "states", "states"), ("B", "states", "inputs"), ("D", "states", "takes"), ("H", "offers", "states"),
            ("F", "offers", "takes"), ("C", "sensors", "states"), ("N", "sensors", "takes"), ("Fu", "offers", "inputs"),
        ):  # fmt: skip
            for i, j in zip(*np.nonzero(table[name]), strict=True):
                if name != "A" or i != j:
                    rows[place[to].start + i, place[source].start + j, float(abs(table[name][i, j]))] = None
    names_of = {kind.name: k for k, kind in enumerate(plan.kinds)}
    for link in plan.links:
        if link.strength:
            into, out = names_of[link.kind], names_of[link.source_kind]
            take = places[into]["takes"].start + plan.kinds[into].index("takes", link.take)
            offer = places[out]["offers"].start + plan.kinds[out].index("offers", link.offer)
            rows[take, offer, float(abs(link.strength))] = None
    system = np.zeros((len(rows), count))
    right = np.zeros(len(rows))
    for r, (row, column, value) in enumerate(rows):
        system[r, column] += 1.0
        system[r, row] -= 1.0
        right[r] = -np.log(value)
    logs = np.linalg.lstsq(system, right, rcond=None)[0] if rows else np.zeros(count)
    scale = np.exp(logs)
    return [{group: scale[part] for group, part in places[spec.kind].items()} for spec in plan.specs]


def _join_sets(kinds: tuple[Kind, ...], places: dict[int, dict[str, slice]]) -> None:
    """Inputs and sensors of kinds with one gain set get the places of the set's first kind."""
    first: dict[tuple[str, str], slice] = {}
    for k, kind in enumerate(kinds):
        for group in ("inputs", "sensors"):
            places[k][group] = first.setdefault((kind.group, group), places[k][group])
