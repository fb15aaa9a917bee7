"""What one simulation is about, and the sizes and steps it uses: everything decided before the first run."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import reduce
from math import ceil, gcd, isfinite
from typing import Any, TypeVar

import numpy as np

from synth.base.progress import Listener
from synth.simulate.measures import Claim, Terms, Watch, read_claim
from synth.simulate.model import Array, Section, Wire
from synth.simulate.stepper import Control
from synth.simulate.trajectory import Run
from synth.simulate.weave import Thread

AnyWire = TypeVar("AnyWire", Wire, Thread)

FINE, COARSE = 0.04, 0.1  # step times the fastest mode: runs as wired, adversaries over the class
MOST_STEPS = 60_000  # steps of a run with the links as wired
INSIDE = 1 - 1e-9  # validity is stated with strict inequalities


@dataclass
class Job:
    """Everything the parts of one simulation share, and what they have found so far."""

    section: Section
    claim: Claim | None
    seconds: float
    saturate: bool
    scale: float
    X0: float
    together: bool  # whether an initial size may be combined with disturbances inside validity
    step: Fraction
    coarse: Fraction
    progress: Listener
    runs: list[Run] = field(default_factory=list)
    peaks: dict[str, Array] = field(default_factory=dict)  # role -> [number, 1] over counted runs from rest
    measures: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def control(self) -> Control | None:
        """The limits in force, or None where nothing can saturate."""
        limits = self.section.limits
        return Control(limits) if self.saturate and np.isfinite(limits).any() else None

    def watch(self, section: Section, terms: Sequence[Terms]) -> Watch:
        """A watch with this job's claim and limits."""
        return Watch(section, self.claim, terms, section.limits if self.control() is not None else None)

    @property
    def amplitude(self) -> Array:
        """Largest disturbance per component in the runs that test the claim, declared units."""
        return self.section.peaks * self.scale


def prepare(section: Section, certificate: Any, seconds: float, saturate: bool, progress: Listener) -> Job:
    """Read the claim, set the sizes that keep to its validity, choose the steps."""
    claim = read_claim(certificate, section)
    notes = []
    scale = 1.0 if claim is None or claim.factor > 1 else claim.factor * INSIDE
    if scale < 1:
        notes.append(
            f"disturbances at {scale:.4g} of their declared peaks: beyond that an actuator or a band may reach its "
            "limit"
        )
    X0, together = 1.0, True
    if claim is not None and isfinite(claim.X0):
        together = claim.X0 > 0
        X0 = claim.X0 * INSIDE if together else 1e-6
    if not together:
        notes.append(
            "no initial size is valid together with the declared disturbances; initial runs are undisturbed and tiny"
        )
    modes = np.abs(section.eigenvalues())
    fastest = float(modes.max(initial=0.0)) or 1.0 / seconds
    step, coarse = _choose_step(section, seconds, fastest, FINE), _choose_step(section, seconds, fastest, COARSE)
    if float(step) * fastest > 2 * FINE:
        notes.append(
            f"the fastest mode ({fastest:.3g} rad/s) is coarse beside the step: peaks between samples may be missed"
        )
    short = sorted({float(w.delay) for w in section.wires if 0 < w.delay < step})
    if short:
        notes.append(
            f"link delays below the step ({', '.join(f'{d:g} s' for d in short)}) are simulated as fresh values"
        )
    return Job(section, claim, seconds, saturate, scale, X0, together, step, coarse, progress, notes=notes)


def _choose_step(section: Section, seconds: float, fastest: float, ratio: float) -> Fraction:
    """A step near ratio/fastest that divides every link delay where such a step is not much finer; delays are exact
    then.

    Otherwise the step is at most the shortest delay that is longer than the step wanted, and delays read two stored
    steps.
    """
    wanted = max(min(ratio / fastest, seconds / 400), seconds / MOST_STEPS)
    delays = sorted({w.delay for w in section.wires if w.delay > 0 and float(w.delay) >= wanted / 4})
    if delays:
        common: Fraction = reduce(_common, delays)
        aligned = common / ceil(float(common) / wanted)
        if float(aligned) >= wanted / 4:
            return aligned
        wanted = min(wanted, float(delays[0]))
    return Fraction(1, ceil(1 / wanted)) if wanted < 1 else Fraction(int(wanted))


def _common(a: Fraction, b: Fraction) -> Fraction:
    """Greatest common divisor of two positive rationals."""
    return Fraction(gcd(a.numerator * b.denominator, b.numerator * a.denominator), a.denominator * b.denominator)


def fresh_if_short(wires: Sequence[AnyWire], step: Fraction) -> tuple[AnyWire, ...]:
    """Wires whose delay is shorter than a step become wires without delay: within the declared delay all the same."""
    return tuple(replace(w, delay=Fraction(0)) if w.delay < step else w for w in wires)
