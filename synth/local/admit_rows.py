"""What arrives where, and the sizes of new outlets at which the changed rows ask least (a least fixed point)."""

from __future__ import annotations

from collections import Counter

import numpy as np
from numpy.typing import NDArray

from synth.gain.assembly import Assembly
from synth.network.model import Link, Network

Array = NDArray[np.float64]


def arrivals(network: Network) -> dict[str, Counter[tuple[str, Link]]]:
    """Per unit (members) or kind, how often each link arrives from where."""
    if network.members is None:
        found = {kind.name: Counter[tuple[str, Link]]() for kind in network.kinds}
        for link in network.links:
            found[link.kind][link.source_kind, link] += 1
        return found
    members = network.members
    table = {name: Counter[tuple[str, Link]]() for name in members.names}
    for to, source, number in zip(*(a.tolist() for a in members.expanded()), strict=True):
        table[members.names[to]][members.names[source] if source >= 0 else "", network.links[number]] += 1
    return table


def hears(links: Counter[tuple[str, Link]], new: set[str]) -> bool:
    """Whether any of the links comes from ``new``."""
    return any(source in new for source, _ in links)


def best_sizes(whole: Assembly, s: Array, fresh: NDArray[np.intp], rows: NDArray[np.intp], aim: float) -> Array | None:
    """Sizes of the fresh outlets at the smallest factor mu at which all changed rows hold; None where none exist."""
    others = np.setdiff1d(rows, fresh)

    def worst(mu: float) -> tuple[float, Array | None]:
        """The largest quotient of the other changed rows with the least fresh sizes at mu."""
        trial = _least(whole, s, fresh, mu)
        if trial is None:
            return np.inf, None
        image = whole.upper.apply(trial)
        return float((image[others] / trial[others]).max(initial=0.0)), trial

    high, found = aim, worst(aim)
    for _ in range(60):
        if found[1] is not None and found[0] <= high:
            break
        high *= 2.0
        found = worst(high)
    if found[1] is None:
        return None
    low, best = 0.0, found[1]
    for _ in range(80):
        middle = (low + high) / 2
        quotient, trial = worst(middle)
        if trial is not None and quotient <= middle:
            high, best = middle, trial
        else:
            low = middle
        if high - low <= 1e-9 * high:
            break
    return best


def _least(whole: Assembly, s: Array, fresh: NDArray[np.intp], mu: float) -> Array | None:
    """The least sizes of the fresh outlets with G(s) <= mu s in their rows, from zero up; None where they run away."""
    trial = s.copy()
    if not len(fresh):
        return trial
    most = 1e12 * max(float(s.max(initial=0.0)), 1e-300)
    for _ in range(5000):
        after = whole.upper.apply(trial)[fresh] / mu
        if np.any(after > most):
            return None
        if np.all(after <= trial[fresh] * (1 + 1e-12)):
            # A hair more covers the last step and rounding; outlets that nothing reaches need a size above zero.
            trial[fresh] = np.maximum(after * (1 + 1e-11), 1e-12 * max(float(s.max(initial=0.0)), 1e-300))
            return trial
        trial[fresh] = after
    return None
