"""What the firmware must be able to represent: a guaranteed peak and a suggested range for each signal and actuator.

Peaks are those of the certificate: under the declared disturbances, from rest. Sensors that are not states get the
triangle inequality |y| <= sum |C| peak(x) + sum |N| peak(v), evaluated in rationals and rounded up. The rounded
integers of a fixed-point format are not chosen here.
"""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction
from typing import Any

from synth.handoff.digits import digits
from synth.handoff.table import GainRow
from synth.network.model import Kind, Network

_LARGEST_POWER = 1023  # of two, in a double

Facts = dict[str, Any]
Peaks = dict[tuple[str, str, str], Fraction]


def exact_peaks(document: Mapping[str, Any]) -> Peaks:
    """The finite peaks of a certificate's document as rationals by (kind, role, signal); infinite ones are left out."""
    return {
        (peak["kind"], peak["role"], peak["signal"]): Fraction(peak["value"])
        for peak in document["peaks"]
        if peak["value"] != "inf"
    }


def scaling(network: Network, rows: tuple[GainRow, ...], known: Peaks) -> dict[str, Facts]:
    """Scaling facts by ``kind.actuator.signal``: gain, units, peaks of both sides, suggested symmetric ranges.

    ``signal_peak`` and ``actuator_peak`` are upper bounds in the declared units, None where the certificate gives none.
    A suggested range r means -r to r; r is the smallest power of two that is not below the peak.
    """
    result: dict[str, Facts] = {}
    for row in rows:
        kind = network.kind(row.kind)
        signal = sensor_peak(network, kind, row.signal, known)
        actuator = known.get((row.kind, "actuator", row.actuator))
        limit = kind.inputs[kind.index("inputs", row.actuator)].limit
        result[f"{row.kind}.{row.actuator}.{row.signal}"] = {
            "kind": row.kind,
            "actuator": row.actuator,
            "signal": row.signal,
            "gain": row.gain,
            "gain_unit": row.gain_unit,
            "signal_unit": row.signal_unit,
            "signal_peak": rounded_up(signal),
            "signal_range": binary_range(signal),
            "actuator_unit": row.actuator_unit,
            "actuator_peak": rounded_up(actuator),
            "actuator_limit": None if limit is None else float(limit),
            "actuator_range": binary_range(actuator if limit is None else limit),
        }
    return result


def sensor_peak(network: Network, kind: Kind, sensor: str, known: Peaks) -> Fraction | None:
    """Upper bound of |y| of one sensor, None if a peak that it needs is not known."""
    row = kind.index("sensors", sensor)
    total = Fraction(0)
    for j, state in enumerate(kind.states):
        weight = abs(kind.C[row, j])
        if weight:
            peak = known.get((kind.name, "state", state.name))
            if peak is None:
                return None
            total += weight * peak
    for j, take in enumerate(kind.takes):
        weight = abs(kind.N[row, j])
        if weight:
            peak = _taken_peak(network, kind, take.name, known)
            if peak is None:
                return None
            total += weight * peak
    return total


def _taken_peak(network: Network, kind: Kind, take: str, known: Peaks) -> Fraction | None:
    """Upper bound of |v|: |strength| times the neighbour's peak plus |own strength| times the unit's own."""
    total = Fraction(0)
    for link in network.links:
        if (link.kind, link.take) != (kind.name, take):
            continue
        theirs = known.get((link.source_kind, "offer", link.offer))
        own = known.get((kind.name, "offer", link.offer)) if link.relative else Fraction(0)
        if theirs is None or own is None:
            return None
        total += abs(link.strength) * theirs + abs(link.own_strength) * own
    return total


def rounded_up(value: Fraction | None) -> float | None:
    """``value`` as a decimal of at most six digits that is not below it."""
    return None if value is None else float(digits(value, 6, "up"))


def binary_range(peak: Fraction | None) -> float | None:
    """The smallest power of two that is not below ``peak``; None for an unknown or zero peak."""
    if peak is None or peak <= 0:
        return None
    power = peak.numerator.bit_length() - peak.denominator.bit_length()
    while Fraction(2) ** power < peak:
        power += 1
    while Fraction(2) ** (power - 1) >= peak:
        power -= 1
    return float(Fraction(2) ** power) if power <= _LARGEST_POWER else None
