"""The window route: the radius that is left when everything inside windows is exact (theory (20)).

M_W has a row per outlet of a window's centre and a column per outlet from which a link enters; of a pattern it is the
quotient on one cell. All windows stable and radius(M_W) < 1: the network is stable in the sup norm, for any number of
units and any behaviour of what remained links, with |v| <= strength sup|z|.

What is assumed inside is more than the peak route assumes: there every exactly known link is constant, of the sign and
strength as declared, and fresh. ``Knowledge`` says for which classes that is not so.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np
from flint import arb, ctx, fmpq

from synth.base.errors import InputError, nearest
from synth.base.exact import Number, exact
from synth.gain.flow import outward
from synth.gain.operator import GainOperator
from synth.gain.window.build import Closure, Entering, Slack, Window, build_window, loosely_known
from synth.gain.window.peaks import WindowPeaks, window_peaks
from synth.gain.window.places import Places, places_of
from synth.network.gains import Gains
from synth.network.model import Network

CLOSURES = (Closure("cut"), Closure("ring"), Closure("mirror"), Closure("mirror", Fraction(-1)))


@dataclass(frozen=True)
class Knowledge:
    """What is known of the links inside a window.

    ``loose``: classes that are known only by their strength, everywhere (give here every class whose strength varies in
    an interval); ``uncertain``: by class, how far the strength of an exactly known link may be off, >= 0, in its own
    unit, at any time (the neighbour's part; the own part of a relative link is as declared). Links that are late,
    weaken, are alternatives, or stand for tolerances are loose in any case.
    """

    loose: tuple[str, ...] = ()
    uncertain: Mapping[str, Number] = field(default_factory=dict)

    def checked(self, network: Network) -> dict[str, Fraction]:
        """The uncertainties as rationals; InputError for unknown classes, negative numbers, or a class named twice."""
        for name in (*self.loose, *self.uncertain):
            if name not in network.classes():
                raise InputError(
                    f"no link class is named {name!r}{nearest(name, network.classes())}; known: "
                    f"{', '.join(network.classes()) or 'none'}."
                )
        found = {name: exact(value) for name, value in self.uncertain.items()}
        for name, value in found.items():
            if value < 0 or name in self.loose:
                raise InputError(
                    f"the uncertainty of class {name!r} must be 0 or more, and given for a class that is not loose."
                )
        return found

    def slack(self, network: Network) -> Slack | None:
        """The uncertainties as what windows are built with; None where there are none."""
        found = self.checked(network)
        if not any(found.values()):
            return None
        zero = Fraction(0)
        return lambda link: (found.get(link.name, zero), zero)


AS_DECLARED = Knowledge()


@dataclass(frozen=True, eq=False)
class WindowRadius:
    """The radius of M_W for windows of radius ``R`` cells (or links between members).

    ``lower`` <= radius <= ``upper`` where ``guaranteed``; otherwise 0 and inf, and ``estimate`` stands alone without a
    guarantee. ``stable``: whether every window decays. ``proven``: guaranteed and upper < 1. ``above`` and ``below``
    are operators between which the true one lies (None unless guaranteed). ``covers`` says what is proven. ``states``
    of the largest window, ``entering`` terms of all windows.
    """

    R: int
    closure: Closure
    lower: float
    upper: float
    estimate: float
    guaranteed: bool
    stable: bool
    states: int
    entering: int
    alpha: Fraction
    method: str
    covers: str
    above: GainOperator | None = None
    below: GainOperator | None = None
    windows: tuple[Window, ...] = ()
    peaks: tuple[WindowPeaks, ...] = ()
    note: str = ""

    @property
    def proven(self) -> bool:
        """Whether this radius proves the network stable."""
        return self.guaranteed and self.stable and self.upper < 1

    def __repr__(self) -> str:
        """The numbers in one line."""
        if self.guaranteed:
            number = f"[{self.lower:.9g}, {self.upper:.9g}]"
        else:
            number = f"about {self.estimate:.6g}, not guaranteed" if self.stable else "none: a window is not stable"
        return f"WindowRadius(R={self.R}, {self.states} states, {self.closure}, radius {number})"


def window_radius(
    network: Network, gains: Gains, R: int = 4, alpha: Number = 0, width: float = 1e-6,
    knowledge: Knowledge = AS_DECLARED,
    closure: Closure | None = None, method: str = "auto", box: bool = False,
) -> WindowRadius:  # fmt: skip
    """Enclose the radius of M_W with windows of radius ``R`` >= 0 (0 is the peak route).

    Patterns of any dimension with any cell, and members. ``alpha`` in 1/s: A + alpha I, and loose links times
    e^{alpha delay}. ``closure`` None: cut the windows, or close them as a ring or with mirrors where a cut window has a
    mode that does not decay, whichever gives the smallest radius. ``box``: cubes of cells instead of balls. ``method``
    as in :func:`window_peaks`.

    Raises InputError for rules and edge patterns, numbers out of range, missing gains or closed direct paths. A window
    that is not stable is no error: the result says so. Law: with R = 0 and every class loose it is the peak route's
    radius.
    """
    if not isinstance(R, int) or R < 0:
        raise InputError(f"the radius of a window must be a whole number from 0 on, not {R!r}.")
    rate = exact(alpha)
    if rate < 0:
        raise InputError(f"alpha must not be negative, not {float(rate):g} 1/s.")
    slack = knowledge.slack(network)
    places = places_of(network, gains)
    tried: tuple[Closure, ...] = CLOSURES if closure is None else (closure,)
    if network.members is not None:
        tried = tuple(c for c in tried if c.way != "ring") or (Closure(),)
    found = [_with_closure(network, places, R, rate, width, knowledge, slack, tried[0], method, box)]
    if not found[0].stable:
        found += [
            _with_closure(network, places, R, rate, width, knowledge, slack, way, method, box) for way in tried[1:]
        ]
    return min(found, key=_preference)


def _preference(found: WindowRadius) -> tuple[bool, bool, float]:
    """Stable windows first, guaranteed numbers first, then the smaller radius; the first of equals."""
    value = found.upper if found.guaranteed else found.estimate
    return not found.stable, not found.guaranteed, value


def _with_closure(
    network: Network, places: Places, R: int, alpha: Fraction, width: float, knowledge: Knowledge,
    slack: Slack | None, closure: Closure, method: str, box: bool,
) -> WindowRadius:  # fmt: skip
    windows: list[Window] = []
    found: list[WindowPeaks] = []
    known: dict[object, WindowPeaks] = {}
    for centre in places.centres:
        window = build_window(places, centre, R, closure, knowledge.loose, slack, box)
        weights = weights_of(window)
        # Members often have equal windows; equal numbers are worked out once.
        parts = (window.A, window.columns, window.rows, window.through)
        key = (*(tuple(tuple(row.items()) for row in part) for part in parts), tuple(weights))
        if key not in known:
            known[key] = window_peaks(window, alpha, width, method, weights)
        windows.append(window)
        found.append(known[key])
        if not found[-1].stable:
            break
    return combined(network, places, R, closure, alpha, windows, found, knowledge)


def weights_of(window: Window) -> list[float]:
    """How much enters at every inlet: the sum of its strengths, to weigh widths with."""
    total = np.zeros(len(window.inlets))
    for term in window.entering:
        total[term.inlet] += float(term.strength)
    return [float(value) for value in np.where(total > 0, total, 1e-12)]


def combined(
    network: Network, places: Places, R: int, closure: Closure, alpha: Fraction, windows: list[Window],
    peaks: list[WindowPeaks], knowledge: Knowledge,
) -> WindowRadius:  # fmt: skip
    """The operator of all windows and its radius."""
    stable = all(p.stable for p in peaks)
    guaranteed = stable and all(p.guaranteed for p in peaks)
    notes = dict.fromkeys(p.note for p in peaks if p.note)
    worst = max(range(len(peaks)), key=lambda i: windows[i].size, default=0)
    lower, upper, estimate = 0.0, math.inf, math.inf
    above = below = None
    if guaranteed:
        above = operator_of(places, windows, [p.upper for p in peaks], alpha, up=True)
        below = operator_of(places, windows, [p.lower for p in peaks], alpha, up=False)
        upper, lower = float(above.radius(1e-9).upper), float(below.radius(1e-9).lower)
        estimate = (lower + upper) / 2
    elif stable and all(np.all(np.isfinite(p.estimate)) for p in peaks):
        estimate = float(operator_of(places, windows, [p.estimate for p in peaks], alpha, up=True).radius(1e-9).upper)
    return WindowRadius(
        R, closure, lower, upper, estimate, guaranteed, stable,
        states=windows[worst].size if windows else 0,
        entering=sum(len(w.entering) for w in windows),
        alpha=alpha,
        method=peaks[worst].method if peaks else "",
        covers=covered(network, R, knowledge),
        above=above,
        below=below,
        windows=tuple(windows),
        peaks=tuple(peaks),
        note="; ".join(notes),
    )  # fmt: skip


def operator_of(
    places: Places, windows: list[Window], peaks: list[np.ndarray], alpha: Fraction, up: bool
) -> GainOperator:
    """The gain operator with the given peak gains, its numbers rounded up or down."""
    row, source, gain, choice = [], [], [], []
    groups = 0
    with ctx.workprec(128):
        for window, table in zip(windows, peaks, strict=True):
            factors = [_factor(term, alpha) for term in window.entering]
            most = max((term.choice for term in window.entering), default=-1) + 1
            for k, outlet in enumerate(window.outlets):
                if outlet < 0:  # a state or a command: no row of the operator
                    continue
                for term, factor in zip(window.entering, factors, strict=True):
                    value = arb(float(table[k, term.inlet])) * factor
                    row.append(outlet)
                    source.append(term.source)
                    gain.append(outward(value, value)[1 if up else 0])
                    choice.append(-1 if term.choice < 0 else groups + term.choice)
            groups += most
    chosen = choice if max(choice, default=-1) >= 0 else None
    return GainOperator.from_links(places.plan.size, row, source, gain, "sum", choice=chosen)


def _factor(term: Entering, alpha: Fraction) -> arb:
    factor = arb(fmpq(term.strength.numerator, term.strength.denominator))
    exponent = alpha * term.delay
    if exponent:
        factor *= arb(fmpq(exponent.numerator, exponent.denominator)).exp()
    return factor


def covered(network: Network, R: int, knowledge: Knowledge) -> str:
    """What a radius below one proves, in a sentence without its full stop."""
    size = (
        f"these {network.units} units"
        if network.members is not None
        else "the pattern without end, any number of units"
    )
    loose = tuple(
        dict.fromkeys(
            link.name for link in network.links if link.sort == "link" and loosely_known(link, knowledge.loose)
        )
    )
    if R == 0:
        return f"{size}, with links of any behaviour within their strengths"
    apart = f"; links of {', '.join(loose)} of any behaviour within their strengths" if loose else ""
    off = [f"{name} up to {float(exact(value)):g}" for name, value in knowledge.uncertain.items() if exact(value)]
    wrong = f"; strengths off by {', '.join(off)}, at any time" if off else ""
    return f"{size}, with links of the declared, constant strength and sign, always fresh{apart}{wrong}"
