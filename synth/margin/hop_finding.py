"""What `synth margin` answers for a string that sees only gaps: the smallest time gap, and the way to a real proof.

The gains stay as they are; the parameter of the kinds that is their time gap is varied, the file read again at each
value, and the hop claim decided there. Whether a gap holds need not be monotone; what is said is one gap that holds and
a smaller one that does not (``synth.margin.gap``). Kinds are varied one at a time: the hop of a kind does not depend on
the gaps of others.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError, SynthError
from synth.base.progress import Listener, silent
from synth.gain.strings.dead_time import DelayLoop
from synth.gain.strings.hop_network import hop_loops
from synth.margin.gap import GapRow, SmallestGap, holds_at, smallest_gap
from synth.margin.hop_to_proof import AbsoluteShare, absolute_share
from synth.network.gains import Gains
from synth.network.hop_wish import HopWish
from synth.network.model import Network
from synth.network.varying import parameters_of, with_parameters
from synth.proof.hop_statement import wish_of

_LOWEST, _HIGHEST = Fraction(1, 20), Fraction(30)


@dataclass(frozen=True)
class HopMargin:
    """Smallest time gaps of a string with the gains as they are, in seconds.

    ``gaps``: declared kind -> bracket (empty where the file names no gap_parameter); ``worst``: the kind with the
    largest proven gap; ``declared``: the gaps of the file; ``holds``: whether the claim asked for holds as declared
    (None: not decided); ``table``: how the bracket of ``worst`` moves; ``shares``: what would make it a real proof, or
    ``no_share``: why that was not worked out.
    """

    notion: str
    holds: bool | None
    declared: Mapping[str, Fraction]
    gaps: Mapping[str, SmallestGap]
    worst: str | None
    table: tuple[GapRow, ...]
    shares: AbsoluteShare | None
    no_share: str

    def as_json(self) -> dict[str, Any]:
        """The keys of a margin; what belongs to proofs of calm is null."""
        worst = None if self.worst is None else self.gaps[self.worst]
        return {
            "proven_factor": None,
            "class_limit": None,
            "exact": None,
            "route": "hop",
            "links": [],
            "bottleneck": None,
            "smallest_gap": {
                "proven": None if worst is None or worst.proven is None else float(worst.proven),
                "breaks": None if worst is None or worst.breaks is None else float(worst.breaks),
                "kind": self.worst,
            },
            "claim": self.notion,
            "holds_as_declared": self.holds,
            "declared": {name: float(value) for name, value in self.declared.items()},
            "kinds": {name: gap.as_json() for name, gap in self.gaps.items()},
            "table": [{"what": row.what, "value": row.value, **_bracket(row.gap)} for row in self.table],
            "to_proof": {"not_given": self.no_share} if self.shares is None else self.shares.as_json(),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """For a terminal."""
        verdict = {True: "holds", False: "does not hold", None: "is not decided"}[self.holds]
        lines = [f"Hop claim for {self.notion}s at the declared time gaps: it {verdict}."]
        if not self.gaps:
            lines.append(
                "The file names no gap_parameter, so no smallest time gap was sought; the time gap follows from gains."
            )
        for name, gap in self.gaps.items():
            lines.append(f"{name} (declared {float(self.declared[name]):g} s): {gap.sentence()}")
        if self.table:
            lines.append(f"How it moves for a {self.worst}, the gains as they are:")
        for row in self.table:
            proven, breaks = _bracket(row.gap).values()
            said = "no gap proven" if proven is None else f"proven at {proven:.4g} s"
            said += "" if breaks is None else f", fails at {breaks:.4g} s"
            lines.append(f"  {row.what}{' ' + row.value if row.value else ''}: {said}")
        lines.append(self.no_share if self.shares is None else self.shares.as_text().rstrip())
        return "\n".join(lines) + "\n"


def _bracket(gap: SmallestGap) -> dict[str, float | None]:
    return {
        "proven": None if gap.proven is None else float(gap.proven),
        "breaks": None if gap.breaks is None else float(gap.breaks),
    }


def hop_margin(
    network: Network,
    design_or_gains: Any,
    width: float = 2e-3,
    table: bool = True,
    shares: bool = True,
    progress: Listener = silent,
) -> HopMargin:
    """The smallest time gap of every kind (relative ``width``) for gains as they are, and what a proof would need.

    Raises InputError where the file asks for no hop claim, or the network is no string the hop route can take.
    """
    wish = wish_of(network)
    gains = getattr(design_or_gains, "gains", design_or_gains)
    if not isinstance(gains, Gains):
        raise InputError(f"gains or a design were expected, not {type(design_or_gains).__name__}.")
    verdicts = [holds_at(loop, wish.notion) for loops in _loops(network, gains, wish).values() for loop in loops]
    holds = False if False in verdicts else None if None in verdicts else True
    declared: dict[str, Fraction] = {}
    gaps: dict[str, SmallestGap] = {}
    if wish.gap_parameter is not None:
        for name, known in parameters_of(network).items():
            if wish.gap_parameter in known:
                progress(f"looking for the smallest time gap of a {name}")
                declared[name] = known[wish.gap_parameter][0]
                build = _builder(network, gains, wish, name)
                gaps[name] = smallest_gap(build, wish.notion, _LOWEST, _HIGHEST, width)
    worst = max(gaps, key=lambda name: (gaps[name].proven is None, gaps[name].proven or 0), default=None)
    rows: list[GapRow] = []
    if worst is not None and table:
        for what, value, changed, wished in _cases(network, wish, worst):
            progress(f"smallest time gap with {what} {value}".rstrip())
            build = _builder(changed, gains, wished, worst)
            rows.append(GapRow(what, value, smallest_gap(build, wish.notion, _LOWEST, _HIGHEST, max(width, 5e-3))))
    found, why = None, "From hop to proof: not asked for."
    if shares:
        progress("looking for the share of absolute reference that would make it a proof")
        try:
            found, why = absolute_share(network, gains), ""
        except SynthError as error:
            why = f"From hop to proof: not worked out, because {error}"
    return HopMargin(wish.notion, holds, declared, gaps, worst, tuple(rows), found, why)


def _loops(network: Network, gains: Gains, wish: HopWish) -> dict[str, list[DelayLoop]]:
    _, hops = hop_loops(network, gains, wish.gap_error, wish.dead_time, dict(wish.sensing), wish.any_order)
    found: dict[str, list[DelayLoop]] = {}
    for hop in hops:
        found.setdefault(hop.kind, []).append(hop.loop)
    return found


def _builder(network: Network, gains: Gains, wish: HopWish, declared: str) -> Callable[[Fraction], list[DelayLoop]]:
    """From a time gap of the declared kind to the hops of all places that hold such units."""
    parameter = wish.gap_parameter or ""
    old = parameters_of(network)[declared][parameter][0]
    other = with_parameters(network, {declared: {parameter: old * 2}})
    mine = [k.name for k, m in zip(network.kinds, other.kinds, strict=True) if k != m]
    if not mine:
        raise InputError(
            f"design.hop.gap_parameter: {parameter!r} changes nothing in {declared!r}; name one that does."
        )
    links = network.links

    def build(h: Fraction) -> list[DelayLoop]:
        again = replace(with_parameters(network, {declared: {parameter: h}}), links=links)
        found = _loops(again, gains, wish)
        return [loop for name in mine for loop in found[name]]

    return build


def _cases(network: Network, wish: HopWish, worst: str) -> Iterator[tuple[str, str, Network, HopWish]]:
    """One thing changed at a time: times of the kind, dead times, delays of links, links lost."""
    for name, (value, unit) in parameters_of(network).get(worst, {}).items():
        if unit == "s" and name != wish.gap_parameter and value > 0:
            for factor in (Fraction(3, 4), Fraction(5, 4)):
                changed = with_parameters(network, {worst: {name: value * factor}})
                yield name, f"{float(value * factor):g} s", replace(changed, links=network.links), wish
    for dead in (wish.dead_time / 2, wish.dead_time * 2) if wish.dead_time else (Fraction(1, 10),):
        yield "dead time of the command", f"{float(dead):g} s", network, replace(wish, dead_time=dead)
    for sensor, late in wish.sensing.items():
        if late:
            wished = replace(wish, sensing={**wish.sensing, sensor: late * 2})
            yield f"dead time of {sensor}", f"{float(late * 2):g} s", network, wished
    delays = {link.name: link.delay for link in network.links if link.delay}
    for name, delay in delays.items():
        for factor in (Fraction(1, 2), Fraction(2)):
            links = tuple(replace(k, delay=k.delay * factor) if k.name == name else k for k in network.links)
            yield f"delay of {name}", f"{float(delay * factor):g} s", replace(network, links=links), wish
    if wish.radio:
        yield f"{' and '.join(wish.radio)} lost for good", "", without_radio(network, wish), wish


def without_radio(network: Network, wish: HopWish) -> Network:
    """The string whose radio is lost for good: what came by it reads zero."""
    return replace(network, links=tuple(link for link in network.links if link.name not in wish.radio))
