"""Design for code that samples: the continuous design where its gains hold as sampled, else a search on sampled units.

Where the goal names a sample period, the gains are first rounded to numbers that the code can store, and the radius and
peaks of the sampled units (computation delay, hold and rounding in them) decide. Gains that keep the target there are
taken as they are; otherwise the sampled radius is made small over the same gains, starting from the continuous design
and from placed modes, and what is found is judged by enclosures.
"""

from __future__ import annotations

import os
from dataclasses import replace
from fractions import Fraction

import numpy as np

from synth.base.errors import InputError, WidthNotReached
from synth.base.progress import Listener, silent
from synth.gain.closed import close_plan
from synth.gain.sampled.network import (
    SampledSizes,
    guaranteed_sizes,
    sampled_estimate,
    sampled_units,
    why_not_sampled,
)
from synth.gain.sampled.numbers import stored_gains
from synth.local import designing
from synth.local.designing import Design
from synth.local.finish import TIGHT, Chart
from synth.local.guarantee import Guarantee, broken_bounds, guarantee
from synth.local.plant import Field, field_of
from synth.local.pull import rounded, scaled
from synth.local.sampled_outcome import Sampled
from synth.local.sampled_search import Code, search_sampled
from synth.network.gains import Gains
from synth.network.model import Network

_LADDER = tuple(TIGHT * 2**k for k in range(11))  # up to a fifth: coarse words move gathered modes far
_DIGITS = (6, 10)


def design(
    network: Network,
    target: float | Fraction | None = None,
    seed: int = 0,
    starts: int | None = None,
    progress: Listener = silent,
    check_obstruction: bool = True,
    work: str | os.PathLike[str] | None = None,
    workers: int | None = None,
    sampled: bool | None = None,
) -> Design:
    """Find the gains with the smallest radius within every limit of the goal, or what else ``goal.aim`` makes small.

    Without a sample period this is ``synth.local.designing.design``, whose words about its arguments, limits and errors
    hold here too. With one, the gains are numbers as the code stores them, and ``Design.sampled`` says what is
    guaranteed about the sampled units. ``sampled``: True makes the sampled radius small in any case, False never
    searches, None (default) searches only where the continuous design's gains miss the target, a limit or the form of
    numbers as sampled. Limits on modes are about the continuous loop, which stays within its limits as well.

    Raises InputError where ``sampled`` is True and the sampled loops cannot be looked at. Method: theory sections 5
    and 6; the search is ours.
    """
    made = designing.design(network, target, seed, starts, progress, check_obstruction, work, workers)
    why = why_not_sampled(network)
    if why is not None:
        if sampled:
            raise InputError(f"{why}; design without the option for sampled units.")
        return made if network.goal.period is None else replace(made, sampled=_outcome(made, None, False, why))
    if not made.reached:
        note = "the continuous loop misses the target or a limit already, so the sampled one was not designed"
        return replace(made, sampled=_outcome(made, None, False, note))
    code = Code(network, made.target)
    kept = _as_it_is(code, made)
    if kept is not None and not sampled:
        return kept
    if sampled is False:
        return _judged(code, made, made.gains, made.digits, False, "the gains are those of the continuous design")
    field = field_of(network)
    if not sampled:
        near = _settled(code, field, (Chart(field, TIGHT).point(scaled(field, made.gains)),))
        if near is not None:
            words = "the gains are those of the continuous design, moved inwards until they hold as stored and sampled"
            return _judged(code, made, *near, False, words)
    progress("designing on the sampled units")
    found = search_sampled(code, field, scaled(field, made.gains), seed, progress)
    settled = _settled(code, field, found.chart_points)
    if settled is None:
        note = "no gains were found that keep the target and every limit as sampled"
        return _judged(code, made, made.gains, made.digits, True, note) if kept is None else kept
    gains, digits = settled
    best = _judged(code, made, gains, digits, True, found.words)
    if kept is not None and kept.sampled is not None and best.sampled is not None:
        return kept if kept.sampled.upper <= best.sampled.upper else best
    return best


def _as_it_is(code: Code, made: Design) -> Design | None:
    """The continuous design, if its gains are stored digit for digit and keep target and limits as sampled."""
    if stored_gains(made.gains, code.network.goal.rounding) != made.gains:
        return None
    if not code.holds(sampled_estimate(code.network, sampled_units(code.network, made.gains))):
        return None
    found = _judged(code, made, made.gains, made.digits, False, "the gains are those of the continuous design")
    return found if found.reached else None


def _settled(code: Code, field: Field, points: tuple[object, ...]) -> tuple[Gains, int] | None:
    """Stored gains near the ends of the search that keep every limit, by exact tests and estimates; best first."""
    best: tuple[float, Gains, int] | None = None
    for point in points:
        for digits in _DIGITS:
            for tight in _LADDER:
                candidate = stored_gains(
                    rounded(field, code.at(field, point, tight), digits), code.network.goal.rounding
                )
                if broken_bounds(code.network, candidate):
                    continue
                sizes = sampled_estimate(code.network, sampled_units(code.network, candidate))
                if sizes is None or not code.holds(sizes):
                    continue
                if best is None or sizes.radius < best[0]:
                    best = sizes.radius, candidate, digits
                break
            if best is not None:
                break
    return None if best is None else best[1:]


def _judged(code: Code, made: Design, gains: Gains, digits: int, searched: bool, note: str) -> Design:
    """A design with these gains: what is guaranteed about the continuous loop, and about the sampled units."""
    whole = made
    if gains != made.gains:
        result: Guarantee = guarantee(code.network, gains)
        units = close_plan(field_of(code.network).plan, gains)
        modes = tuple(tuple(complex(v) for v in np.linalg.eigvals(unit.A.floats())) for unit in units)
        whole = replace(
            made, gains=gains, lower=result.lower, upper=result.upper, peaks=result.peaks, broken=result.broken,
            digits=digits, modes=modes, aimed=(), aim="radius" if searched else made.aim,
            reached=not result.broken and result.upper <= made.target,
        )  # fmt: skip
    try:
        sizes = guaranteed_sizes(code.network, sampled_units(code.network, gains))
    except WidthNotReached as error:
        sizes, note = None, f"{note}; {error}"
    outcome = _outcome(whole, sizes, searched, note)
    good = code.holds(sizes)
    return replace(whole, sampled=replace(outcome, reached=good), reached=whole.reached and good)


def _outcome(made: Design, sizes: SampledSizes | None, searched: bool, note: str) -> Sampled:
    goal = made.network.goal
    assert goal.period is not None
    return Sampled(
        goal.period,
        goal.computation_delay,
        np.inf if sizes is None else sizes.radius,
        {} if sizes is None else sizes.peaks,
        -np.inf if sizes is None else sizes.slowest,
        searched,
        False,
        note,
    )
