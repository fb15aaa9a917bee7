#!/usr/bin/env python3
"""Re-derive everything a certificate of the firmware route claims, with nothing but Python's standard library.

    python check_firmware.py certificate.json     prints "verified" (exit code 0) or the reasons why not (1; 2: no file)

Beside it must lie check.py (reads models, works with gain operators), check_flashed.py (forms units as flashed) and
check_sampled.py (bounds their peak gains). Nothing in the file is believed. From model, gains and ``firmware`` (sample
period, computation delay, rounding) this program forms every unit as flashed; from their peak gains it derives radius,
C, alpha, G, R (what rounding alone can bring about), every peak and the region where limits hold, and compares them
with what is stated: a number that is too good is refused, and so is one more than 0.001 % worse than derived.
The sentences of a certificate are made here from its numbers and must agree letter for letter.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from fractions import Fraction
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING or __package__:
    from synth.proof import check
    from synth.proof.check_flashed import Flashed, Matrix, Row, read_units
    from synth.proof.check_sampled import Sampled
else:  # the files lie side by side in a hand-off bundle
    import check
    from check_flashed import Flashed, Matrix, Row, read_units
    from check_sampled import Sampled

TIGHT, LOOSE = Fraction(1, 1 << 13), Fraction(1, 1 << 10)  # what halving phases may leave; LOOSE where a rate is added
NORM = (
    "maximum norm: x, the largest absolute value of a state over all units, each in its declared unit; "
    "w, the largest absolute value of a disturbance over all units and times, likewise; X0 bounds, at the start, every "
    "state (one kept in the firmware also as computed for the next sample) and every command that is held or computed "
    "but not yet in force, each in its declared unit"
)


# ---------------------------------------------------------------- what the evidence proves


class Numbers:
    """Peak gains of one unit: line by take (low, up), by disturbance, by rounding (summed), by initial size."""

    def __init__(self, one: Flashed, P: Matrix, gamma: Fraction, alpha: Fraction, loose: bool = False) -> None:
        """Bound everything; with a rate only what the decay needs. ``loose`` asks for less work, as with a rate."""
        loop = Sampled(one, P, gamma, alpha)
        tight = LOOSE if alpha or loose else TIGHT
        waves = [] if alpha else one.waves
        errors = [] if alpha else [(i, size) for i, size in one.errors if size]
        inlets = [(f"take {j}", x) for j, x in enumerate(one.takes)] + [(f"wave {j}", x) for j, x in enumerate(waves)]
        inlets += [(f"error {j}", x) for j, (x, _) in enumerate(errors)]
        q, d = len(one.takes), len(one.takes) + len(waves)
        self.take_low: Matrix = []
        self.take: Matrix = []
        self.wave: Matrix = []
        self.noise: Row = []
        self.start: Row = []
        known: dict[tuple[bool, tuple[Fraction, ...]], tuple[Row, Row]] = {}
        for line in one.lines:
            key = (line.role == "reading", tuple(line.row))
            if key not in known:
                known[key] = loop.line(line, inlets, tight)
            low, high = known[key]
            direct = [abs(v) for v in line.v] or [Fraction(0)] * q
            self.take_low.append([a + b for a, b in zip(direct, low, strict=False)])
            self.take.append([a + b for a, b in zip(direct, high, strict=False)])
            at_once = [abs(v) for v in line.w] or [Fraction(0)] * len(waves)
            self.wave.append([a + b for a, b in zip(at_once, high[q:d], strict=False)])
            own = one.errors[line.through][1] if line.through is not None else Fraction(0)
            self.noise.append(own + sum((p * s for p, (_, s) in zip(high[d:-1], errors, strict=True)), Fraction(0)))
            stored = line.role == "offer" and any(line.v + line.w)  # what was offered before the start counts too
            self.start.append(max(high[-1], Fraction(stored)))


def read_evidence(document: dict[str, Any], units: list[Flashed]) -> list[tuple[Matrix, Fraction]]:
    """(P, gamma) of every kind; Sampled verifies them."""
    entries = [check.fields(e, "kind P gamma", "evidence") for e in check.items(document["evidence"], "evidence")]
    check.need([e["kind"] for e in entries] == [u.name for u in units], "evidence is needed for every kind, in order")
    found = []
    for entry, one in zip(entries, units, strict=True):
        size = len(one.A) + len(one.R)
        found.append((check.matrix(entry["P"], size, size, "P"), check.positive(entry["gamma"], "gamma")))
    return found


Measure = Callable[[Flashed, Matrix, Fraction, Fraction], Numbers]


def derive(document: dict[str, Any], measure: Measure = Numbers) -> tuple[check.Derived, Row, list[check.Line]]:
    """Bounds of everything a certificate may state, the part of rounding in every peak, and the lines they are about.

    Lines stand kind by kind: offers, states, actuators. Rejected if the evidence proves nothing. ``measure`` lets a
    builder remember what it has just worked out; checking never passes one.
    """
    check.need(document["route"] == "firmware", "the route must be firmware")
    units, links, flashed_units = read_units(document)
    constants = check.fields(document["constants"], "C alpha G R norm", "constants")
    alpha = check.positive(constants["alpha"], "alpha")
    evidence = read_evidence(document, flashed_units)
    plain = [measure(one, P, g, Fraction(0)) for one, (P, g) in zip(flashed_units, evidence, strict=True)]
    fast = [measure(one, P, g, alpha) for one, (P, g) in zip(flashed_units, evidence, strict=True)]
    operator = Operator(flashed_units, links)
    growth = [check.exp_above(alpha * link.delay) for link in links]
    one_each = [Fraction(1)] * len(links)
    low, up = [operator.matrix(side, one_each) for side in ([g.take_low for g in plain], [g.take for g in plain])]
    weighted = operator.matrix([g.take for g in fast], growth)
    s, v = check.read_point(document, operator.names)
    found = check.Derived()
    top = max((a / b for a, b in zip(check.apply(up, s), s, strict=True)), default=Fraction(0))
    found.radius = check.least(check.apply(low, v), v), top
    check.need(top < 1, "the gain operator does not contract at the point s")
    check.contraction(weighted)
    peaks = [[w for _, _, w in unit_.disturbances] for unit_ in units]
    gains = [g.take for g in plain]
    noise = operator.peaks(gains, up, one_each, [g.noise for g in plain])
    declared = [check.apply(g.wave, w) for g, w in zip(plain, peaks, strict=True)]
    waves = operator.peaks(gains, up, one_each, declared)
    ones = operator.peaks(gains, up, one_each, [[sum(row, Fraction(0)) for row in g.wave] for g in plain])
    starts = operator.peaks(gains, up, one_each, [g.start for g in plain])
    rates = operator.peaks([g.take for g in fast], weighted, growth, [g.start for g in fast])
    keep = [k for k, line in enumerate(operator.lines) if line.role != "reading"]
    found.lines = [line for unit_ in units for line in unit_.lines]
    same = [(line.role, line.signal) for line in found.lines] == [
        (operator.lines[k].role, operator.lines[k].signal) for k in keep
    ]
    check.need(same, "the lines of the model and of the loops differ")
    found.base = [noise[k] + waves[k] for k in keep]
    found.unit, found.start = [ones[k] for k in keep], [starts[k] for k in keep]
    rounding = [noise[k] for k in keep]
    states = [k for k, line in enumerate(operator.lines) if line.role == "state"]
    found.C, found.G = max(rates[k] for k in states), max(ones[k] for k in states)
    return found, rounding, found.lines


class Operator:
    """The gain operator over offers, and over sensor readings where floating point makes an error of their size."""

    def __init__(self, units: list[Flashed], links: list[check.Link]) -> None:
        """Number the rows."""
        self.units, self.links = units, links
        self.lines = [line for one in units for line in one.lines]
        self.rows = [
            (u, k)
            for u, one in enumerate(units)
            for k, line in enumerate(one.lines)
            if line.role in ("offer", "reading")
        ]
        self.names = [
            f"{units[u].name}.{units[u].lines[k].signal}" + " as read" * (units[u].lines[k].role == "reading")
            for u, k in self.rows
        ]
        self.place = {
            (units[u].name, units[u].lines[k].role, units[u].lines[k].signal): i for i, (u, k) in enumerate(self.rows)
        }

    def inflow(self, u: int, growth: Row) -> list[tuple[int, int, Fraction]]:
        """(take, row, factor) of all that enters unit u: links, then floating-point errors of its own readings."""
        one = self.units[u]
        found = [
            (link.take, self.place[link.source[0], "offer", link.source[1]], link.gain * grown)
            for link, grown in zip(self.links, growth, strict=True)
            if link.kind == one.name
        ]
        readings = [i for i, (v, k) in enumerate(self.rows) if v == u and one.lines[k].role == "reading"]
        first = len(one.takes) - len(one.R)
        return found + [(first + command, readings[sensor], size) for sensor, command, size in one.floats]

    def matrix(self, gains: list[Matrix], growth: Row) -> Matrix:
        """The operator as a matrix: what every row gets from every row (theory (1), (4))."""
        found = [[Fraction(0)] * len(self.rows) for _ in self.rows]
        for i, (u, k) in enumerate(self.rows):
            for take, j, factor in self.inflow(u, growth):
                found[i][j] += gains[u][k][take] * factor
        return found

    def peaks(self, gains: list[Matrix], M: Matrix, growth: Row, own: list[Row]) -> Row:
        """Bound of every line: own part plus what comes in, from (I - M) z = own part of the rows."""
        y = check.resolvent(M, [check.rounded(own[u][k], up=True) if own[u][k] else Fraction(0) for u, k in self.rows])
        found = []
        for u, one in enumerate(self.units):
            inflow = self.inflow(u, growth)
            found += [
                own[u][k] + sum((gains[u][k][take] * f * y[j] for take, j, f in inflow), Fraction(0))
                for k in range(len(one.lines))
            ]
        return found


# ---------------------------------------------------------------- the sentences, made from the numbers


def sentences(document: dict[str, Any]) -> tuple[str, list[str], list[str]]:
    """(claim, covers, excludes) of a document, from its numbers alone."""
    constants, valid, part = document["constants"], document["validity"], document["firmware"]
    period, delay = check.shown(part["period"]), check.shown(part["delay"])
    claim = (
        f"For any number of units, each with the gains as flashed, sampled every {period} s by its own clock, "
        f"commands in force {delay} s after their sample and held: sup_i |x_i(t)| <= C e^(-alpha t) X0 + G sup|w| + R "
        f"with C = {constants['C']}, alpha = {constants['alpha']} 1/s, G = {constants['G']}, R = {constants['R']} "
        f"(what rounding can bring about; {constants['norm']}; X0 holds also over the longest delay before the start, "
        f"and for what offers with feed-through had stored). The gain operator of the firmware route has radius at most"
        f" {document['radius']['upper']}, not above the target {check.shown(document['target'])}."
    )
    if any(peak["limit"] is not None for peak in document["peaks"]):
        claim += (
            f" It holds while no actuator saturates; no actuator reaches its limit and no band is left when X0 <= "
            f"{valid['X0']} and the disturbances stay within their declared peaks, or from rest when |w| <= "
            f"{valid['w']}, rounding included."
        )
    covers = check.sentences(document)[1]
    covers.append(
        f"sampling every {period} s with the last command held, a computation delay of {delay} s, and motion between "
        "the samples; units need no common clock; received values that a controller uses are sampled with its own"
    )
    for kind, model in zip(part["kinds"], document["model"]["kinds"], strict=True):
        covers += rounding_words(kind, model)
    excludes = [
        "a sample period or computation delay other than stated: jitter, drift, overrun or skipped periods",
        "errors of sensors, converters and arithmetic beyond the roundings listed under covers; overflow of a number",
        "a saturated actuator, and any state outside the region of validity",
        "dynamics that the model leaves out, and gains or model parameters away from their stated values"
        + (" and tolerances" if any("sort" in link for link in document["model"]["links"]) else ""),
        "link values older, or strengths larger, than listed under covers; failed sensors",
    ]
    if any(check.number(link["own_strength"], "g") for link in document["model"]["links"]):
        excludes.append("the own part of a relative link late, lost or away from its nominal strength")
    return claim, covers, excludes


def rounding_words(kind: dict[str, Any], model: dict[str, Any]) -> list[str]:
    """What is covered of the rounding in one kind; quanta of zero say that nothing is rounded there."""
    found = []
    groups = (
        ("sensors", "sensors", "samples of"),
        ("commands", "inputs", "commands of"),
        ("products", "inputs", "products summed for"),
    )
    for key, names, words in groups:
        for quantum, signal in zip(kind[key], model[names], strict=True):
            if check.number(quantum, key):
                size = check.shown(quantum)
                found.append(f"{kind['kind']}: {words} {signal['name']} rounded to multiples of {size} {signal['in']}")
    found += [
        f"{kind['kind']}: state {one['state']} kept in the firmware, advanced once per period by the period times its "
        f"rate at the sample, "
        + (
            f"rounded to multiples of {check.shown(one['quantum'])}"
            if check.number(one["quantum"], "stored")
            else "exactly"
        )
        + (f"; errors of {one['integrates']} enter it" if one["integrates"] else "")
        for one in kind["stored"]
    ]
    if kind["form"] != "exact":
        found.append(
            f"{kind['kind']}: every product and sum of u = K y in {kind['form']} precision (IEEE 754), in any order, "
            "from readings and gains that are stored exactly"
        )
    return found


# ---------------------------------------------------------------- comparing what is stated with what is derived


def compare(document: dict[str, Any]) -> None:
    """Rejected unless every number and sentence of the document is what its evidence proves."""
    found, rounding, lines = derive(document)
    target, radius = (
        check.positive(document["target"], "target"),
        check.fields(document["radius"], "lower upper", "radius"),
    )
    check.above(radius["upper"], found.radius[1], "radius.upper")
    check.need(
        check.number(radius["upper"], "radius") <= target < 1,
        "the radius is not below the target, or the target not below 1",
    )
    lower = check.number(radius["lower"], "radius.lower")
    least = found.radius[0] * (1 - check.LOOSE) - Fraction(1, 10**9)
    check.need(max(least, Fraction(0)) <= lower <= found.radius[0], "radius.lower is not the derived one")
    states = [k for k, line in enumerate(lines) if line.role == "state"]
    check.above(document["constants"]["C"], found.C, "C")
    check.above(document["constants"]["G"], found.G, "G")
    check.above(document["constants"]["R"], max(rounding[k] for k in states), "R")
    keys = "kind role signal value rounding in limit"
    stated = [check.fields(p, keys, "peaks") for p in check.items(document["peaks"], "peaks")]
    check.need(len(stated) == len(lines), "peaks must be stated for every offer, state and actuator")
    for peak, line, base, part in zip(stated, lines, found.base, rounding, strict=True):
        what = f"the peak of {line.kind}.{line.signal}"
        names = [peak[key] for key in ("kind", "role", "signal", "in")]
        check.need(names == [line.kind, line.role, line.signal, line.unit], f"{what} is missing or misnamed")
        check.above(peak["value"], base, what)
        check.above(peak["rounding"], part, f"the part of rounding in {what}")
        check.need(check.optional(peak["limit"], what) == line.limit, f"{what} names another limit than the model")
        check.need(
            line.limit is None or base < line.limit,
            f"the declared disturbances and rounding may drive {line.kind}.{line.signal} to {float(base):.6g} "
            f"{line.unit}, at or beyond its limit of {float(line.limit or 0):.6g}; what rests on keeping limits does "
            f"not hold",
        )
    valid = check.fields(document["validity"], "X0 w factor meaning", "validity")
    for key, room in rooms(found, rounding).items():
        check.below(valid[key], room, f"validity.{key}")


def rooms(found: check.Derived, rounding: Row) -> dict[str, Fraction | None]:
    """What validity may state: initial size beside the declared disturbances; disturbances beside rounding alone."""
    waves = [b - r for b, r in zip(found.base, rounding, strict=True)]
    return {
        "X0": found.room(found.base, found.start),
        "w": found.room(rounding, found.unit),
        "factor": found.room(rounding, waves),
    }


def check_document(document: Any) -> list[str]:
    """Reasons why the document does not prove its claim; empty exactly when every part was re-derived."""
    try:
        document = check.fields(document, check.FIELDS + " firmware", "the certificate")
        good = document["schema"] == check.SCHEMA and type(document["version"]) is int
        check.need(good and document["version"] == check.VERSION, "not a certificate of this kind and version")
        rest = {key: value for key, value in document.items() if key != "hash"}
        check.need(
            document["hash"] == check.digest(rest), "the content was changed after the certificate was made (hash)"
        )
        check.need(
            document["network_hash"] == check.digest(document["model"]), "network_hash does not belong to the model"
        )
        origin = check.fields(document["provenance"], "network_hash settings versions", "provenance")
        check.need(origin["network_hash"] == document["network_hash"], "the provenance names another network")
        check.need(document["constants"]["norm"] == NORM, "the norm is not the documented one")
        check.need(
            document["validity"]["meaning"] == check.MEANING, "the meaning of validity is not the documented one"
        )
        check.need(document["cautions"] == list(check.CAUTIONS), "the cautions are missing or changed")
        made = sentences(document)
        for key, value in zip(("claim", "covers", "excludes"), made, strict=True):
            check.need(document[key] == value, f"{key} is not what the numbers and the model make")
        compare(document)
    except check.Rejected as reason:
        return [str(reason)]
    except (ArithmeticError, LookupError, TypeError, ValueError, AttributeError, RecursionError, MemoryError) as error:
        return [f"the certificate is malformed ({type(error).__name__}: {error})"]
    return []


def check_text(content: str) -> list[str]:
    """Reasons why the text of a certificate file does not prove its claim; empty when it does."""
    try:
        document = json.loads(content, object_pairs_hook=check._once)
    except (check.Rejected, ValueError, RecursionError) as error:
        return [f"not a readable certificate: {error}"]
    return check_document(document)


def main(arguments: list[str]) -> int:
    """Check one file; print the result; 0 verified, 1 not verified, 2 no such file."""
    done = "verified: every number was derived again, with every error bounded"
    return check.main(arguments, check_text, "check_firmware.py", done)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
