"""From a network to gains: obstruction, search, rounding, guarantee, and the reason where the target is missed."""

from __future__ import annotations

import os
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import NamedTuple

import numpy as np

from synth.base.errors import InputError, SolverFailure
from synth.base.progress import Listener, silent
from synth.base.provenance import Provenance
from synth.gain import ClosedUnit
from synth.gain.closed import close_plan
from synth.local.aims import AimedPeak, aims_of, role_of
from synth.local.blocking import Blocking, find_blocking
from synth.local.finish import Found, search
from synth.local.guarantee import Broken, SignalPeak
from synth.local.journal import Journal
from synth.local.nominal import nominal_peaks
from synth.local.obstructed import ObstructionFound
from synth.local.plant import Field, field_of
from synth.local.pull import Pulled, pull, scaled
from synth.local.sampled_outcome import Sampled
from synth.local.sweeping import searched_together, sweep
from synth.local.workers import cores
from synth.network.gains import Gains
from synth.network.model import Network

_ROOM = 0.98  # the first search of an aimed design ends at this part of the target
_KEPT = 1e-6  # limits exceeded by less than this count as kept by a search


class Enclosure(NamedTuple):
    """Guaranteed ends of the radius: lower <= radius <= upper."""

    lower: float
    upper: float


@dataclass(frozen=True)
class Design:
    """Gains for every kind, with what is guaranteed about them.

    ``gains`` exact, u = K y in declared units; ``target`` radius asked for; ``lower``, ``upper`` guaranteed ends of the
    radius reached; ``reached``: upper <= target and every limit holds (bounds on modes strictly, decided exactly;
    actuator peaks strictly below their limits; bands); ``broken`` limits that do not hold; ``blocking`` the limit to
    blame when not reached; ``modes`` per kind the eigenvalues of the closed unit in 1/s, estimates; ``peaks``
    guaranteed peaks of every signal under the declared disturbances from rest; ``digits`` significant digits of the
    gains. ``aim`` what was made small ('radius', 'effort' or 'peak'; 'radius' also where the target is out of reach)
    and ``aimed`` the signals whose peaks were, each with its guaranteed and its nominal peak. ``sampled`` what holds
    on the sampled units, where the goal names a period (``reached`` then counts it too); all else is about the
    continuous loop.
    """

    gains: Gains
    target: float
    lower: float
    upper: float
    reached: bool
    blocking: Blocking | None
    modes: tuple[tuple[complex, ...], ...]
    peaks: tuple[SignalPeak, ...]
    broken: tuple[Broken, ...]
    digits: int
    history: tuple[str, ...]
    provenance: Provenance
    network: Network = field(repr=False)
    aim: str = "radius"
    aimed: tuple[AimedPeak, ...] = ()
    sampled: Sampled | None = None

    @property
    def radius(self) -> Enclosure:
        """The guaranteed enclosure of the radius, with fields ``lower`` and ``upper``."""
        return Enclosure(self.lower, self.upper)

    def explain(self) -> str:
        """A paragraph: what was reached, within which limits, and what blocks if the target was missed."""
        from synth.local.wording import explanation

        return explanation(self)

    def as_json(self) -> dict[str, object]:
        """Plain data with the contract keys ``gains, target, radius, reached, blocking`` and more."""
        from synth.local.wording import document

        return document(self)

    def as_text(self) -> str:
        """Tables of gains, modes and peaks with their units."""
        from synth.local.wording import tables

        return tables(self)

    def __str__(self) -> str:
        """The same as ``as_text()``."""
        return self.as_text()


