"""The window route's factor beside the exact limit and the class limit: how much of the true margin is proven.

Three limits on the strength of the links, each with its own meaning: what windows prove for every number of units with
the links inside a window as declared; where the guarantee for every behaviour of the links is lost (theory (2)); and
where the declared network breaks. The first lies between the other two wherever the third is finite.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, isinf

from synth.base.progress import Listener, silent
from synth.gain.window import Knowledge, WindowFactor, window_factor
from synth.gain.window.route import AS_DECLARED
from synth.margin.ranges import StableRanges, stable_ranges
from synth.network.gains import Gains
from synth.network.model import Network


@dataclass(frozen=True)
class WindowMargin:
    """``window``: what windows prove; ``exact``: where the declared network is stable.

    ``class_limit``: the largest factor at which the peak route (windows of radius 0) still proves the network; beyond
    its first failure the class of all link behaviours is lost.
    """

    window: WindowFactor
    exact: StableRanges
    class_limit: float

    @property
    def share(self) -> float | None:
        """Proven factor over the first failure of the declared network; None where that is not finite."""
        return None if isinf(self.exact.first_failure) else self.window.proven / self.exact.first_failure

    def sentence(self) -> str:
        """The answer in one sentence; what is scanned is called so."""
        w, e = self.window, self.exact
        if w.proven <= 0 or w.at is None:
            first = "Windows prove nothing at any strength tried"
        else:
            first = (
                f"Proven at {w.proven:.4g} times today's strength for {w.at.covers} (windows of radius {w.R}, "
                f"{w.at.states} states)"
            )
        again = "" if w.monotone else "; at some smaller strengths this proof fails, see the ranges"
        broken = (
            f"the declared network shows no failure up to {e.most:g} times"
            if isinf(e.first_failure)
            else f"the declared network breaks at {e.first_failure:.4g} times"
        )
        calm = " and is stable again beyond (as scanned)" if e.interrupted else ""
        return f"{first}{again}; with links of any behaviour {self.class_limit:.4g}; {broken}{calm}."


def window_margin(
    network: Network, gains: Gains, R: int | None = None, classes: tuple[str, ...] | None = None,
    own_parts: bool = True, width: float = 1e-3, most: float = 20.0,
    knowledge: Knowledge = AS_DECLARED,
    cover: bool = False, seconds: float = 60.0, certify: bool = True, progress: Listener = silent,
) -> WindowMargin:  # fmt: skip
    """Largest factor proven by windows beside the exact ranges and the class limit; arguments as in ``window_factor``.

    The scan of the windows ends just beyond the exact limit where there is one. Law: ``window.proven`` lies inside a
    range of ``exact`` (up to the widths). Raises InputError as its parts do.
    """
    exact = stable_ranges(network, gains, classes, own_parts, 0.05, most, width, certify, progress)
    top = max((r.upper for r in exact.ranges), default=most)
    end = min(most, max(top, 1.0) * 1.01 if not isinf(top) else most)
    window = window_factor(
        network, gains, R, classes, own_parts, width, max(end, 1.01), knowledge, None, cover, seconds,
        progress=progress,
    )  # fmt: skip
    return WindowMargin(window, exact, window.peak_route if window.peak_route < inf else inf)
