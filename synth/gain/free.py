"""The largest value a free response can reach: sup_{t>=0} sum_q |(H e^{At})_kq|, enclosed by branch and bound.

It is the factor b_k of theory (3): from initial states with |x_q(0)| <= X0 the outlet k never exceeds b_k X0, and some
initial state attains it. On a cell the Bernstein coefficients of every column bound the sum from above, its values at
both ends bound the supremum from below, and the walk ends once the Lyapunov norm bounds the rest below the best value.
"""

from __future__ import annotations

import numpy as np
from flint import arb, ctx, fmpq, fmpq_mat

from synth.base.errors import InputError, WidthNotReached
from synth.gain.flow import TICK_BITS, Flow, Track, exact_terms, outward
from synth.gain.peak import Matrix, PeakGain, Peaks, as_matrix, check_width, relative_width
from synth.gain.walk import MOST_CELLS, NotClosedError

_ATTEMPTS = 4


def largest_free_response(A: Matrix, H: Matrix, width: float = 1e-6) -> PeakGain:
    """Enclose sup_{t>=0} sum_q |(H e^{At})_kq| for every outlet k: what initial states of size one can bring about.

    ``A`` (n, n) in 1/s; ``H`` (outlets, n) outlet unit per state unit; ``width`` relative, 1e-15 < width < 1. States
    are measured by their largest absolute value. The result holds vectors (outlets,). At t = 0 the sum is |H_k|_1, so
    the supremum is never less than that.

    Raises UnstableLoop if A is not Hurwitz, InputError on shapes, widths and non-finite entries, WidthNotReached if the
    enclosure does not close. Formula: theory (3); the branch and bound is ours.
    """
    check_width(width)
    a, h = as_matrix(A, "A"), as_matrix(H, "H")
    if a.shape[0] != a.shape[1] or h.shape[1] != a.shape[0]:
        raise InputError(f"A must be (n, n) and H (outlets, n), not {a.shape} and {h.shape}.")
    return free_responses(Peaks(a, h, width))


def free_responses(peaks: Peaks) -> PeakGain:
    """The same for a unit whose shared work exists already."""
    lower, upper = np.zeros(peaks.outlets), np.zeros(peaks.outlets)
    columns: list[fmpq_mat] = []
    for q, scale in enumerate(peaks.scale):
        unit = [fmpq(0)] * peaks.size
        unit[q] = fmpq(scale.denominator, scale.numerator)
        columns.append(fmpq_mat(peaks.size, 1, unit))
    terms = [exact_terms(peaks.A, column) for column in columns]
    tracks: dict[int, list[Track]] = {}
    for k in range(peaks.outlets):
        if any(peaks.H[k, q] != 0 for q in range(peaks.size)):
            lower[k], upper[k] = _outlet(peaks, k, columns, terms, tracks)
    return PeakGain(lower, upper, relative_width(lower, upper))


def _outlet(
    peaks: Peaks, k: int, columns: list[fmpq_mat], terms: list[list[fmpq_mat]], tracks: dict[int, list[Track]]
) -> tuple[float, float]:
    why = ""
    for attempt in range(_ATTEMPTS):
        flow = peaks.flow(attempt)
        with ctx.workprec(flow.bits):
            if attempt not in tracks:
                tracks[attempt] = [Track(flow, c, t) for c, t in zip(columns, terms, strict=True)]
            try:
                low, high = outward(*_supremum(flow, tracks[attempt], k, peaks.H, peaks.width))
            except NotClosedError as reason:
                why = reason.why
                if reason.final:
                    break
                continue
        if high - low <= peaks.width * high:
            return low, high
        why = f"it lies in [{low:g}, {high:g}]"
    raise WidthNotReached(
        f"the largest free response of outlet {k} could not be enclosed to a relative width of {peaks.width:g}: {why}. "
        "Ask for a larger width or damp the loop more."
    )


def _supremum(flow: Flow, tracks: list[Track], k: int, H: fmpq_mat, width: float) -> tuple[arb, arb]:
    """Lower and upper bound of the supremum over all t >= 0; NotClosedError if a cell does not settle."""
    best, highest = arb(0), arb(0)
    share = arb(1) + arb(width) * 0.875
    tick, level = 0, TICK_BITS - 2
    for count in range(MOST_CELLS):
        rest = sum((flow.zeta[k] * (t.states[tick].norm + t.states[tick].error) for t in tracks), arb(0))
        if rest <= best:
            return best, max(highest, best)
        if count % 1024 == 1023 and flow.cells_left(rest, float(best), level) > MOST_CELLS:
            break
        start, end, bound = _cell(flow, tracks, k, H, tick, level)
        best = max(best, start, end)
        if bound <= best * share:
            highest = max(highest, bound)
            for track in tracks:
                track.advance(tick, level)
            tick += 1 << level
            if level < flow.top and tick % (2 << level) == 0:
                level += 1
        elif level == 0:
            raise NotClosedError(f"the response near t = {flow.seconds(tick):.6g} s stays undecided")
        else:
            level -= 1
    raise NotClosedError(f"it decays too slowly: more than {MOST_CELLS} cells are needed", final=True)


def _cell(flow: Flow, tracks: list[Track], k: int, H: fmpq_mat, tick: int, level: int) -> tuple[arb, arb, arb]:
    """On one cell: exact lower bounds at its start and end, and an upper bound over all of it."""
    sums: list[arb] | None = None
    loose, rest = arb(0), arb(0)
    for track in tracks:
        state = track.states[tick]
        sizes = [abs(value) for value in track.bernstein(k, tick, level, H)]
        sums = sizes if sums is None else [a + b for a, b in zip(sums, sizes, strict=True)]
        loose += flow.zeta[k] * state.error
        rest += flow.remainder(k, state, level)
    assert sums is not None
    over = max(*(value.upper() for value in sums[:-1]), (sums[-1] + rest).upper())
    return (sums[0] - loose).lower(), (sums[-1] - rest - loose).lower(), (over + loose).upper()
