"""Prove the code as flashed: sample period, computation delay, hold and rounding (theory: the sampled route).

The evidence is a norm that each sampled loop contracts, a rate and points of the gain operator, chosen in doubles. The
numbers of the claim are those that check_firmware.py derives from it, rounded to the safe side, and that program
decides at the end. Before, its peak gains are compared with the enclosures of synth.gain.sampled.peaks: two programs
must agree.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg

from synth.base.errors import InputError, SolverFailure
from synth.base.exact import Number, exact
from synth.base.progress import Listener, silent
from synth.gain.peak import PeakGain
from synth.gain.sampled.guide import sampled_peak_guide
from synth.gain.sampled.loop import Floats
from synth.gain.sampled.numbers import stored_gains
from synth.gain.sampled.peaks import SampledUnit, sampled_peaks, sampled_unit
from synth.network.gains import Gains
from synth.network.model import Kind, Network, need_fixed_pattern
from synth.network.rounding import Rounding
from synth.proof import build, check, check_firmware, peak
from synth.proof.certificate import Certificate, RadiusClaim, from_document
from synth.proof.check_flashed import FORMS, Flashed, Matrix, Row, read_units
from synth.proof.numbers import decimal_down, decimal_up


def prove_firmware(
    network: Network,
    gains_as_flashed: Any,
    period: Number | None = None,
    delay: Number | None = None,
    rounding: Rounding | None = None,
    jitter: Number = 0,
    target: Number | None = None,
    width: float = 1e-5,
    progress: Listener = silent,
) -> Certificate:
    """Prove input-to-state stability of the sampled, rounded code for any number of units.

    ``gains_as_flashed``: Gains or a Design, u = K y, taken digit for digit (see stored_gains of synth.gain for words
    and floating point); ``period`` in s, ``delay`` from sample to command in s, 0 <= delay <= period, and ``rounding``
    (default: what the network's goal says; controller states that ``rounding.stored`` does not name are kept exactly);
    ``jitter``: this version proves fixed instants only and refuses a positive one; ``target``: the radius must not
    exceed it (default: the network's goal); ``width``: of the enclosures that the peak gains are compared with.

    An unstable loop, a target out of reach or a broken limit is no error: ``proven`` is False and ``reasons`` say why.
    Raises InputError for wrong names, times and gains, SolverFailure if the two programs disagree.
    """
    need_fixed_pattern(network, "the proof of the code as flashed")
    T, d = _times(network, period, delay)
    if exact(jitter) != 0:
        raise InputError(
            f"a jitter of {float(exact(jitter)):g} s is declared; this version proves fixed sampling instants only, so "
            "leave it out and keep the instants by a hardware timer, or do not claim a proof as flashed."
        )
    rounding = network.goal.rounding if rounding is None else rounding
    goal = Fraction(network.goal.target) if target is None else exact(target)
    if not 0 < goal < 1:
        raise InputError(f"the target {float(goal):g} must lie strictly between 0 and 1.")
    gains = build._gains(network, gains_as_flashed)
    parts = _parts(network, rounding)
    _are_stored(gains, rounding)
    units = _units(network, gains, T, d, parts)
    unstable = [unit for unit in units if not _slowest(unit) > 0]
    if unstable:
        return build._nothing("firmware", goal, *(_unstable(unit) for unit in unstable))
    document = build._frame(network, gains, "firmware", goal, width)
    document["firmware"] = {"period": str(T), "delay": str(d), "kinds": parts}
    return _attempt(document, network, units, goal, progress)


def _times(network: Network, period: Number | None, delay: Number | None) -> tuple[Fraction, Fraction]:
    """Period and computation delay in s: those given, else the network's."""
    period = network.goal.period if period is None else period
    if period is None:
        raise InputError("no sample period is declared; write design.period in the problem file, for example 0.02 s.")
    T, d = exact(period), exact(network.goal.computation_delay if delay is None else delay)
    if not (T > 0 and 0 <= d <= T):
        raise InputError(
            f"the sample period must be above zero and the computation delay between zero and the period, not "
            f"{float(T):g} s and {float(d):g} s."
        )
    return T, d


def _are_stored(gains: Gains, rounding: Rounding) -> None:
    """The proof is about stored numbers, so gains that the declared form cannot hold are refused."""
    for one, kept in zip(gains.sets, stored_gains(gains, rounding).sets, strict=True):
        for actuator, row, held in zip(one.actuators, one.K.rows, kept.K.rows, strict=True):
            for signal, value, near in zip(one.signals, row, held, strict=True):
                if value != near:
                    words = f"{rounding.form} precision" if rounding.word is None else f"a word of {rounding.word} bits"
                    raise InputError(
                        f"the gain {one.kind}: {actuator} {signal} = {float(value):.17g} is no number of {words} (the "
                        f"nearest is {float(near):.17g}); prove the gains as stored, as a fresh design writes them."
                    )


def _parts(network: Network, rounding: Rounding) -> list[dict[str, Any]]:
    """The section ``firmware.kinds`` of the document; InputError names what no kind has."""
    if rounding.form not in FORMS:
        raise InputError(f"form {rounding.form!r} is not known; use one of {', '.join(FORMS)}.")
    if rounding.form != "exact" and rounding.stored:
        raise InputError(
            "states stored in floating point are not proven by this version; store them in fixed point (form exact)."
        )
    known: dict[str, set[str]] = {name: set() for name in ("sensors", "commands", "products", "stored")}
    for kind in network.kinds:
        known["sensors"] |= {f"{kind.name}.{s.name}" for s in kind.sensors}
        known["commands"] |= {f"{kind.name}.{a.name}" for a in kind.inputs}
        known["stored"] |= {f"{kind.name}.{s.name}" for s in kind.states}
    known["products"] = known["commands"]
    for name, values in known.items():
        given: Mapping[str, Number] = getattr(rounding, name)
        wrong = sorted(set(given) - values)
        if wrong:
            raise InputError(f"rounding.{name} names {', '.join(wrong)}; known are {', '.join(sorted(values))}.")
        low = sorted(key for key, value in given.items() if exact(value) < 0)
        if low:
            raise InputError(f"rounding.{name}: the distance of neighbouring numbers is negative for {', '.join(low)}.")
    return [_part(kind, rounding) for kind in network.kinds]


def _part(kind: Kind, rounding: Rounding) -> dict[str, Any]:
    def quanta(names: Sequence[str], given: Mapping[str, Number]) -> list[str]:
        return [str(exact(given.get(f"{kind.name}.{name}", 0))) for name in names]

    controller = getattr(kind, "controller", None)
    integrals = {} if controller is None else dict(controller.integrals)
    stored = [s.name for s in kind.states if f"{kind.name}.{s.name}" in rounding.stored]
    given = {name: exact(rounding.stored.get(f"{kind.name}.{name}", 0)) for name in stored}
    sensors = dict(rounding.sensors)
    if controller is not None:
        if rounding.form != "exact" and controller.states:
            raise InputError(
                f"kind {kind.name!r} keeps {', '.join(controller.states)} in the firmware; states stored in floating "
                "point are not proven by this version, so store them in fixed point (form exact)."
            )
        stored = [s.name for s in kind.states if s.name in stored or s.name in controller.states]
        for name in controller.corrected:
            # An innovation is computed from the rounded sample: its error counts once more, as if it were another one.
            own, heard = (f"{kind.name}.{name}{end}" for end in ("_innovation", ""))
            sensors[own] = max(exact(sensors.get(own, 0)), exact(sensors.get(heard, 0)))
    commands = [a.name for a in kind.inputs]
    return {
        "kind": kind.name,
        "sensors": quanta([s.name for s in kind.sensors], sensors),
        "commands": quanta(commands, rounding.commands),
        "products": quanta(commands, rounding.products),
        "form": rounding.form,
        "stored": [
            {
                "state": name,
                "quantum": str(given.get(name, Fraction(0))),
                "integrates": integrals.get(name),
            }
            for name in stored
        ],
    }


def _units(network: Network, gains: Gains, T: Fraction, d: Fraction, parts: list[dict[str, Any]]) -> list[SampledUnit]:
    try:
        return [
            sampled_unit(kind, network.links, gains[kind.name].K, T, d, [s["state"] for s in part["stored"]])
            for kind, part in zip(network.kinds, parts, strict=True)
        ]
    except ValueError as error:
        raise InputError(f"{error}; offer the signal without feed-through or make the link absolute.") from error


def _slowest(unit: SampledUnit) -> float:
    """Decay of the slowest mode in 1/s, from the transition over one period; never above 50 per period."""
    transition = unit.loop.transition()
    if not np.all(np.isfinite(transition)):
        return -math.inf
    radius = float(np.abs(np.linalg.eigvals(transition)).max(initial=0.0))
    return min(-math.log(max(radius, 1e-300)), 50.0) / float(unit.loop.period)


def _unstable(unit: SampledUnit) -> str:
    growth = math.exp(-_slowest(unit) * float(unit.loop.period))
    return (
        f"the sampled unit {unit.kind.name} is not stable: over one period of {float(unit.loop.period):g} s a mode is "
        f"multiplied by {growth:.4g}; choose a shorter period or computation delay, or other gains"
    )


def _attempt(
    document: dict[str, Any], network: Network, units: list[SampledUnit], goal: Fraction, progress: Listener
) -> Certificate:
    """Evidence, derived numbers, document, verdict of the checker."""
    measure = _remembering()
    try:
        alpha = _rate(network, units)
        document["constants"] = {"C": "0", "alpha": decimal_down(alpha, 12), "G": "0", "R": "0"}
        document["constants"]["norm"] = check_firmware.NORM
        document["evidence"] = [_evidence(unit, float(alpha)) for unit in units]
        progress("enclosing every peak gain over all phases of a period")
        _, links, flashed = read_units(document)
        evidence = check_firmware.read_evidence(document, flashed)
        plain = [measure(one, P, g, Fraction(0)) for one, (P, g) in zip(flashed, evidence, strict=True)]
        _agree(units, plain, document["provenance"]["settings"]["width"])
        operator = check_firmware.Operator(flashed, links)
        ones = [Fraction(1)] * len(links)
        low, high = (operator.matrix(side, ones) for side in ([g.take_low for g in plain], [g.take for g in plain]))
        _points(document, operator.names, low, high)
        obstacle = build.out_of_reach(document)
        if obstacle is not None:
            radius = document["radius"]
            found = RadiusClaim(float(radius["lower"]), float(radius["upper"]))
            return Certificate(False, "firmware", "", found, float(goal), reasons=(obstacle,))
        derived = check_firmware.derive(document, measure)
    except check.Rejected as reason:
        return build._nothing("firmware", goal, str(reason))
    except (np.linalg.LinAlgError, OverflowError) as error:
        return build._nothing("firmware", goal, f"no evidence was found, the loops are too badly scaled ({error})")
    progress("stating the claim and checking it")
    _state(document, *derived)
    return from_document(document, check_firmware.check_document(document))


def _remembering() -> check_firmware.Measure:
    """check_firmware.Numbers, each computed once; the final check computes everything anew."""
    known: dict[tuple[str, Fraction], check_firmware.Numbers] = {}

    def measure(unit: Flashed, P: Matrix, gamma: Fraction, alpha: Fraction) -> check_firmware.Numbers:
        if (unit.name, alpha) not in known:
            known[unit.name, alpha] = check_firmware.Numbers(unit, P, gamma, alpha)
        return known[unit.name, alpha]

    return measure


def _matrix(network: Network, units: list[SampledUnit], alpha: float) -> Floats | None:
    """The gain operator on the offers, in doubles, weighted with the rate; None if a loop is not stable then."""
    names = [(unit.kind.name, offer.name) for unit in units for offer in unit.kind.offers]
    M = np.zeros((len(names), len(names)))
    for unit in units:
        guide = sampled_peak_guide(unit.loop, unit.takes, unit.offers, alpha, grid=3)
        if guide is None or not np.all(np.isfinite(guide.gains)):
            return None
        p = guide.gains + np.abs(unit.through["offers"][0].floats())
        for link in network.links:
            if link.kind == unit.kind.name:
                if alpha * float(link.delay) > 300:
                    return None
                weight = abs(float(link.strength)) * math.exp(alpha * float(link.delay))
                column = names.index((link.source_kind, link.offer))
                for k, offer in enumerate(unit.kind.offers):
                    take = unit.kind.index("takes", link.take)
                    M[names.index((unit.kind.name, offer.name)), column] += p[k, take] * weight
    return M


def _rate(network: Network, units: list[SampledUnit]) -> Fraction:
    """The rate alpha (1/s) to claim: at most half-way from the radius to one, and nine tenths of the slowest mode."""
    slowest = min(_slowest(unit) for unit in units)
    allowed = (1 + peak.radius_of(_matrix(network, units, 0.0))) / 2
    low, high = slowest / 1000, 0.9 * slowest
    for _ in range(9):
        middle = (low + high) / 2
        low, high = (middle, high) if peak.radius_of(_matrix(network, units, middle)) <= allowed else (low, middle)
    return Fraction(decimal_down(Fraction(low), 3))


def _evidence(unit: SampledUnit, alpha: float) -> dict[str, Any]:
    """P and gamma with |Phi xi|_P <= gamma |xi|_P, gamma e^(alpha T) < 1, from Lyapunov's equation."""
    T = float(unit.loop.period)
    decay = _slowest(unit)
    gamma = Fraction(decimal_up(Fraction(max(math.exp(-(alpha + (decay - alpha) * 0.8) * T), 0.01)), 12))
    Phi = unit.loop.transition()
    _, (scale, _) = scipy.linalg.matrix_balance(Phi, permute=False, separate=True)
    balanced = Phi / scale[:, None] * scale
    P = scipy.linalg.solve_discrete_lyapunov(balanced.T / float(gamma), np.eye(len(Phi)))
    top = float(np.abs(P).max())
    norm = peak.rounded_norm(np.asarray((P + P.T) / (2 * top)), np.asarray(scale, dtype=np.float64))
    return {"kind": unit.kind.name, "P": norm.texts(), "gamma": str(gamma)}


def _points(document: dict[str, Any], names: list[str], low: Matrix, high: Matrix) -> None:
    """A point of strict decay, a point that bounds the radius from below, and the radius they give."""
    M_low, M = (
        np.array([[float(v) for v in row] for row in side]).reshape(len(side), len(side)) for side in (low, high)
    )
    points = zip(names, peak.point_above(M), peak.point_below(M_low), strict=True)
    document["point"] = [{"of": name, "s": str(s), "low": str(v)} for name, s, v in points]
    s, v = check.read_point(document, names)
    upper = max((a / b for a, b in zip(check.apply(high, s), s, strict=True)), default=Fraction(0))
    document["radius"] = {"lower": decimal_down(check.least(check.apply(low, v), v)), "upper": decimal_up(upper)}


def _agree(units: list[SampledUnit], found: list[check_firmware.Numbers], width: float) -> None:
    """Compare the checker's numbers with ball arithmetic; SolverFailure if any pair of enclosures is disjoint."""
    roles = {"offer": "offers", "state": "states", "actuator": "actuators", "reading": "readings"}
    for unit, numbers in zip(units, found, strict=True):
        known = sampled_peaks(unit, width=width)
        lines = [(role, i) for role in roles for i in range(len(getattr(unit, roles[role])))]
        good = True
        for (role, i), low, high, wave in zip(lines, numbers.take_low, numbers.take, numbers.wave, strict=False):
            gains = known.gains[roles[role]]
            good &= _overlap(gains["takes"], i, low, high) and _overlap(gains["waves"], i, None, wave)
        if not good:
            raise SolverFailure(
                f"two programs disagree about the sampled peak gains of {unit.kind.name}; nothing is claimed. Please "
                "report this network."
            )


def _overlap(known: PeakGain, i: int, low: Row | None, high: Row) -> bool:
    """Whether two enclosures of one row can both be right."""
    pairs = zip(known.lower[i].tolist(), known.upper[i].tolist(), high, strict=False)
    good = all(float(b) * (1 + 1e-12) >= less and float(b) <= more * (1 + 1e-3) + 1e-9 for less, more, b in pairs)
    if low is not None:
        good &= all(float(a) <= more * (1 + 1e-12) for a, more in zip(low, known.upper[i].tolist(), strict=False))
    return good


def _state(document: dict[str, Any], found: check.Derived, rounding: Row, lines: list[check.Line]) -> None:
    """Write the claims into the document: derived bounds rounded to the safe side, sentences, hash."""
    states = [k for k, line in enumerate(lines) if line.role == "state"]
    document["radius"] = {"lower": decimal_down(found.radius[0]), "upper": decimal_up(found.radius[1])}
    document["constants"] |= {"C": decimal_up(found.C), "G": decimal_up(found.G)}
    document["constants"]["R"] = decimal_up(max(rounding[k] for k in states))
    document["peaks"] = [
        {
            "kind": line.kind,
            "role": line.role,
            "signal": line.signal,
            "value": decimal_up(base),
            "rounding": decimal_up(part),
            "in": line.unit,
            "limit": None if line.limit is None else str(line.limit),
        }
        for line, base, part in zip(lines, found.base, rounding, strict=True)
    ]
    room = check_firmware.rooms(found, rounding)
    document["validity"] = {
        key: "inf" if value is None else decimal_down(max(value, Fraction(0)) * (1 - Fraction(1, 10**8)))
        for key, value in room.items()
    } | {"meaning": check.MEANING}
    document["claim"], document["covers"], document["excludes"] = check_firmware.sentences(document)
    document["cautions"] = list(check.CAUTIONS)
    document["hash"] = check.digest(document)


__all__ = ["Rounding", "prove_firmware"]
