"""Explains a network to a person and to a program: what was read, what it means, and what stands in the way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.provenance import Provenance
from synth.network.model import Kind, Link, Network
from synth.network.obstructions import Obstruction, obstruction


@dataclass(frozen=True)
class Description:
    """What ``synth check`` shows: the network, the open-loop modes of its kinds and an obstruction, if there is one.

    ``modes`` holds, per kind, the eigenvalues of A alone in 1/s, slowest decay first; ``intake`` the bound on what may
    enter each ``kind.take``: the sum of |strength| over its links, in (taken unit)/(offered unit).
    """

    network: Network
    modes: Mapping[str, tuple[complex, ...]]
    intake: Mapping[str, Fraction]
    obstruction: Obstruction | None
    provenance: Provenance = field(repr=False)

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys of the public contract of ``check``."""
        network = self.network
        return {
            "title": network.title,
            "kinds": [_kind_json(kind, self.modes[kind.name]) for kind in network.kinds],
            "units": network.units,
            "description": network.description,
            "dimension": network.dimension,
            "links": [_link_json(link, network) for link in network.links],
            "intake": {name: float(bound) for name, bound in self.intake.items()},
            "obstruction": None if self.obstruction is None else self.obstruction.as_json(),
            "cautions": list(CAUTIONS),
            "provenance": self.provenance.as_dict(),
        }

    def as_text(self) -> str:
        """Lines for a person."""
        network = self.network
        lines = [network.title, "=" * len(network.title), ""]
        lines.append(
            f"A pattern of dimension {network.dimension}: one cell ({', '.join(k.name for k in network.kinds)}) "
            "repeated "
            "without end, so what is proven holds for any number of units."
        )
        for kind in network.kinds:
            lines += ["", *_kind_text(kind, self.modes[kind.name])]
        lines += ["", "Links"]
        for name in network.classes():
            lines += [f"  {name}", *(_link_text(link, network) for link in network.links if link.name == name)]
        if not network.links:
            lines.append("  none: the units do not influence each other")
        lines += ["", "Intake (sum of absolute strengths that enter a taken signal)"]
        lines += [
            f"  {name:<24} {_said(bound)} {_intake_unit(name, network)}".rstrip() for name, bound in self.intake.items()
        ] or ["  none"]
        lines += [
            "",
            f"Uniform: {len(network.kinds)} kind{'s' if len(network.kinds) > 1 else ''}, every intake bounded as "
            "above, the same in every "
            "cell. What is left to the design is one decay for all closed units.",
            "",
            *_obstruction_text(self.obstruction),
            "",
            cautions_text(),
        ]
        return "\n".join(lines) + "\n"


def describe(network: Network) -> Description:
    """Explain a network; nothing is designed or proven here (theory section 1 and statement (26))."""
    import numpy as np

    modes: dict[str, tuple[complex, ...]] = {}
    for kind in network.kinds:
        values = np.linalg.eigvals(kind.A.floats())
        modes[kind.name] = tuple(
            sorted((complex(v) for v in values), key=lambda v: (-round(v.real, 9), abs(v.imag), v.imag))
        )
    intake = {f"{kind.name}.{take.name}": Fraction(0) for kind in network.kinds for take in kind.takes}
    for link in network.links:
        intake[f"{link.kind}.{link.take}"] += abs(link.strength)
    return Description(network, modes, intake, obstruction(network), Provenance(network.hash))


def _said(value: Fraction) -> str:
    return f"{float(value):.6g}"


def _mode_text(mode: complex) -> str:
    real = 0.0 if abs(mode.real) < 1e-12 else mode.real
    return (
        f"{real:.4g}" if abs(mode.imag) < 1e-12 else f"{real:.4g} {'+' if mode.imag > 0 else '-'} {abs(mode.imag):.4g}i"
    )


