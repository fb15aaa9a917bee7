"""The radius of the windows, chosen: they grow until the target is met, the budget is spent, or nothing improves.

The radius of M_W need not fall with every step (a window of two units can be worse than one), so one bad step ends
nothing; what ends the search is said in the result.
"""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from dataclasses import dataclass

from synth.base.errors import InputError
from synth.base.exact import Number
from synth.base.progress import Listener, silent
from synth.gain.window.norm import MOST_STATES
from synth.gain.window.route import AS_DECLARED, Knowledge, WindowRadius, window_radius
from synth.network.gains import Gains
from synth.network.model import Network

_STILL = 1e-3
_HOPELESS = 1e4


@dataclass(frozen=True)
class Growth:
    """``best``: the window radius to use, the first below the target or the one with the smallest radius.

    ``tried``: (R, radius or estimate, states) of every step; ``ended``: 'target', 'budget', 'settled' or 'unstable'.
    """

    best: WindowRadius
    tried: tuple[tuple[int, float, int], ...]
    ended: str

    def __repr__(self) -> str:
        """The best, and why the search ended."""
        return f"Growth({self.best!r}, {len(self.tried)} steps, ended by {self.ended})"


def reaches() -> Iterator[int]:
    """0, 1, 2, 3, 4, 6, 8, 12, 16, 24, ...: doubling in two steps."""
    yield from (0, 1, 2, 3)
    size = 4
    while True:
        yield size
        yield size + size // 2
        size *= 2


def grown_radius(
    network: Network, gains: Gains, target: float = 1.0, alpha: Number = 0, width: float = 1e-6,
    knowledge: Knowledge = AS_DECLARED,
    seconds: float = 60.0, most_states: int = MOST_STATES, progress: Listener = silent,
) -> Growth:  # fmt: skip
    """Grow the windows until a guaranteed radius is below ``target`` (> 0, at most 1).

    ``seconds`` of processor time and ``most_states`` bound the work; a step that would exceed the states is not begun.
    Raises InputError for numbers out of range and whatever :func:`window_radius` raises.
    """
    if not 0 < target <= 1:
        raise InputError(f"the target must lie between 0 and 1, not {target!r}.")
    start = time.process_time()
    tried: list[tuple[int, float, int]] = []
    best: WindowRadius | None = None
    ended, still, unstable, last = "budget", 0, 0, math.inf
    for R in reaches():
        began = time.process_time()
        found = window_radius(network, gains, R, alpha, width, knowledge)
        value = found.upper if found.guaranteed else found.estimate
        tried.append((R, value, found.states))
        progress(f"windows of radius {R}: {found!r}")
        if best is None or _better(found, best):
            best = found
        if found.guaranteed and found.upper < target:
            ended = "target"
            break
        unstable = unstable + 1 if not found.stable else 0
        still = still + 1 if abs(value - last) <= _STILL * abs(value) else 0
        last = value
        if unstable >= 3 or _HOPELESS < value < math.inf:
            ended = "unstable"
            break
        if still >= 2:
            ended = "settled"
            break
        spent = time.process_time() - start
        dimension = max(network.dimension, 1)
        if (
            spent + 1.5 ** (2.5 * dimension) * (time.process_time() - began) > seconds
            or 1.5**dimension * found.states > most_states
        ):
            break
    assert best is not None
    return Growth(best, tuple(tried), ended)


def _better(one: WindowRadius, other: WindowRadius) -> bool:
    def key(found: WindowRadius) -> tuple[bool, float]:
        return not found.guaranteed, found.upper if found.guaranteed else found.estimate

    return key(one) < key(other)
