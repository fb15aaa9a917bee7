"""What proves as flashed, and how far times may grow: longest period, computation delay, and ages of link values.

The searches are led by estimates in doubles; every value that is handed on was evaluated with the checker's own
arithmetic (peak gains in integers, exact operator), at exactly that value. Larger values were not excluded, and values
in between were not looked at: a radius need not grow with the period.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np

from synth.base.errors import InputError, SynthError
from synth.base.progress import Listener, silent
from synth.gain.sampled.network import sampled_estimate, sampled_units, why_not_sampled
from synth.network.gains import Gains
from synth.network.model import Network
from synth.proof import build, check, check_firmware, firmware, peak
from synth.proof.certificate import Certificate
from synth.proof.check_flashed import read_units

MEANING = (
    "each line changes one time alone and was evaluated at exactly the value printed; values in between are not each "
    "proven. To use one, declare it and prove again: the certificate is about the declared times only."
)
COLUMNS = ("quantity", "link", "declared_s", "longest_proven_s", "holds")
_CONFIRMATIONS = 4


@dataclass(frozen=True)
class TimingRow:
    """One time: declared and longest that still proves, in s (inf: any); ``holds`` says what is proven there."""

    quantity: str
    link: str
    declared: float
    longest: float | None
    holds: str


@dataclass(frozen=True)
class TimingSheet:
    """How far times may grow, one at a time; ``meaning`` belongs to every use of the numbers."""

    rows: tuple[TimingRow, ...]
    meaning: str = MEANING

    def as_json(self) -> dict[str, Any]:
        """Plain data; any time is the text 'any', an unproven one null."""
        return {
            "meaning": self.meaning,
            "rows": [dict(zip(COLUMNS, _cells(row, None), strict=True)) for row in self.rows],
        }

    def csv_text(self) -> str:
        """A table with a header row (RFC 4180)."""
        stream = io.StringIO(newline="")
        writer = csv.writer(stream, lineterminator="\r\n")
        writer.writerow(COLUMNS)
        writer.writerows(_cells(row, "") for row in self.rows)
        return stream.getvalue()

    def as_text(self) -> str:
        """One line per time."""
        lines = []
        for row in self.rows:
            name = f"{row.quantity} of {row.link}" if row.link else row.quantity
            longest = "no other value is proven"
            if row.longest is not None:
                longest = (
                    f"proven up to {row.longest:g} s" if math.isfinite(row.longest) else "any bounded one is proven"
                )
            lines.append(f"{name}: declared {row.declared:g} s, {longest} ({row.holds})")
        return "\n".join([*lines, self.meaning])


def _cells(row: TimingRow, unknown: Any) -> list[Any]:
    longest = unknown if row.longest is None else "any" if math.isinf(row.longest) else row.longest
    return [row.quantity, row.link, row.declared, longest, row.holds]


@dataclass(frozen=True)
class AsFlashed:
    """The verdict about the sampled code: ``certificate`` if one was tried, and ``reason`` where nothing is proven.

    ``longest_period`` in s is a period that does prove (with the computation delay as declared), None if none was
    found or looked for; ``takes`` is False where this version cannot look at such a network at all.
    """

    certificate: Certificate | None
    reason: str
    takes: bool = True
    longest_period: float | None = None
    timing: TimingSheet | None = None

    @property
    def proven(self) -> bool:
        """Whether the checker accepts a certificate of the firmware route."""
        return self.certificate is not None and self.certificate.proven

    def as_json(self) -> dict[str, Any]:
        """Plain data: the certificate as `synth prove` prints it, or why there is none."""
        return {
            "proven": self.proven,
            "reason": self.reason,
            "longest_period": self.longest_period,
            "proof": None if self.certificate is None else self.certificate.as_json(),
            "timing": None if self.timing is None else self.timing.as_json(),
        }

    def as_text(self) -> str:
        """The certificate's text and the timing sheet, or the reason."""
        if not self.proven or self.certificate is None:
            return f"NOT PROVEN as flashed\n  because: {self.reason}"
        timing = "" if self.timing is None else f"\nTimes, one at a time:\n{self.timing.as_text()}"
        return self.certificate.as_text() + timing


def prove_as_flashed(
    network: Network,
    design_or_gains: Any,
    target: Fraction | float | str | None = None,
    progress: Listener = silent,
    timing: bool = True,
) -> AsFlashed:
    """Prove the loop as flashed with the times and rounding of ``network.goal``; say why and how far if that fails.

    ``design_or_gains``: u = K y as stored; ``target`` as for prove; ``timing`` also makes the timing sheet. A network
    or rounding that the route cannot take is no error: ``reason`` says so. Raises SolverFailure if two programs
    disagree.
    """
    why = why_not_sampled(network)
    if why is not None:
        return AsFlashed(None, f"{why}.", takes=False)
    gains = build._gains(network, design_or_gains)
    goal = Fraction(network.goal.target if target is None else target)
    try:
        progress("proving the code as flashed")
        found = _hopeless(network, gains, goal)
        if found is None:
            found = firmware.prove_firmware(network, gains, target=target, progress=progress)
    except InputError as error:
        return AsFlashed(None, str(error), takes=False)
    period = network.goal.period
    assert period is not None
    if found.proven:
        sheet = timing_sheet(network, gains, found, progress) if timing else None
        return AsFlashed(found, "", timing=sheet)
    progress("looking for the longest period that proves")
    shortest = network.goal.computation_delay
    longest = longest_proven(lambda T: _at(network, period=T), gains, goal, shortest, period, period)
    words = "; ".join(found.reasons) or "its claim was not accepted"
    words += f". At the declared period of {float(period):g} s the code is not proven"
    if longest is not None:
        words += f"; with these gains a period of {longest:g} s is"
    else:
        words += ", and no shorter period was found that proves with these gains"
    return AsFlashed(found, f"{words}.", longest_period=longest)


