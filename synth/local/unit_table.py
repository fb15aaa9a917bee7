"""Guaranteed peak gains of every closed unit of a network, each specification once, on several cores if many."""

from __future__ import annotations

from collections.abc import Sequence

from synth.base.errors import UnstableLoop
from synth.base.progress import Listener, silent
from synth.gain.assembly import PeakTable
from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.peak import PeakGain
from synth.gain.plan import Plan, UnitSpec
from synth.gain.unit import UnitPeaks, state_peaks
from synth.local.workers import in_order
from synth.network.gains import Gains

_CHUNK = 50  # specifications per piece of work


class UnitTable(PeakTable):
    """As ``PeakTable`` at rate zero, with the peak gains to states and actuators beside those to offers.

    ``workers`` processes are used where more than two chunks of specifications are new.
    """

    def __init__(self, gains: Gains, width: float = 1e-6, workers: int = 1, progress: Listener = silent) -> None:
        """Nothing is worked out until a plan asks."""
        super().__init__(gains, width=width)
        self.workers, self.progress = workers, progress
        self._units: dict[tuple[str, UnitSpec], UnitPeaks] = {}

    def of(self, plan: Plan) -> tuple[PeakGain, ...]:
        """Peak gains (offers x takes) per specification of the plan; raises what ``units`` raises."""
        return tuple(unit.offers_takes for unit in self.units(plan))

    def units(self, plan: Plan) -> tuple[UnitPeaks, ...]:
        """All peak gains per specification of the plan.

        Raises UnstableLoop if a closed unit is not Hurwitz, WidthNotReached if a gain does not close, InputError where
        a kind has no gains.
        """
        keys = [(plan.kinds[spec.kind].name, spec) for spec in plan.specs]
        new = [n for n, key in enumerate(keys) if key not in self._units]
        closed = close_plan(plan, self.gains, new)
        chunks = [(tuple(closed[a : a + _CHUNK]), self.width) for a in range(0, len(new), _CHUNK)]
        workers = self.workers if len(chunks) > 2 else 1
        done = 0
        for found in in_order(_peaks_of, chunks, workers, self.progress):
            for unit in found:
                number = new[done]
                if isinstance(unit, str):
                    named = plan.description in ("pattern", "rules")
                    raise UnstableLoop(unit if named else f"unit {plan.units_of(number)[0]}, {unit}")
                self._units[keys[number]] = unit
                done += 1
            if len(chunks) > 2:
                self.progress(f"peak gains enclosed: {done} of {len(new)} different units")
        return tuple(self._units[key] for key in keys)


def _peaks_of(work: tuple[Sequence[ClosedUnit], float]) -> list[UnitPeaks | str]:
    """The peak gains of every unit, or the sentence about the first that is unstable."""
    found: list[UnitPeaks | str] = []
    for unit in work[0]:
        try:
            found.append(state_peaks(unit, width=work[1]))
        except UnstableLoop as error:
            return [*found, f"{error}"]
    return found