def _kind_json(kind: Kind, modes: tuple[complex, ...]) -> dict[str, object]:
    def bound(value: Fraction | None) -> float | None:
        return None if value is None else float(value)

    return {
        "name": kind.name,
        "states": [{"name": s.name, "in": s.unit, "band": bound(s.band)} for s in kind.states],
        "inputs": [{"name": a.name, "in": a.unit, "limit": bound(a.limit)} for a in kind.inputs],
        "disturbances": [{"name": w.name, "in": w.unit, "peak": float(w.peak)} for w in kind.disturbances],
        "takes": [{"name": s.name, "in": s.unit} for s in kind.takes],
        "offers": [{"name": s.name, "in": s.unit, "band": bound(s.band)} for s in kind.offers],
        "sensors": [{"name": s.name, "in": s.unit} for s in kind.sensors],
        "equations": dict(kind.equations),
        "modes": [[mode.real, mode.imag] for mode in modes],
    }


def _units(link: Link, network: Network) -> tuple[str, str]:
    source, target = network.kind(link.source_kind), network.kind(link.kind)
    return target.takes[target.index("takes", link.take)].unit, source.offers[source.index("offers", link.offer)].unit


def _link_json(link: Link, network: Network) -> dict[str, object]:
    taken, offered = _units(link, network)
    return {
        "name": link.name,
        "from": f"{link.source_kind}.{link.offer}",
        "at": list(link.at),
        "to": f"{link.kind}.{link.take}",
        "strength": float(link.strength),
        "in": f"({taken})/({offered})",
        "own_strength": float(link.own_strength),
        "relative": link.relative,
        "delay_s": float(link.delay),
    }


def _signals(label: str, parts: list[str]) -> list[str]:
    return [f"  {label:<13} {', '.join(parts)}"] if parts else []


def _kind_text(kind: Kind, modes: tuple[complex, ...]) -> list[str]:
    def band(value: Fraction | None) -> str:
        return "" if value is None else f", band {_said(value)}"

    lines = [f"Kind {kind.name}"]
    lines += _signals("states", [f"{s.name} ({s.unit}{band(s.band)})" for s in kind.states])
    limits = ["unlimited" if a.limit is None else f"limit {_said(a.limit)}" for a in kind.inputs]
    lines += _signals("inputs", [f"{a.name} ({a.unit}, {limit})" for a, limit in zip(kind.inputs, limits, strict=True)])
    lines += _signals("disturbances", [f"{w.name} ({w.unit}, peak {_said(w.peak)})" for w in kind.disturbances])
    lines += _signals("takes", [f"{s.name} ({s.unit})" for s in kind.takes])
    lines += _signals("offers", [f"{s.name} ({s.unit}{band(s.band)})" for s in kind.offers])
    lines += _signals("sensors", [f"{s.name} ({s.unit})" for s in kind.sensors])
    lines += [f"  {key:<13} {text}" for key, text in kind.equations.items()]
    lines.append(f"  {'modes alone':<13} {', '.join(_mode_text(m) for m in modes)} (1/s, before any feedback)")
    return lines


def _place(at: int) -> str:
    if at == 0:
        return "in the same cell"
    steps = "1 place" if abs(at) == 1 else f"{abs(at)} places"
    return f"{steps} {'before' if at < 0 else 'behind'} (at {at})"


def _link_text(link: Link, network: Network) -> str:
    taken, offered = _units(link, network)
    own = "minus the unit's own fresh value" if link.relative else "absolute"
    late = f", up to {_said(link.delay)} s late" if link.delay else ", always fresh"
    return (
        f"    {link.source_kind}.{link.offer} {_place(link.at[0])} -> {link.kind}.{link.take}: "
        f"strength {_said(link.strength)} ({taken} per {offered}), {own}{late}"
    )


def _intake_unit(name: str, network: Network) -> str:
    units = {
        f"({taken})/({offered})"
        for link in network.links
        if f"{link.kind}.{link.take}" == name
        for taken, offered in [_units(link, network)]
    }
    return next(iter(units)) if len(units) == 1 else ""


def _obstruction_text(found: Obstruction | None) -> list[str]:
    if found is None:
        return [
            "No obstruction found: every mode that does not decay is seen by a controller and reached by an actuator."
        ]
    direction = ", ".join(f"{name} {_mode_text(weight)}" for name, weight in found.direction.items())
    return [
        f"OBSTRUCTION ({found.cause}): no local feedback can prove this network.",
        f"  phase theta {found.theta[0]:.6g}, mode s = {_mode_text(found.s)} 1/s, direction {direction}",
        f"  {found.advice}",
    ]