def _hopeless(network: Network, gains: Gains, goal: Fraction) -> Certificate | None:
    """A refusal where the estimated radius is far above the target: no proof would come of long work."""
    sizes = sampled_estimate(network, sampled_units(network, gains), grid=3)
    if sizes is None or sizes.radius <= 1.05 * float(goal):
        return None  # not stable: the route itself says by how much
    words = (
        f"the radius of the sampled loop is about {sizes.radius:.6g} (an estimate), above the target {float(goal):g}"
    )
    return build._nothing("firmware", goal, words)


def _at(network: Network, period: Fraction | None = None, delay: Fraction | None = None) -> Network:
    goal = network.goal
    T = goal.period if period is None else period
    d = goal.computation_delay if delay is None else delay
    return replace(network, goal=replace(goal, period=T, computation_delay=d))


def guaranteed(network: Network, gains: Gains, goal: Fraction) -> bool:
    """Whether, by the checker's arithmetic, the code as flashed keeps the radius within ``goal`` and every limit.

    All but the rate and constants of a certificate are evaluated, at the times and rounding of ``network.goal``.
    """
    T, d = firmware._times(network, None, None)
    parts = firmware._parts(network, network.goal.rounding)
    units = firmware._units(network, gains, T, d, parts)
    if not all(firmware._slowest(unit) > 0 for unit in units):
        return False
    document = build._frame(network, gains, "firmware", goal, 1e-5)
    document["firmware"] = {"period": str(T), "delay": str(d), "kinds": parts}
    try:
        document["evidence"] = [firmware._evidence(unit, 0.0) for unit in units]
        model, links, flashed = read_units(document)
        evidence = check_firmware.read_evidence(document, flashed)
        plain = [
            check_firmware.Numbers(one, P, g, Fraction(0), True) for one, (P, g) in zip(flashed, evidence, strict=True)
        ]
        operator = check_firmware.Operator(flashed, links)
        ones = [Fraction(1)] * len(links)
        up = operator.matrix([g.take for g in plain], ones)
        s = list(peak.point_above(np.array([[float(v) for v in row] for row in up]).reshape(len(up), len(up))))
        if max((a / b for a, b in zip(check.apply(up, s), s, strict=True)), default=Fraction(0)) > goal:
            return False
        waves = [[w for _, _, w in one.disturbances] for one in model]
        own = [
            [n + w for n, w in zip(g.noise, check.apply(g.wave, list(v)), strict=True)]
            for g, v in zip(plain, waves, strict=True)
        ]
        found = operator.peaks([g.take for g in plain], up, ones, own)
    except (check.Rejected, np.linalg.LinAlgError, OverflowError):
        return False
    limits = [line.limit for one in model for line in one.lines]
    kept = [value for value, line in zip(found, operator.lines, strict=True) if line.role != "reading"]
    return all(limit is None or value < limit for value, limit in zip(kept, limits, strict=True))


def _estimated(network: Network, gains: Gains, goal: Fraction) -> bool:
    """The same in doubles, for the search."""
    sizes = sampled_estimate(network, sampled_units(network, gains), grid=3)
    if sizes is None or not sizes.radius <= float(goal):
        return False
    for kind in network.kinds:
        limits = [(("offer", s.name), s.band) for s in kind.offers] + [(("state", s.name), s.band) for s in kind.states]
        limits += [(("actuator", a.name), a.limit) for a in kind.inputs]
        for (role, name), limit in limits:
            if limit is not None and not sizes.peaks[kind.name, role, name] < float(limit):
                return False
    return True


def longest_proven(
    at: Callable[[Fraction], Network],
    gains: Gains,
    goal: Fraction,
    shortest: Fraction,
    start: Fraction,
    most: Fraction | None = None,
) -> float | None:
    """The longest time found at which ``at(time)`` is guaranteed, to two digits; None if none was.

    Times from ``shortest`` (excluded if zero) to ``most`` are looked at, going up by factors from ``start`` while they
    are good and down where they are not.
    """  # fmt: skip

    def good(time: Fraction) -> bool:
        return _estimated(at(time), gains, goal)

    low, high = _bracket(good, shortest, start, most)
    if low is None:
        return None
    for _ in range(7 if high is not None else 0):
        assert high is not None
        middle = (low + high) / 2
        low, high = (middle, high) if good(middle) else (low, middle)
    for share in (1, Fraction(97, 100), Fraction(9, 10), Fraction(3, 4))[:_CONFIRMATIONS]:
        time = _two_digits(low * share, shortest)
        if time <= 0 or (most is not None and time > most):
            continue
        try:
            if guaranteed(at(time), gains, goal):
                return float(time)
        except SynthError:
            continue
    return None


