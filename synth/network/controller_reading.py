"""Reads the section ``controller`` of a kind, refuses what could not work, and widens the kind by it.

controller: {integrals: [level], memory: 2}        or        controller: {estimator: [level, flow]}
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from synth.base.errors import nearest
from synth.network.controller import Wanted, heard_takes, names_made, with_controller
from synth.network.model import Goal, Kind
from synth.network.rational import rank, unseen
from synth.network.sections import items_of, section, text_of, whole
from synth.network.yaml_map import Node, Problems, Table

MOST_MEMORY = 8
_SETTLES = 1e-9  # a mode this close to the imaginary axis, in parts of the largest, does not count as decaying


def read_controller(node: Node | None, kind: Kind, problems: Problems) -> Kind | None:
    """``kind`` with the states of its controller, or as it is if ``node`` is absent; None if there are problems."""
    part = section(node, "controller", problems, "{integrals: [level]}")
    if part is None:
        return kind if node is None else None
    before = problems.count
    integrals, estimator, asked = part.get("integrals"), part.get("estimator"), part.get("memory")
    if not part.table.entries:
        problems.add(
            f"{part.table.path}: nothing is asked for; write integrals, memory or estimator, or take the section out.",
            part.table,
        )
        return None
    if integrals is None and estimator is None and asked is None:
        return kind if problems.count == before else None
    memory = whole(asked, problems, 1, MOST_MEMORY)
    if estimator is not None and memory is not None:
        problems.add(
            f"{part.table.path}: an estimator and memory states are two ways to the same end; keep one of them.", asked
        )
    wanted = Wanted(
        _sensors(integrals, kind, "[level]", problems),
        memory or 0,
        None if estimator is None else _sensors(estimator, kind, "[level, flow]", problems),
    )
    if problems.count == before:
        _integrals(integrals, kind, wanted, problems)
        _estimator(estimator, kind, wanted, problems)
        _fresh(part.table, kind, wanted, problems)
    return with_controller(kind, wanted) if problems.count == before else None


def _sensors(node: Node | None, kind: Kind, example: str, problems: Problems) -> tuple[str, ...]:
    """The sensors that a list names, each once."""
    names = [s.name for s in kind.sensors]
    found: list[str] = []
    before = problems.count
    items = items_of(node, problems, example)
    for item in items:
        name = text_of(item, problems, "the name of a sensor")
        if name is None:
            continue
        if name in names:
            found.append(name)
        elif name in [s.name for s in kind.states]:
            problems.add(
                f"{item.path}: nobody measures {name!r}, and a controller can only use what is measured; the sensors "
                f"of {kind.name} are {', '.join(names) or 'none'}.",
                item,
            )
        else:
            problems.add(
                f"{item.path}: unknown sensor {name[:40]!r} of {kind.name}{nearest(name, names)}; accepted are "
                f"{', '.join(names) or 'none'}.",
                item,
            )
    if node is not None and not items and problems.count == before:
        problems.add(f"{node.path}: name at least one sensor, such as '{example}'.", node)
    return tuple(dict.fromkeys(found))


def _integrals(node: Node | None, kind: Kind, wanted: Wanted, problems: Problems) -> None:
    """Refuse an integral that no actuator and no link can bring to rest (the widened unit has a fixed mode at zero)."""
    width = len(kind.states) + len(kind.inputs) + len(kind.takes)
    rows = [[*a, *b, *d] for a, b, d in zip(kind.A.rows, kind.B.rows, kind.D.rows, strict=True)]
    for name in wanted.integrals:
        j = kind.index("sensors", name)
        row = [*kind.C.rows[j], *([Fraction(0)] * len(kind.inputs)), *kind.N.rows[j]]
        if rank([*rows, row], width) <= rank(rows, width):
            problems.add(
                f"{node.path if node is not None else kind.name}: the integral of {name!r} cannot be steered: with "
                "every state at rest this sensor reads zero whatever the actuators do, so the integral would keep any "
                "value it has; integrate another sensor, or take it out.",
                node,
            )
            return
        rows.append(row)


def _estimator(node: Node | None, kind: Kind, wanted: Wanted, problems: Problems) -> None:
    """Refuse an estimator that cannot learn of a mode that does not decay by itself, and name the mode."""
    if wanted.estimator is None:
        return
    rows = [kind.C.rows[kind.index("sensors", name)] for name in wanted.estimator]
    path = node.path if node is not None else kind.name
    for name, row in zip(wanted.estimator, rows, strict=True):
        if not any(row):
            problems.add(
                f"{path}: {name!r} reads no state of {kind.name}, only what a link delivers, so it cannot correct an "
                "estimate; take it out (the estimator uses it as it is).",
                node,
            )
            return
    if not unseen(kind.A.rows, rows)[0]:
        return
    mode, states = _hidden_mode(kind, rows)
    if mode is None:
        return  # what is not seen decays by itself, and the estimate of it does so too
    problems.add(
        f"{path}: the mode at {mode} 1/s of {kind.name} (seen in {states}) does not show in "
        f"{', '.join(wanted.estimator)} and does not decay by itself, so an estimate of it would be wrong for ever; "
        f"measure {states.split(', ')[0]}, or let the estimator use a sensor that depends on it.",
        node,
    )


def _hidden_mode(kind: Kind, rows: list[tuple[Fraction, ...]]) -> tuple[str | None, str]:
    """The slowest mode of the part that the sensors do not see, and its states, largest first; None if it decays."""
    import numpy as np

    from synth.network.describing import mode_text

    A = kind.A.floats()
    basis = np.array([[float(v) for v in row] for row in unseen(kind.A.rows, rows)[0]]).T
    basis = np.linalg.qr(basis)[0]
    values, vectors = np.linalg.eig(basis.T @ A @ basis)
    i = int(np.argmax(values.real))
    if values[i].real < -_SETTLES * max(1e-300, float(np.abs(np.linalg.eigvals(A)).max(initial=0.0))):
        return None, ""
    sizes = np.abs(basis @ vectors[:, i])
    order = [k for k in np.argsort(-sizes, kind="stable") if sizes[k] > 1e-6 * sizes.max()]
    return mode_text(complex(values[i])), ", ".join(kind.states[k].name for k in order)


def _fresh(table: Table, kind: Kind, wanted: Wanted, problems: Problems) -> None:
    """Refuse names that the controller's signals would take from the user's."""
    groups = ("states", "inputs", "disturbances", "takes", "offers", "sensors")
    taken = {s.name for group in groups for s in getattr(kind, group)}
    for name in names_made(kind, wanted):
        if name in taken:
            problems.add(
                f"{table.path}: the controller calls a signal of its own {name!r}, which {kind.name} has already; "
                "rename yours.",
                table,
            )


def with_structure(goal: Goal, kinds: tuple[Kind, ...], design: Node | None, problems: Problems) -> Goal:
    """``goal`` whose ``uses`` also hold the zeros that make each controller what it is; a wider list is a problem."""
    uses: dict[str, Mapping[str, tuple[str, ...]]] = dict(goal.uses)
    refused: set[str] = set()
    for kind in kinds:
        if kind.controller is None or not kind.controller.structure:
            continue
        rows = dict(uses.get(kind.name, {}))
        for name, sensors in kind.controller.structure.items():
            wrong = [s for s in rows.get(name, ()) if s not in sensors]
            if wrong and f"{kind.group} {name}" not in refused:
                refused.add(f"{kind.group} {name}")
                where = design.entries["uses"] if isinstance(design, Table) and "uses" in design.entries else design
                problems.add(
                    f"design.uses: with an estimator, {name} of {kind.name} cannot use {', '.join(wrong)}; accepted "
                    f"are {', '.join(sensors)}.",
                    where,
                )
            rows.setdefault(name, sensors)
        uses[kind.name] = rows
    return replace(goal, uses=uses)


__all__ = ["heard_takes", "read_controller", "with_structure"]
