"""Prove: choose evidence, state what it gives, and let the checker decide.

The numbers of a claim are those the checker derives from the evidence, rounded to the safe side. Before that, the peak
gains in them are compared with enclosures from ball arithmetic (synth.gain): two independent programs must agree.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, SolverFailure
from synth.base.progress import Listener, silent
from synth.base.provenance import Provenance
from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import across, plan_of, settled_cells, shortest_string
from synth.gain.peak import PeakGain
from synth.gain.unit import state_peaks
from synth.network.gains import Gains
from synth.network.model import Network
from synth.proof import check, peak, storage
from synth.proof.certificate import Certificate, RadiusClaim, from_document
from synth.proof.numbers import decimal_down, decimal_up, dyadic
from synth.proof.points import PeakRows, Terms, low_point, radius_and_point

ROUTES = ("auto", "peak", "storage", "firmware")
Closed = dict[tuple[str, check.Own], ClosedUnit]  # by kind and what is folded in
_MOST_STATIONS = 1500  # of a system with windows: beyond this they stop growing
_MOST_REASONS = 10
_NEAR = 0.05  # where the target is reached, windows grow no more once both bounds are as near as that


def prove(
    network: Network,
    design_or_gains: Any,
    route: str = "auto",
    target: Fraction | float | str | None = None,
    width: float = 1e-6,
    progress: Listener = silent,
) -> Certificate:
    """Prove input-to-state stability with printed constants for any number of units (theory: section 2).

    ``design_or_gains``: a Design or Gains, u = K y in the declared units; ``route``: peak (theory 3a), storage (3b),
    auto: peak first, then storage; or firmware: sampled with the network's period (see prove_firmware); ``target``: the
    radius must not exceed it, 0 < target < 1 (default: the network's goal); ``width``: relative width of the
    ball-arithmetic enclosures the peak gains are compared with.

    An unstable closed unit, a target out of reach or a broken limit is no error: the result has ``proven`` False and
    says why. Raises InputError for an unknown route, target or gains that do not fit, SolverFailure if the two
    programs disagree.
    """
    if not isinstance(network, Network):
        raise InputError(
            f"the proof needs a network, not {type(network).__name__}; read a problem file first: synth.read(path)."
        )
    if route not in ROUTES:
        raise InputError(f"route {route!r} is not known; use one of {', '.join(ROUTES)}.")
    if route == "firmware":
        from synth.proof.firmware import prove_firmware  # it builds on this module

        return prove_firmware(network, design_or_gains, target=target, progress=progress)
    goal = Fraction(network.goal.target if target is None else target)
    if not 0 < goal < 1:
        raise InputError(f"the target {float(goal):g} must lie strictly between 0 and 1.")
    gains = _gains(network, design_or_gains)
    plan = plan_of(network)
    closed = {
        (plan.kinds[spec.kind].name, spec.own): unit
        for spec, unit in zip(plan.specs, close_plan(plan, gains), strict=True)
    }
    unstable = {key: unit for key, unit in closed.items() if not peak.decay(unit.A) > 0}
    if unstable:
        reasons = tuple(
            f"the closed unit {unit.kind.name} is not stable: its rightmost mode is {-peak.decay(unit.A):.4g} 1/s; "
            "choose gains that make every mode decay"
            for unit in list(unstable.values())[:_MOST_REASONS]
        )
        return _nothing("peak" if route == "auto" else route, goal, *reasons)
    tried: list[Certificate] = []
    for name in ("peak", "storage") if route == "auto" else (route,):
        progress(f"trying the {name} route")
        tried.append(_attempt(network, gains, closed, name, goal, width, progress))
        if tried[-1].proven:
            return tried[-1]
    return tried[0] if len(tried) == 1 else _both(tried)


def _gains(network: Network, design_or_gains: Any) -> Gains:
    gains = getattr(design_or_gains, "gains", design_or_gains)
    if not isinstance(gains, Gains):
        raise InputError(f"gains or a design were expected, not {type(design_or_gains).__name__}.")
    for kind in network.kinds:
        if kind.name not in gains:
            raise InputError(f"there are no gains for the kind {kind.name!r}.")
        if gains[kind.name].K.shape != (len(kind.inputs), len(kind.sensors)):
            raise InputError(f"the gains of {kind.name!r} must be {len(kind.inputs)} x {len(kind.sensors)}.")
    return gains


def _both(tried: list[Certificate]) -> Certificate:
    """The first attempt, with the reasons of every route."""
    reasons = tuple(f"{one.route} route: {reason}" for one in tried for reason in one.reasons)
    return replace(tried[0], reasons=reasons)


def _attempt(
    network: Network, gains: Gains, closed: Closed, route: str, goal: Fraction, width: float, progress: Listener
) -> Certificate:
    """One route to the end: evidence, derived numbers, document, verdict of the checker."""
    document = _frame(network, gains, route, goal, width)
    measure = _remembering()
    try:
        obstacle: str | None = None
        for windows in windows_for(network):
            document |= {"windows": windows} if windows else {}
            system = check.read_system(document)
            _same_units(system, closed)
            if route == "peak":
                obstacle = _peak_evidence(document, system, closed, progress, measure)
            else:
                obstacle = storage.fill_evidence(document, system, progress)
            if _close_enough(document, system, obstacle):
                break
        if obstacle is not None:
            low, high = document["radius"]["lower"], document["radius"]["upper"]
            found = RadiusClaim(float(low), float(high))
            return Certificate(False, route, "", found, float(goal), reasons=(obstacle,))
        found_numbers = check.derive(document, measure)
    except check.Rejected as reason:
        return _nothing(route, goal, str(reason))
    except (np.linalg.LinAlgError, ValueError, OverflowError) as error:
        return _nothing(
            route, goal, f"no evidence was found, the closed units are too badly scaled or damped ({error})"
        )
    progress("stating the claim and checking it")
    _state(document, found_numbers)
    return from_document(document, check.check_document(document))


def windows_for(network: Network) -> Iterator[dict[str, int]]:
    """Sizes of the windows at the edges of a pattern, from small to large; for other descriptions one empty answer."""
    if network.description != "edge pattern":
        yield {}
        return
    line = across(network)
    sizes = {edge.side: settled_cells(line, edge) for edge in line.edges}
    while True:
        both = {"least": shortest_string(line)} if len(sizes) == 2 else {}
        yield sizes | both
        sizes = {side: 2 * size for side, size in sizes.items()}


def _close_enough(document: dict[str, Any], system: check.System, obstacle: str | None) -> bool:
    """Whether larger windows are not worth trying: there are none, both bounds meet, or the system is large."""
    low, high, target = (
        float(v) for v in (*(document["radius"][k] for k in ("lower", "upper")), Fraction(document["target"]))
    )
    met = high <= low * (1 + 1e-3) + 1e-9 or low > target
    done = met or (obstacle is None and high <= low * (1 + _NEAR))
    return "windows" not in document or done or len(system.stations) > _MOST_STATIONS


def _same_units(system: check.System, closed: Closed) -> None:
    """Both programs must work out the same units from the description; SolverFailure if they do not."""
    for unit in system.units:
        known = closed.get((unit.name, unit.own))
        if known is None or [list(row) for row in known.A.rows] != unit.A:
            raise SolverFailure(
                f"two programs disagree about what is folded into {unit.name}; nothing is claimed. Please report this "
                "network."
            )


def _nothing(route: str, goal: Fraction, *reasons: str) -> Certificate:
    """Nothing proven, nothing known about the radius."""
    return Certificate(False, route, "", RadiusClaim(0.0, float("inf")), float(goal), reasons=reasons)


def _remembering() -> check.Measure:
    """check.unit_gains, each answer computed once; the final check computes everything anew."""
    known: dict[tuple[str, check.Own, Fraction, str], check.Gains] = {}

    def measure(unit: check.Unit, evidence: check.Evidence, alpha: Fraction) -> check.Gains:
        key = (unit.name, unit.own, alpha, str(evidence.a))
        if key not in known:
            known[key] = check.unit_gains(unit, evidence, alpha)
        return known[key]

    return measure


def _frame(network: Network, gains: Gains, route: str, goal: Fraction, width: float) -> dict[str, Any]:
    """A document with everything that is given, and nothing claimed yet."""
    model: dict[str, Any] = dict(network.model_document())
    return {
        "schema": check.SCHEMA,
        "version": check.VERSION,
        "network_hash": network.hash,
        "model": model,
        "gains": [
            {
                "kind": kind["name"],
                "actuators": list(gains[kind["name"]].actuators),
                "signals": list(gains[kind["name"]].signals),
                "K": gains[kind["name"]].K.texts(),
            }
            for kind in model["kinds"]
        ],
        "route": route,
        "target": str(goal),
        "evidence": [],
        "radius": {"lower": "0", "upper": "inf"},
        "point": [],
        "constants": {"C": "0", "alpha": "0", "G": "0", "norm": check.NORM},
        "provenance": Provenance(network.hash, {"width": width}).as_dict(),
    }


def _peak_evidence(
    document: dict[str, Any], system: check.System, closed: Closed, progress: Listener, measure: check.Measure
) -> str | None:
    """Fill in evidence, points and rate of the peak route; returns a sentence if the target is out of reach."""
    terms = Terms(system)
    units = [closed[unit.name, unit.own] for unit in system.units]
    alpha = peak.choose_rate(units, terms)
    if not alpha > 0:
        alpha = Fraction(1, 1000) * Fraction(min(peak.decay(unit.A) for unit in units))
    evidence = []
    for unit, spec in zip(units, system.units, strict=True):
        slowest = Fraction(peak.decay(unit.A))
        a = Fraction(decimal_down(alpha + (slowest - alpha) * Fraction(3, 4), 5))
        P = peak.decaying_norm(unit.A, a)
        own = storage.own_document(spec, [offer.name for offer in unit.kind.offers])
        evidence.append({"kind": spec.name, "own": own, "P": P.texts(), "a": str(a), "tau": [], "tau_w": []})
    document["evidence"] = evidence
    document["constants"]["alpha"] = decimal_down(alpha, 12)
    progress("enclosing every peak gain")
    read = check.read_evidence(document, system.units)
    plain = [measure(u, e, Fraction(0)) for u, e in zip(system.units, read, strict=True)]
    _agree(units, plain, document["provenance"]["settings"]["width"])
    fast: list[check.Gains] = []
    if not system.exact:
        rate = Fraction(document["constants"]["alpha"])
        fast = [measure(check.slim(u), e, rate) for u, e in zip(system.units, read, strict=True)]
    _peak_points(document, system, terms, plain, fast)
    return out_of_reach(document)


def _peak_points(
    document: dict[str, Any],
    system: check.System,
    terms: Terms,
    plain: list[check.Gains],
    fast: list[check.Gains],
) -> None:
    """The points, and the radius they give exactly."""
    offers = [unit.offers for unit in system.units]
    widths = [len(unit.takes) for unit in system.units]

    def table(side: list[check.Matrix]) -> list[NDArray[np.float64]]:
        return [_floats(rows[:n], width) for rows, n, width in zip(side, offers, widths, strict=True)]

    _, s = radius_and_point(PeakRows(terms, table([g.take for g in plain])))
    low = np.zeros(len(s))
    for block in storage.blocks_of(system):
        part = Terms(system, block)
        place = np.concatenate([np.arange(terms.first[i], terms.first[i + 1]) for i in part.stations.tolist()])
        low[place] = low_point(PeakRows(part, table([g.take_low for g in plain])))[1]
    numbers = [s.tolist(), low.tolist()]
    if fast:
        alpha = float(Fraction(document["constants"]["alpha"]))
        numbers.append(radius_and_point(PeakRows(terms, table([g.take for g in fast]), alpha))[1].tolist())
    keys = ("s", "low", "fast")[: len(numbers)]
    document["point"] = [
        {"of": name, **{key: str(dyadic(v) if v else Fraction(0)) for key, v in zip(keys, values, strict=True)}}
        for name, *values in zip(check.peak_names(system), *numbers, strict=True)
    ]
    operator = check.PeakOperator(system, plain)
    exact_s, exact_low, *_ = check.read_point(document, check.peak_names(system), bool(fast))
    images = zip(operator.image(exact_s), exact_s, strict=True)
    upper = max((a / b for a, b in images), default=Fraction(0))
    document["radius"] = {"lower": decimal_down(operator.lower(exact_low)), "upper": decimal_up(upper)}


def out_of_reach(document: dict[str, Any]) -> str | None:
    """The sentence for a radius above the target, None where the target is reached."""
    upper, target = Fraction(document["radius"]["upper"]), Fraction(document["target"])
    if upper <= target:
        return None
    return (
        f"the radius of the gain operator is between {document['radius']['lower']} and {document['radius']['upper']}, "
        f"above the target {float(target):g}; ask for less coupling, other gains or a larger target"
    )


def _agree(closed: list[ClosedUnit], found: list[check.Gains], width: float) -> None:
    """Compare all unweighted numbers of the checker with ball arithmetic; SolverFailure if any pair is disjoint."""
    for unit, gains in zip(closed, found, strict=True):
        known = state_peaks(unit, width=width)
        takes = (known.offers_takes, known.states_takes, known.actuators_takes)
        waves = (known.offers_dist, known.states_dist, known.actuators_dist)
        free = (known.offers_free, known.states_free, known.actuators_free)
        own = _floats(gains.take, unit.D.shape[1]), _floats(gains.wave, unit.E.shape[1])
        start = np.array([float(v) for v in gains.start])
        # Each side bounds the same number from above, so neither may lie below the other's lower bound.
        good = np.all(_floats(gains.take_low, unit.D.shape[1]) <= _stack(takes, "upper") * (1 + 1e-12))
        good &= np.all(own[0] * (1 + 1e-12) >= _stack(takes, "lower"))
        good &= np.all(own[1] * (1 + 1e-12) >= _stack(waves, "lower"))
        good &= np.all(own[1] <= _stack(waves, "upper") * (1 + 1e-5) + 1e-9)
        good &= np.all(start * (1 + 1e-12) >= np.concatenate([part.lower for part in free]))
        if not good:
            raise SolverFailure(
                f"two programs disagree about the peak gains of {unit.kind.name}; nothing is claimed. Please report "
                "this network."
            )


def _floats(rows: check.Matrix, width: int) -> NDArray[np.float64]:
    return np.array([[float(v) for v in row] for row in rows], dtype=np.float64).reshape(len(rows), width)


def _stack(parts: tuple[PeakGain, ...], end: str) -> NDArray[np.float64]:
    return np.vstack([getattr(part, end) for part in parts])


def _state(document: dict[str, Any], found: check.Derived) -> None:
    """Write the claims into the document: derived bounds rounded to the safe side, sentences, hash."""
    document["radius"] = {"lower": decimal_down(found.radius[0]), "upper": decimal_up(found.radius[1])}
    document["constants"] |= {"C": decimal_up(found.C), "G": decimal_up(found.G)}
    document["peaks"] = [
        {
            "kind": line.kind,
            "role": line.role,
            "signal": line.signal,
            "value": decimal_up(base),
            "in": line.unit,
            "limit": None if line.limit is None else str(line.limit),
        }
        for line, base in zip(found.lines, found.base, strict=True)
    ]
    none = [Fraction(0)] * len(found.lines)
    rooms = (found.room(found.base, found.start), found.room(none, found.unit), found.room(none, found.base))
    texts = [
        "inf" if room is None else decimal_down(max(room, Fraction(0)) * (1 - Fraction(1, 10**8))) for room in rooms
    ]
    document["validity"] = dict(zip(("X0", "w", "factor"), texts, strict=True)) | {"meaning": check.MEANING}
    document["claim"], document["covers"], document["excludes"] = check.sentences(document)
    document["cautions"] = list(check.CAUTIONS)
    document["hash"] = check.digest(document)