def _bracket(
    good: Callable[[Fraction], bool], shortest: Fraction, start: Fraction, most: Fraction | None
) -> tuple[Fraction | None, Fraction | None]:
    """A good time and a bad one above it (None: good up to the end that is looked at; no good one)."""
    factor = Fraction(3, 2)
    time = start if most is None else min(start, most)
    if good(time):
        for _ in range(24):
            if most is not None and time >= most:
                return time, None
            longer = time * factor if most is None else min(time * factor, most)
            if not good(longer):
                return time, longer
            time = longer
        return time, None
    for _ in range(12):
        shorter = max(time / factor, shortest)
        if shorter == time:
            break
        if good(shorter):
            return shorter, time
        time = shorter
    return None, None


def _two_digits(value: Fraction, least: Fraction) -> Fraction:
    """Rounded down to two significant digits, not below ``least``."""
    if value <= 0:
        return value
    step = Fraction(10) ** (math.floor(math.log10(float(value))) - 1)
    return max(value // step * step, least)


def timing_sheet(network: Network, gains: Gains, certificate: Certificate, progress: Listener = silent) -> TimingSheet:
    """How far every time may grow alone with the target and every limit kept, for an accepted firmware certificate."""
    goal, period, delay = Fraction(certificate.document["target"]), network.goal.period, network.goal.computation_delay
    assert period is not None
    progress("timing sheet: longest period and computation delay")
    kept = "radius within the target and every limit kept"
    most = _longest_looked_at(network, period)
    longest = longest_proven(lambda T: _at(network, period=T), gains, goal, max(delay, period), period, most)
    ended = longest is not None and Fraction(longest) * Fraction(21, 20) >= most
    rows = [
        TimingRow("sample period", "", float(period), longest, kept + ("; longer ones not looked at" if ended else "")),
        TimingRow(
            "computation delay", "", float(delay),
            longest_proven(lambda d: _at(network, delay=d), gains, goal, delay, delay or period / 4, period), kept,
        ),
    ]  # fmt: skip
    rows += _ages(certificate)
    rows.append(TimingRow("jitter of the sampling instants", "", 0.0, None, "fixed instants only are proven"))
    return TimingSheet(tuple(rows))


def _longest_looked_at(network: Network, period: Fraction) -> Fraction:
    """Up to 64 declared periods, and to where a plant left alone would change beyond what is worth enclosing."""
    rates = [sum((abs(v) for v in row), Fraction(0)) for kind in network.kinds for row in kind.A.rows]
    fastest = max(rates, default=Fraction(0))
    return max(period, min(64 * period, 6 / fastest if fastest else 64 * period))


def _ages(certificate: Certificate) -> list[TimingRow]:
    """Per link: any age keeps the peaks; up to which age (delay and silence with the last value held) the rate holds.

    The gain operator does not know delays, so peaks and radius are the same for any finite age; the weighted operator
    of the rate alpha grows with e^{alpha age}, and is evaluated exactly.
    """
    document = certificate.document
    _, links, flashed = read_units(document)
    alpha = Fraction(document["constants"]["alpha"])
    evidence = check_firmware.read_evidence(document, flashed)
    fast = [check_firmware.Numbers(one, P, g, alpha) for one, (P, g) in zip(flashed, evidence, strict=True)]
    operator = check_firmware.Operator(flashed, links)
    rows = []
    named = list(document["model"]["links"])
    for k, (link, words) in enumerate(zip(links, named, strict=True)):

        def contracts(age: Fraction, k: int = k) -> bool:
            growth = [check.exp_above(alpha * (age if i == k else one.delay)) for i, one in enumerate(links)]
            try:
                check.contraction(operator.matrix([g.take for g in fast], growth))
            except check.Rejected:
                return False
            return True

        low, high = link.delay, max(link.delay, Fraction(1, 100))
        while contracts(high) and alpha * high < 40:
            low, high = high, 2 * high
        for _ in range(12):
            middle = (low + high) / 2
            low, high = (middle, high) if contracts(middle) else (low, middle)
        age = _two_digits(low, link.delay)
        name = str(words.get("name", f"link {k + 1}"))
        rows.append(
            TimingRow(
                "age of values", name, float(link.delay), math.inf, "radius, peaks and limits hold; last value held"
            )
        )
        rows.append(
            TimingRow(
                "age of values", name, float(link.delay), float(age),
                f"the rate alpha = {document['constants']['alpha']} 1/s too, with a larger C; last value held",
            )
        )  # fmt: skip
    return rows


__all__ = ["AsFlashed", "TimingRow", "TimingSheet", "guaranteed", "longest_proven", "prove_as_flashed", "timing_sheet"]
