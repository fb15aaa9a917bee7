"""The numbers a claim prints, worked out in windows: C, alpha and G of  sup|x(t)| <= C e^{-alpha t} X0 + G sup|w|.

As in the peak route (theory 3c), with every sum running over all states and disturbances of the window:

    z <= (I - M_alpha)^{-1} b X0,   b_k = sup_t |row_k e^{A_W t}|_1        bx_m the same for a state of the centre
    C = max_m { bx_m + sum over entering terms x_ml g e^{alpha d} [(I - M_alpha)^{-1} b]_source }
    G = max_m { x_mw + sum over entering terms x_ml g [(I - M_0)^{-1} p_w]_source }

(I - M)^{-1} b <= s max(b/s)/(1 - lambda) for any s > 0 with M s <= lambda s; that also holds for rows with
alternatives.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.base.exact import Number, exact
from synth.gain.operator import GainOperator
from synth.gain.window.build import Closure, Window, build_window
from synth.gain.window.doubles import LOOSE, Floats, U, doubles_of, gamma
from synth.gain.window.integrals import bernstein_pieces
from synth.gain.window.norm import rightmost_real, verified_norm
from synth.gain.window.peaks import MOST_CELLS, window_peaks
from synth.gain.window.places import places_of
from synth.gain.window.route import AS_DECLARED, Knowledge, operator_of
from synth.gain.window.trajectory import DEGREE, cells, step_of
from synth.network.gains import Gains
from synth.network.model import Network

_SLACK = 1 + 1e-9  # for sums of a few thousand non-negative doubles


@dataclass(frozen=True)
class WindowConstants:
    """Guaranteed C, ``alpha`` (1/s) and G in maximum norms over states (declared units) and over units.

    ``offered`` bounds every offered signal per unit of disturbance, by row of the operator, from rest.
    """

    C: float
    alpha: float
    G: float
    offered: Floats


def window_constants(
    network: Network, gains: Gains, R: int, alpha: Number, width: float = 1e-6,
    knowledge: Knowledge = AS_DECLARED, closure: Closure | None = None,
) -> WindowConstants | None:  # fmt: skip
    """C and G at the rate ``alpha`` >= 0 (1/s), or None if windows of radius ``R`` give no proof at that rate.

    ``closure``: how windows are closed (None: cut). Raises what :func:`window_radius` raises. Theory (20), 3c.
    """
    rate = exact(alpha)
    places = places_of(network, gains)
    way, slack = closure or Closure(), knowledge.slack(network)
    windows = [
        build_window(places, centre, R, way, knowledge.loose, slack, everything=True) for centre in places.centres
    ]
    found = []
    for shift in (rate, Fraction(0)):
        peaks = [window_peaks(window, shift, width, "sparse") for window in windows]
        if not all(p.guaranteed and p.stable for p in peaks):
            return None
        operator = operator_of(places, windows, [p.upper for p in peaks], shift, up=True)
        free = [_free_bounds(window, shift) for window in windows] if shift == rate else []
        if any(bounds is None for bounds in free):
            return None
        found.append((shift, [p.upper for p in peaks], operator, free))
    (shift, late, above, free), (_, still, rest, _) = found
    b, p_w = np.zeros(places.plan.size), np.zeros(places.plan.size)
    for window, bounds, table in zip(windows, free, still, strict=True):
        for k, outlet in enumerate(window.outlets):
            if outlet >= 0 and bounds is not None:
                # Where an offer passes signals on, what was sent before the start may be as large as X0.
                b[outlet] = max(bounds[k], 1.0 if window.through[k] else 0.0)
                p_w[outlet] = _disturbed(window, table[k])
    z, offered = _resolved(above, b), _resolved(rest, p_w)
    if z is None or offered is None:
        return None
    C = G = 0.0
    for window, old, fresh, bounds in zip(windows, late, still, free, strict=True):
        offers = sum(outlet >= 0 for outlet in window.outlets)
        for m in range(offers, offers + window.centre_states):
            if bounds is not None:
                C = max(C, float(bounds[m]) + _entered(window, old[m], z, shift))
            G = max(G, _disturbed(window, fresh[m]) + _entered(window, fresh[m], offered, Fraction(0)))
    return WindowConstants(C * _SLACK, float(rate), G * _SLACK, offered)


def _disturbed(window: Window, gains: Floats) -> float:
    """The sum over all disturbances of the window."""
    return float(gains[list(window.disturbances)].sum()) * _SLACK


def _entered(window: Window, gains: Floats, z: Floats, alpha: Fraction) -> float:
    total = 0.0
    for term in window.entering:
        weight = float(term.strength) * math.exp(float(alpha * term.delay))
        total += float(gains[term.inlet]) * weight * float(z[term.source])
    return total * _SLACK


def _resolved(operator: GainOperator, b: Floats) -> Floats | None:
    """At least (I - M)^{-1} b, or None unless a point shows that the radius is below one."""
    found = operator.radius(1e-9)
    s = np.array(found.point, dtype=float)
    if found.exponent is not None:
        s = np.ldexp(s, found.exponent)
    if not (np.all(s > 0) and np.all(np.isfinite(s))):
        return None
    rate = float((operator(s) / s).max()) * _SLACK
    if not rate < 1:
        return None
    return np.asarray(s * (float((b / s).max()) / (1 - rate)) * _SLACK, dtype=float)


def _free_bounds(window: Window, alpha: Fraction) -> Floats | None:
    """sup over t of |row e^{(A + alpha I) t}|_1 of every outlet, guaranteed; None where the norm is not verified."""
    system = doubles_of(window, alpha)
    if system is None:
        return None
    norm = verified_norm(system, rightmost_real(system))
    if norm is None:
        return None
    weight = 1 / system.scale
    spread = float(np.sqrt((weight * weight).sum())) * norm.euclid * LOOSE
    h = step_of(system)
    highest = np.zeros(len(system.H))
    for count, cell in enumerate(cells(system, norm)):
        pieces = bernstein_pieces(cell.coefficients, 3)  # (pieces, degree + 1, n, outlets)
        slip = gamma(DEGREE + 8) * 8 * (weight @ np.abs(cell.coefficients).sum(axis=0))
        now = (np.abs(pieces) * weight[:, None]).sum(axis=2).max(axis=(0, 1)) * (1 + system.size * 2 * U)
        highest = np.maximum(highest, (now + slip + spread * cell.off) * LOOSE)
        if np.all(spread * cell.left <= highest) or count * h * norm.rate > 1e3 or count > MOST_CELLS:
            break
    return np.maximum(highest, spread * cell.left)