def design(
    network: Network,
    target: float | Fraction | None = None,
    seed: int = 0,
    starts: int | None = None,
    progress: Listener = silent,
    check_obstruction: bool = True,
    work: str | os.PathLike[str] | None = None,
    workers: int | None = None,
) -> Design:
    """Find the gains with the smallest radius within every limit of the goal, or what else ``goal.aim`` makes small.

    ``target`` radius to reach, 0 < target < 1 (absent: the goal's); meeting it early does not stop the search for the
    smallest radius, because a smaller radius is more room for whatever the model leaves out. With the aim 'effort' or
    'peak' the radius only has to stay within the target, and the largest guaranteed peak (in parts of limits or bands,
    where there are several) is made small; if the target is out of reach, the smallest radius is sought instead.
    ``seed`` >= 0 fixes all random choices: equal
    inputs give equal gains. ``starts`` number of placed starts of the search (absent: by the number of gains).
    Where the goal sets no ``fastest`` bound, the search keeps to a disc of its own: ten times the fastest open mode or
    fifty times ``slowest``, whichever is larger (1 1/s where both are zero).

    A network of many gain sets (members with gains of their own) is designed in sweeps of local problems, which
    ``workers`` processes share (absent: all cores); ``work`` names a file that keeps finished local problems, so that
    an interrupted run goes on from it with the same result. The aims 'effort' and 'peak' are refused there, and of the
    causes only the units in the leading loop are named.

    A target out of reach, or limits that no gains keep, is an ordinary result: ``reached`` is False and ``blocking``
    says why. Raises ObstructionFound where no local feedback can work (theory (26)), InputError for a target or
    number out of range, SolverFailure if not one stabilising set of gains was met.
    Method: theory section 5 (cell problem) to start, exact peak gain to finish, (16).
    """
    aim = _checked(network, target, seed, starts)
    if check_obstruction:
        _refuse_obstruction(network)
    plants = field_of(network)
    aimed_at = aims_of(network)
    if not searched_together(plants):
        if aimed_at:
            raise InputError(
                f"the aim {network.goal.aim!r} is not offered for {len(plants.groups)} gain sets; share gains "
                "(gains: per_kind), or aim at the radius."
            )
        many = cores(workers)
        found = sweep(plants, Journal(work), many, progress=progress)
        return _finished(plants, found, aim, seed, progress, explain=False, workers=many)
    if not aimed_at:
        found = search(plants, seed=seed, starts=starts, progress=progress)
        return _finished(plants, found, aim, seed, progress, explain=True)
    first = search(plants, seed=seed, starts=starts, enough=_ROOM * aim, progress=progress)
    if first.merit.excess > _KEPT or not first.merit.radius < aim:
        return _finished(plants, first, aim, seed, progress, explain=True)
    aiming = field_of(network, ceiling=aim)
    found = search(aiming, seed=seed, starts=starts, warm=(first.gains,), progress=progress)
    found = replace(found, history=(*first.history, *found.history))
    made = _finished(aiming, found, aim, seed, progress, explain=False)
    if made.reached:
        return made
    # Rounding left the target or a limit by a hair: the smallest radius has the most room, and says what blocks.
    found = search(plants, seed=seed, starts=starts, warm=(first.gains,), progress=progress)
    return _finished(plants, found, aim, seed, progress, explain=True)


def redesign(
    network: Network,
    start: Gains,
    target: float | Fraction | None = None,
    seed: int = 0,
    progress: Listener = silent,
) -> Design:
    """A quick design that starts from gains of a similar network, such as the same one with stronger links.

    Four placed starts beside ``start`` and a short polish; no obstruction check, ``blocking`` stays None, and the
    aim is the smallest radius whatever the goal names. Arguments and errors as for ``design``.
    """
    aim = _checked(network, target, seed, None)
    plants = field_of(network)
    found = search(plants, seed=seed, starts=4, warm=(scaled(plants, start),), quick=True, progress=progress)
    return _finished(plants, found, aim, seed, progress, explain=False)


def _checked(network: Network, target: float | Fraction | None, seed: int, starts: int | None) -> float:
    """The target as a float, after the arguments were found in range."""
    if not isinstance(network, Network):
        raise InputError(
            f"the design needs a network, not {type(network).__name__}; read a problem file first: synth.read(path)."
        )
    aim = float(network.goal.target if target is None else target)
    if not 0 < aim < 1:
        raise InputError(
            f"target must lie between 0 and 1, not {aim:g}; 0.9 leaves a tenth of the coupling in reserve."
        )
    if seed < 0:
        raise InputError(f"seed must not be negative, not {seed}.")
    if starts is not None and starts < 1:
        raise InputError(f"starts must be at least 1, not {starts}.")
    goal = network.goal
    if goal.slowest is not None and goal.fastest is not None and goal.slowest >= goal.fastest:
        raise InputError(
            f"slowest ({float(goal.slowest):g} 1/s) must be below fastest ({float(goal.fastest):g} 1/s): "
            "modes lie between the two."
        )
    return aim


