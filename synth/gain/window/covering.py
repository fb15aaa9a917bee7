"""A whole range of factors proven by finitely many sets of windows, each for the factors around its own.

Between two factors the strengths are taken as uncertain by their distance: what is off on a link inside a window
enters as one more link of the class, p_W (its inlet -> centre) times the distance (theory (20)). Own parts of relative
links that grow along count in the same way, as links of a unit to itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction

from synth.gain.window.build import Closure, build_window
from synth.gain.window.peaks import window_peaks
from synth.gain.window.places import places_of
from synth.gain.window.route import Knowledge, combined
from synth.network.gains import Gains
from synth.network.model import Link, Network

_MOST_PIECES = 400
# Distances relative to the factor below which a piece is not worth its work.
_LEAST = 1e-6


@dataclass(frozen=True)
class Drift:
    """What moves: the links of ``classes`` (None: all) of a network under ``gains``, ``own_parts`` with them or not."""

    network: Network
    gains: Gains
    classes: tuple[str, ...] | None
    own_parts: bool
    knowledge: Knowledge
    closure: Closure

    def around(self, centre: Fraction, R: int) -> Callable[[Fraction], float] | None:
        """The upper end of the radius for every factor within a distance of ``centre``; None if a window has none."""
        scaled = self.network.scaled(centre, self.classes, self.own_parts)
        places = places_of(scaled, self.gains)
        uncertain = self.knowledge.checked(self.network)

        def known(link: Link) -> tuple[Fraction, Fraction]:
            return uncertain.get(link.name, Fraction(0)), Fraction(0)

        def moved(link: Link) -> tuple[Fraction, Fraction]:
            off, own = known(link)
            if link.sort != "link" or not (self.classes is None or link.name in self.classes):
                return off, own
            return off + abs(link.strength) / centre, abs(link.own_strength) / centre if self.own_parts else own

        pairs, peaks = [], []
        for middle in places.centres:
            still = build_window(places, middle, R, self.closure, self.knowledge.loose, known)
            pairs.append((still, build_window(places, middle, R, self.closure, self.knowledge.loose, moved)))
            peaks.append(window_peaks(still, Fraction(0), 1e-4))
            if not (peaks[-1].stable and peaks[-1].guaranteed):
                return None

        def radius(distance: Fraction) -> float:
            windows = []
            for still, off in pairs:
                # Strengths are linear in the distance, so two sets of terms say what they are at any.
                terms = tuple(
                    a._replace(strength=a.strength + distance * (b.strength - a.strength))
                    for a, b in zip(still.entering, off.entering, strict=True)
                )
                windows.append(replace(still, entering=terms))
            return combined(scaled, places, R, self.closure, Fraction(0), windows, peaks, self.knowledge).upper

        return radius

    def distance(self, centre: float, R: int) -> float:
        """How far around ``centre`` every factor is proven from one set of windows; 0 if not even the centre is."""
        radius = self.around(Fraction(centre), R)
        if radius is None or not radius(Fraction(0)) < 1:
            return 0.0
        high = centre
        while high > _LEAST * centre and not radius(Fraction(high)) < 1:
            high /= 2
        low, high = (high, 2 * high) if high > _LEAST * centre else (0.0, 0.0)
        for _ in range(5 if low < centre else 0):
            middle = (low + high) / 2
            if radius(Fraction(middle)) < 1:
                low = middle
            else:
                high = middle
        return low


def covered_up_to(drift: Drift, R: int, top: float) -> float:
    """Up to which factor, at most ``top``, every factor from 1 on is proven, by pieces that overlap; 0 if 1 is not."""
    end, step = 1.0, 0.0
    if drift.distance(1.0, R) <= 0:
        return 0.0
    for _ in range(_MOST_PIECES):
        centre = min(end + 0.9 * step, top)
        distance = drift.distance(centre, R)
        if centre - distance > end:
            centre, distance = end, drift.distance(end, R)
        if distance <= _LEAST * end:
            break
        # A hair less, for the rounding of this addition.
        end, step = (centre + distance) * (1 - 1e-12), distance
        if end >= top:
            return top
    return end
