"""The pictures of the report, each a function from a result to SVG text; also meant for a README or a slide.

They need no plotting library, repeat byte for byte, and read in grey: dash patterns, hatching and written labels
carry what the colours carry.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from synth.base.provenance import canonical, sha256
from synth.report.charts import Band, Curve, Level, Mark, curves, number_line
from synth.report.html import enclosure, lower, quantity, unit_text, upper

if TYPE_CHECKING:
    from synth.margin import Margin
    from synth.simulate import Run, Trajectory

Array = NDArray[np.float64]

_GROUPS = {"state": "states", "offer": "offers", "actuator": "actuators"}


def draw_radius(low: float, high: float, target: float | None) -> str:
    """The enclosure [low, high] of the radius on a scale with the target and 1, above which there is no proof."""
    marks = [Mark(1.0, "1: at and above this there is no proof")]
    if target is not None:
        marks.append(Mark(target, f"target {quantity(target)}"))
    words = f"radius {enclosure(low, high)}"
    marks.append(Mark(high, words, strong=True))
    goal = min(target, 1.0) if target is not None else 1.0
    bands = [Band(0.0, goal, "solid", "target met")]
    if target is not None and target < 1:
        bands.append(Band(target, 1.0, "hatched", "proven, target missed"))
    bands.append(Band(1.0, math.inf, "plain", "no proof"))
    met = "below" if high < goal else "not below"
    return number_line(
        "radius",
        "Radius of the gain operator",
        f"{words}, {met} {quantity(goal)}",
        "radius",
        marks,
        bands,
    )


def draw_margin(margin: Margin) -> str:
    """Factors on the link strengths on one axis: proven, limit of the class, exact limit, and 1 as declared.

    A limit that was never met stands at the arrow, or where the search ended and says so; one that is not known is
    left out of the picture and said in the table of the report. Only factors that are *all* proven from 1 on are solid.
    """
    marks, bands = [Mark(1.0, "1: strengths as declared")], list(_margin_bands(margin))
    if margin.proven_factor > 0:
        marks.append(Mark(margin.proven_factor, proven_words(margin), strong=True))
    marks.append(Mark(margin.class_limit, class_words(margin)))
    at = margin.exact.lower if margin.exact.capped or not math.isfinite(margin.exact.upper) else margin.exact.upper
    if at > 0:
        marks.append(Mark(at, exact_words(margin)))
    said = "; ".join(mark.label for mark in marks)
    return number_line("margin", "Margin of the coupling", said, "factor", marks, bands, log=True)


def _margin_bands(margin: Margin) -> Iterator[Band]:
    """From 1 upward: proven throughout, beyond the proof, stable but beyond the class, unstable."""
    at = 1.0
    if margin.covered > at:
        yield Band(at, margin.covered, "solid", "proven")
        at = margin.covered
    if margin.class_limit > at and not margin.class_capped:
        yield Band(at, margin.class_limit, "hatched", "not proven")
        at = margin.class_limit
    exact = margin.exact
    if math.isfinite(at) and exact.nominal_stable and exact.lower > at:
        yield Band(at, exact.lower, "dotted", "stable if links are as declared")
        at = exact.lower
    if math.isfinite(exact.upper) and exact.nominal_stable:
        yield Band(max(at, exact.lower), math.inf, "plain", "unstable")


def proven_words(margin: Margin) -> str:
    """What is proven, in a few words."""
    if margin.proven_factor <= 0:
        return "nothing proven at any strength tried"
    if math.isinf(margin.proven_factor):
        return "proven: unlimited"
    ended = " (search ended there)" if margin.capped else ""
    if margin.covered < margin.proven_factor:
        return f"proven at {lower(margin.proven_factor)}, not throughout{ended}"
    return f"proven up to {lower(margin.proven_factor)}{ended}"


def class_words(margin: Margin) -> str:
    """Where the guarantee for the whole class of links is lost, in a few words."""
    if math.isinf(margin.class_limit):
        return "limit of the class: unlimited"
    if margin.class_capped:
        return f"limit of the class: above {lower(margin.class_limit)} (search ended there)"
    return f"limit of the class: {quantity(margin.class_limit)}"


def exact_words(margin: Margin) -> str:
    """Where the network as declared breaks, in a few words."""
    exact = margin.exact
    if exact.capped:
        return f"exact limit: above {lower(exact.cap)} (search ended there)"
    if math.isinf(exact.lower):
        return "exact limit: unlimited"
    if math.isinf(exact.upper):
        return "exact limit: not found"
    if not exact.nominal_stable:
        return f"unstable as declared, stable at {lower(exact.lower)}" if exact.lower > 0 else "unstable as declared"
    return f"exact limit: {enclosure(exact.lower, exact.upper)}"


def draw_string_response(trajectory: Trajectory, kind: str, offer: str, run: str | None = None) -> str:
    """An offered signal over time in some units down the string, in the run named or the one that tells most.

    The picture ends once the lines have settled (see ``_settled``). ValueError if there is no such run, kind or
    signal, or nothing finite to draw.
    """
    shown = _run(trajectory, run)
    place, unit = _place(trajectory, kind, "offer", offer)
    values = shown.offers[kind][..., place]
    cells = _cells(shown, kind, values.shape[1])
    count = _settled(values[:, cells])
    lines = [_curve(f"unit {cell}", shown, shown.time[:count], values[:count, cell]) for cell in cells]
    title = f"{kind}.{offer} over time, run {shown.name}"
    peaks = _peaks(values)
    said = "; ".join(f"unit {cell}: largest {quantity(float(peaks[cell]))} {unit}" for cell in cells)
    axes = ("time in s", f"{offer} in {unit_text(unit) or '1'}")
    return curves(_identifier("response", kind, offer), title, said, axes, lines)


def draw_peaks_along(trajectory: Trajectory, kind: str, offer: str) -> str:
    """The largest stored value of an offered signal in each unit, for a few runs, under the guaranteed peak.

    ValueError if there is no such kind or signal, or nothing finite to draw.
    """
    place, unit = _place(trajectory, kind, "offer", offer)
    lines = []
    for run in telling(trajectory):
        peaks = _peaks(run.offers[kind][..., place]).tolist()
        lines.append(Curve(_short(run.name), range(len(peaks)), peaks))
    bound = guaranteed(trajectory, kind, "offer", offer)
    levels = [] if bound is None else [Level(bound, f"guaranteed for every unit: {upper(bound, unit)}")]
    axes = ("unit", f"largest |{offer}| in {unit_text(unit) or '1'}")
    said = "; ".join(f"{line.label}: {quantity(max(line.ys))} {unit}" for line in lines)
    name = _identifier("along", kind, offer)
    return curves(name, f"Peaks of {kind}.{offer} along the string", said, axes, lines, levels, markers=True)


@dataclass(frozen=True)
class Closest:
    """Which signal of which unit came closest to its guaranteed peak in a run from rest: ``share`` of ``bound``."""

    share: float
    bound: float
    run: Run
    kind: str
    role: str
    signal: str
    unit: str
    cell: int
    values: Array

    @property
    def words(self) -> str:
        """The finding as part of a sentence."""
        return f"{self.kind}.{self.signal} of unit {self.cell} in the run {self.run.name}"


def closest(trajectory: Trajectory) -> Closest | None:
    """The closest approach to a guaranteed peak among counted runs from rest (stored samples); None without a peak."""
    best: Closest | None = None
    for run in trajectory.runs:
        if not run.counted or run.X0 > 0:
            continue
        for row in trajectory.measures.get("signals", ()):
            kind, role, signal = row["kind"], row["role"], row["signal"]
            bound = guaranteed(trajectory, kind, role, signal)
            place, unit = _place(trajectory, kind, role, signal)
            values = getattr(run, _GROUPS[role])[kind][..., place]
            peaks = _peaks(values)
            if not bound or not peaks.size:
                continue
            cell = int(peaks.argmax())
            share = float(peaks[cell]) / bound
            if best is None or share > best.share:
                best = Closest(share, bound, run, kind, role, signal, unit, cell, values[:, cell])
    return best


def draw_worst_run(trajectory: Trajectory) -> str | None:
    """The signal that came closest to its guaranteed peak, over time, between the bounds; None without such a peak."""
    found = closest(trajectory)
    if found is None:
        return None
    line = _curve(f"unit {found.cell}", found.run, found.run.time, found.values)
    reached = quantity(100 * found.share, count=4, rounding="down" if found.share < 1 else "up")
    level = Level(found.bound, f"guaranteed: ± {upper(found.bound, found.unit)}")
    said = f"{found.run.words}; it reaches {reached} % of the bound"
    axes = ("time in s", f"{found.signal} in {unit_text(found.unit) or '1'}")
    return curves("worst", f"Closest to its bound: {found.words}", said, axes, [line], [level], symmetric=True)


def guaranteed(trajectory: Trajectory, kind: str, role: str, signal: str) -> float | None:
    """The guaranteed peak that the runs from rest were compared with, None where there is none."""
    for row in trajectory.measures.get("signals", ()):
        if (row["kind"], row["role"], row["signal"]) == (kind, role, signal):
            return None if row["guaranteed"] == "inf" else float(row["guaranteed"])
    return None


def _place(trajectory: Trajectory, kind: str, role: str, name: str) -> tuple[int, str]:
    """Position and unit of a signal; ValueError if it is not there."""
    for place, (known, unit) in enumerate(trajectory.signals.get(kind, {}).get(_GROUPS[role], ())):
        if known == name:
            return place, unit
    raise ValueError(f"the trajectory has no {role} {kind}.{name}")


def _run(trajectory: Trajectory, name: str | None) -> Run:
    """The run of that name, or the one that tells most about a string: one disturbed unit, a step, the first."""
    wanted = (name,) if name is not None else ("leader", "step")
    for candidate in wanted:
        for run in trajectory.runs:
            if run.name == candidate and len(run.time):
                return run
    if name is not None or not trajectory.runs:
        raise ValueError(f"the trajectory has no run {name!r}" if name else "the trajectory has no runs")
    return trajectory.runs[0]


def telling(trajectory: Trajectory) -> list[Run]:
    """Up to four runs from rest: one disturbed unit, a step, random, and the one that came closest to a bound."""
    stored = [run for run in trajectory.runs if len(run.time)]
    rest = [run for run in stored if run.X0 == 0] or stored
    if not rest:
        return []
    worst = max(rest, key=lambda run: run.worst_signal)
    picked = [run for name in ("leader", "step", "random extreme") for run in rest if run.name == name]
    return [*(run for run in picked if run is not worst), worst]


def _cells(run: Run, kind: str, count: int) -> list[int]:
    """Up to five cells, counted from the one that is disturbed alone (else from the first)."""
    first = 0
    pushed = run.disturbances.get(kind)
    if pushed is not None and pushed.size:
        active = [cell for cell in range(count) if bool((pushed[:, cell] != 0).any())]
        first = active[0] if len(active) == 1 else 0
    steps = [0, 1, 2, 4, 9] if first < count - 1 or count == 1 else [0, -1, -2, -4, -9]
    return [first + step for step in steps if 0 <= first + step < count]


def _settled(values: Array) -> int:
    """Samples worth drawing, at least 25: half as many again as it takes to stay within 1 % of the last one.

    ``values`` [sample, line]; all of them if a line never settles.
    """
    finite = values[np.isfinite(values).all(axis=1)]
    if not len(finite):
        return len(values)
    away = np.abs(finite - finite[-1]).max(axis=1) > 0.01 * np.abs(finite).max()
    last = int(np.flatnonzero(away)[-1]) + 1 if away.any() else len(finite)
    return min(len(values), max(25, last * 3 // 2))


def _curve(label: str, run: Run, time: Array, values: Array) -> Curve:
    """A line through stored samples; a run from rest whose first stored step is its first starts from zero at zero."""
    xs, ys = _finite(time, values)
    if run.X0 == 0 and len(xs) > 1 and 0 < xs[0] <= 1.5 * (xs[1] - xs[0]):
        xs, ys = [0.0, *xs], [0.0, *ys]
    return Curve(label, xs, ys)


def _finite(time: Array, values: Array) -> tuple[list[float], list[float]]:
    """The samples that are finite numbers: a run that ran away may end in infinity."""
    kept = np.isfinite(values)
    return time[kept].tolist(), values[kept].tolist()


def _peaks(values: Array) -> Array:
    """Largest finite |value| of each cell; values[sample, cell]."""
    size = np.abs(values)
    return np.asarray(np.where(np.isfinite(size), size, 0.0).max(axis=0, initial=0.0))


def _short(name: str) -> str:
    """A run's name without what it is aimed at, cut where it would not fit beside the picture."""
    start = name.split(" against ")[0]
    return start if len(start) <= 26 else start[:25] + "…"


def _identifier(*parts: str) -> str:
    """A name for elements of a picture that is the same every time and holds nothing but letters, digits and dashes."""
    return f"{parts[0]}-{sha256(canonical(parts))[:8]}"