def _refuse_obstruction(network: Network) -> None:
    """Raise ObstructionFound where no gains can work."""
    from synth.network import obstruction

    found = obstruction(network)
    if found is not None:
        raise ObstructionFound(found)


def _finished(
    plants: Field, found: Found, aim: float, seed: int, progress: Listener, explain: bool, workers: int = 1
) -> Design:
    """Round, guarantee, and explain."""
    if not np.isfinite(found.merit.radius) and not explain:
        raise SolverFailure("no stabilising gains were found from the gains given; run a full design instead.")
    pulled: Pulled = pull(plants, found, workers=workers, progress=progress)
    result = pulled.guarantee
    reached = not result.broken and result.upper <= aim
    progress(f"guaranteed radius between {result.lower:.6g} and {result.upper:.6g}")
    blocking = None
    if not reached and explain:
        blocking = find_blocking(plants, found, aim, seed, progress)
        if not np.isfinite(found.merit.radius) and not np.isfinite(blocking.radius_if_relaxed):
            raise SolverFailure(
                "no stabilising gains were found: the cell problem had no usable answer, and neither had any search "
                "from placed modes, also with each limit relaxed. Check the signs and units of the equations."
            )
    units = close_plan(plants.plan, pulled.gains)
    modes = _modes(plants, units)
    settings: dict[str, object] = {"target": aim, "seed": seed, "digits": pulled.digits, "narrowed": pulled.narrowed}
    aimed: tuple[AimedPeak, ...] = ()
    if plants.ceiling is not None:
        settings["aim"] = plants.network.goal.aim
        aimed = _aimed(plants.network, units, result.peaks)
    return Design(
        gains=pulled.gains, target=aim, lower=result.lower, upper=result.upper, reached=reached, blocking=blocking,
        modes=modes, peaks=result.peaks, broken=result.broken, digits=pulled.digits, history=found.history,
        provenance=Provenance(plants.network.hash, settings), network=plants.network,
        aim="radius" if plants.ceiling is None else plants.network.goal.aim, aimed=aimed,
    )  # fmt: skip


def _modes(plants: Field, units: tuple[ClosedUnit, ...]) -> tuple[tuple[complex, ...], ...]:
    """Per kind the modes of its closed unit; of several that differ in what links fold in, those that decay slowest."""
    found: dict[int, tuple[complex, ...]] = {}
    for spec, unit in zip(plants.plan.specs, units, strict=True):
        modes = tuple(complex(v) for v in np.linalg.eigvals(unit.A.floats()))
        slowest = max((v.real for v in modes), default=-np.inf)
        if spec.kind not in found or slowest > max((v.real for v in found[spec.kind]), default=-np.inf):
            found[spec.kind] = modes
    return tuple(found.get(k, ()) for k in range(len(plants.network.kinds)))


def _aimed(network: Network, units: tuple[ClosedUnit, ...], peaks: tuple[SignalPeak, ...]) -> tuple[AimedPeak, ...]:
    """The aimed signals with their guaranteed and their nominal peaks (patterns of fixed links only)."""
    keys = list(aims_of(network))
    fixed = network.description == "pattern" and not any(link.weakens or link.choice for link in network.links)
    nominals: list[float | None] = [None] * len(keys)
    if fixed:
        nominals = list(nominal_peaks(network, units, keys))
    found = {(p.kind, p.role, p.signal): p for p in peaks}
    return tuple(
        AimedPeak(kind, role_of(group), name, p.unit, p.value, nominal, p.limit)
        for (kind, group, name), nominal in zip(keys, nominals, strict=True)
        for p in (found[kind, role_of(group), name],)
    )
