"""A design in words, tables and plain data."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.base.caution import CAUTIONS, cautions_text

if TYPE_CHECKING:
    from synth.local.aims import AimedPeak
    from synth.local.designing import Design


MOST_SHOWN = 8  # kinds in a text; the rest is in the JSON document
_AIMS = {
    "radius": "the radius",
    "effort": "the guaranteed peak of the actuators",
    "peak": "the guaranteed peak of the named signals",
}


def explanation(design: Design) -> str:
    """What was reached, within which limits, and what blocks."""
    lines = []
    if math.isfinite(design.upper):
        lines.append(f"The radius lies between {_ends(design.lower, design.upper)}; the target is {design.target:g}.")
    else:
        lines.append("With these gains a closed unit does not settle, so there is no finite radius.")
    still = not design.broken and design.upper <= design.target
    if still:
        lines.append("The target is reached and every limit holds.")
        if design.sampled is None or not design.sampled.searched:
            least = f"Of the gains within the limits these make {_AIMS[design.aim]} least,"
            lines.append(f"{least} as far as the search could tell.")
        near = [p for p in design.peaks if p.limit and p.value > 0.98 * float(p.limit)]
        lines.extend(f"{p.kind}.{p.signal} uses {p.value / float(p.limit or 1):.1%} of its limit." for p in near)
    lines.extend(f"Not kept: {broken.sentence}." for broken in design.broken)
    lines.extend(
        f"{p.kind}.{p.signal}: at most {p.guaranteed:.4g} {p.unit} for every link of the proven class; "
        f"{_nominal(p)} with fresh links of the written strengths (estimate)."
        for p in design.aimed
    )
    if design.aim != design.network.goal.aim:
        sampled = design.sampled is not None and design.sampled.searched
        why = "the sampled units needed gains of their own" if sampled else "the target is out of reach"
        lines.append(f"The radius was made least, not what the aim names, because {why}.")
    if design.blocking is not None:
        lines.append(design.blocking.sentence)
        for curve in design.blocking.curves:
            where = f"the limit of {curve.kind}.{curve.name}" if curve.kind else f"the bound {curve.name!r}"
            points = ", ".join(
                f"{value:.4g}: {'no finite radius' if not math.isfinite(radius) else format(radius, '.3g')}"
                + ("" if kept else " (other limits broken)")
                for value, radius, kept in curve.points
            )
            lines.append(f"Smallest radius met over {where} ({curve.unit}): {points}.")
    if design.sampled is not None:
        lines.append(design.sampled.sentence())
    return "\n".join(lines)


def document(design: Design) -> dict[str, object]:
    """Plain data for JSON: numbers in the declared units, infinity as "inf", complex numbers as [re, im]."""
    return {
        "gains": {gain_set.kind: gain_set.as_dict() for gain_set in design.gains.sets},
        "exact_gains": {gain_set.kind: gain_set.K.texts() for gain_set in design.gains.sets},
        "units": {
            kind.name: {
                "signals": [s.unit for s in kind.sensors],
                "actuators": [a.unit for a in kind.inputs],
                "modes": "1/s",
            }
            for kind in design.network.kinds
        },
        "sign_convention": "u = K y",
        "target": design.target,
        "radius": {"lower": _plain(design.lower), "upper": _plain(design.upper)},
        "reached": design.reached,
        "blocking": None if design.blocking is None else design.blocking.as_json(),
        "broken": [broken.sentence for broken in design.broken],
        "modes": {
            kind.name: [[v.real, v.imag] for v in modes]
            for kind, modes in zip(design.network.kinds, design.modes, strict=True)
        },
        "peaks": {
            f"{p.kind}.{p.role}.{p.signal}": {
                "value": _plain(p.value), "in": p.unit, "limit": None if p.limit is None else float(p.limit)
            }
            for p in design.peaks
        },
        "aim": design.aim,
        "aimed": [
            {
                "kind": p.kind, "role": p.role, "signal": p.signal, "in": p.unit, "guaranteed": _plain(p.guaranteed),
                "nominal": None if p.nominal is None else _plain(p.nominal),
                "limit": None if p.limit is None else float(p.limit),
            }
            for p in design.aimed
        ],
        "sampled": None if design.sampled is None else design.sampled.as_json(),
        "history": list(design.history),
        "provenance": design.provenance.as_dict(),
        "cautions": list(CAUTIONS),
    }  # fmt: skip


def tables(design: Design) -> str:
    """Gains, modes and peaks as text tables with units, then the explanation and the cautions."""
    lines = [design.network.title, "", "Gains, u = K y", *_gains(design), "", "Modes of the closed units (1/s)"]
    kinds = _shown(design)
    for kind, modes in zip(design.network.kinds, design.modes, strict=True):
        if kind.name not in kinds:
            continue
        shown = ", ".join(_mode(v) for v in sorted(modes, key=lambda v: (-v.real, v.imag)) if v.imag >= 0)
        lines.append(f"  {kind.name}: {shown}")
    lines.extend(("", "Guaranteed peaks under the declared disturbances, from rest", *_peaks(design), ""))
    lines.extend((explanation(design), "", cautions_text()))
    return "\n".join(lines)


def _gains(design: Design) -> list[str]:
    rows: list[tuple[str, ...]] = [("kind", "actuator", "signal", "gain", "unit")]
    kinds = _shown(design)
    for kind, gain_set in zip(design.network.kinds, design.gains.sets, strict=True):
        if kind.name not in kinds:
            continue
        for i, actuator in enumerate(kind.inputs):
            for j, sensor in enumerate(kind.sensors):
                unit = f"({actuator.unit})/({sensor.unit})"
                rows.append((kind.name, actuator.name, sensor.name, decimal(gain_set.K[i, j]), unit))
    lines = _aligned(rows)
    left_out = len(design.network.kinds) - len(kinds)
    if left_out:
        sets = len(design.network.gain_groups())
        lines.append(
            f"  {len(design.network.kinds)} different units with {sets} gain set{'s' if sets > 1 else ''}; "
            f"{left_out} of them are not shown (all are with --json and in the gain table)"
        )
    return lines


def _shown(design: Design) -> frozenset[str]:
    """The kinds that a text shows: all if they are few, else the first of each gain set, and of these the first few."""
    kinds = [kind.name for kind in design.network.kinds]
    if len(kinds) > MOST_SHOWN:
        kinds = [names[0] for names in design.network.gain_groups().values()][:MOST_SHOWN]
    return frozenset(kinds)


def _peaks(design: Design) -> list[str]:
    rows: list[tuple[str, ...]] = [("kind", "signal", "role", "peak", "limit", "unit")]
    kinds = _shown(design)
    for p in design.peaks:
        if p.kind not in kinds:
            continue
        limit = "none" if p.limit is None else f"{float(p.limit):g}"
        rows.append((p.kind, p.signal, p.role, f"{p.value:.4g}", limit, p.unit))
    return _aligned(rows)


def _aligned(rows: list[tuple[str, ...]]) -> list[str]:
    widths = [max(len(row[k]) for row in rows) for k in range(len(rows[0]))]
    return [
        "  " + "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    ]


def decimal(value: Fraction) -> str:
    """The exact decimal digits of a rational that has finitely many, else numerator/denominator."""
    twos, fives, rest = 0, 0, value.denominator
    while rest % 2 == 0:
        twos, rest = twos + 1, rest // 2
    while rest % 5 == 0:
        fives, rest = fives + 1, rest // 5
    if rest != 1:
        return str(value)
    places = max(twos, fives)
    digits = str(abs(value.numerator) * 10**places // value.denominator).rjust(places + 1, "0")
    sign = "-" if value < 0 else ""
    return sign + (f"{digits[:-places]}.{digits[-places:]}" if places else digits)


def _mode(value: complex) -> str:
    if value.imag == 0:
        return f"{value.real:.4g}"
    return f"{value.real:.4g} +- {value.imag:.4g}j"


def _ends(lower: float, upper: float) -> str:
    """Both ends with enough digits to tell them apart, the lower rounded down and the upper rounded up."""
    places = 6 - math.floor(math.log10(upper)) if upper > 0 else 6
    unit = 10.0**-places
    places = max(0, places)
    return f"{math.floor(lower / unit) * unit:.{places}f} and {math.ceil(upper / unit) * unit:.{places}f}"


def _nominal(peak: AimedPeak) -> str:
    if peak.nominal is None:
        return "not estimated"
    return f"about {peak.nominal:.4g} {peak.unit}" if math.isfinite(peak.nominal) else "without bound"


def _plain(value: float) -> float | str:
    return value if math.isfinite(value) else "inf"
