"""From a network and its gains to the margin of the coupling: search, certify, bracket, look at each link."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from math import inf
from typing import Protocol

import numpy as np

from synth.base.errors import InputError, SynthError, nearest
from synth.base.progress import Listener, silent
from synth.base.provenance import Provenance
from synth.gain.sensitivity import LinkNetwork
from synth.margin.coupling import CAP, CouplingLimit, Folded, Scaling, bottleneck, coupling_limit, tidy
from synth.margin.folded import DRIFT
from synth.margin.limits import has_limits, largest_within, worst_use
from synth.margin.nominal import nominal_limits
from synth.margin.redesign import NEAR_ONE, largest_redesigned
from synth.margin.result import LinkTolerance, Margin
from synth.margin.tolerance import pattern_link_tolerances
from synth.network.gains import Gains
from synth.network.model import Link, Network
from synth.proof import Certificate, prove


class HasGains(Protocol):
    """Anything that carries gains, such as a Design."""

    @property
    def gains(self) -> Gains:
        """The gains."""
        ...


def margin(
    network: Network,
    design_or_gains: HasGains | Gains,
    classes: tuple[str, ...] | None = None,
    own_parts: bool = True,
    redesign: bool = False,
    width: float = 1e-3,
    progress: Listener = silent,
) -> Margin:
    """Find how much stronger the links of ``network`` may get under fixed gains.

    ``classes``: names of link classes to scale (None: all). ``own_parts``: whether the own part of a relative link
    grows with it (default yes). ``redesign``: also pick gains anew at each strength. ``width``: relative width of
    every bracket, between 1e-6 and 0.1. Raises InputError for an unknown class, a width outside that range, or gains
    that do not fit. Every description of a network is taken; what an exact limit is about, and where there is none,
    is said in its note. Law: proven_factor <= class_limit <= exact.upper (up to the widths), all as factors on today's
    strengths. Sources: theory (1), (2), (3), (15) and sections 6 and 9; the coverings are ours.
    """
    if not isinstance(network, Network):
        raise InputError(
            f"the margin needs a network, not {type(network).__name__}; read a problem file first: synth.read(path)."
        )
    gains = design_or_gains if isinstance(design_or_gains, Gains) else design_or_gains.gains
    chosen = _checked(network, gains, classes, width)
    scaling = Scaling(network, gains, chosen, own_parts, width / 20)
    progress("searching the largest proven strength")
    limit = coupling_limit(scaling, width, progress=progress)
    proven, certificate = _certify(scaling, limit, width)
    notes = _notes(scaling, limit, proven, certificate)
    progress("bracketing the strength at which the declared network breaks")
    exact, fresh = nominal_limits(scaling, limit, width, progress)
    folded = scaling.folded(1.0)
    progress("looking at each link by itself")
    links = _links(scaling, folded, limit, width)
    within, within_ok = _within(scaling, proven, certificate, width, progress)
    again = largest_redesigned(scaling, proven, certificate, max(width, 0.05), progress=progress) if redesign else None
    return Margin(
        proven_factor=proven,
        class_limit=limit.lost,
        exact=exact,
        exact_no_delay=fresh,
        covered=min(limit.covered, proven) if limit.nominal_proven else 0.0,
        capped=limit.capped,
        class_capped=limit.capped,
        route="peak",
        classes=chosen,
        own_parts=own_parts,
        relative=any(link.relative for link in scaling.links),
        links=links,
        bottleneck=bottleneck(folded),
        within_limits_factor=within,
        within_limits_certified=within_ok,
        redesigned=again,
        certificate=certificate,
        notes=notes,
        units_word=_units_word(network),
        whole=_whole(network),
        provenance=Provenance(network.hash, {"classes": chosen, "own_parts": own_parts, "width": width, "cap": CAP}),
    )


def _checked(network: Network, gains: Gains, classes: tuple[str, ...] | None, width: float) -> tuple[str, ...] | None:
    if not 1e-6 <= width <= 0.1:
        raise InputError(f"width is {width}; a relative width between 1e-6 and 0.1 is accepted.")
    for kind in network.kinds:
        if kind.name not in gains:
            raise InputError(f"the gains have no entry for kind {kind.name!r}; every kind of the network needs one.")
    if classes is None:
        return None
    if isinstance(classes, str):
        classes = (classes,)
    for name in classes:
        if name not in network.classes():
            raise InputError(
                f"no link class is named {name!r}{nearest(name, network.classes())}; "
                f"known: {', '.join(network.classes()) or 'none'}."
            )
    return tuple(classes)


def _certify(scaling: Scaling, limit: CouplingLimit, width: float) -> tuple[float, Certificate | None]:
    """The largest factor at or just below the one found at which a certificate is accepted, and that certificate.

    Where certificates are not offered for the description the factor stands on the enclosure of the radius alone.
    """
    if limit.proven <= 0:
        return 0.0, None
    try:
        return _certified(scaling, limit, width)
    except InputError:
        if _plain_pattern(scaling.network):
            raise
    return limit.proven, None


def _plain_pattern(network: Network) -> bool:
    fixed = not any(link.weakens or link.choice for link in network.links)
    return network.description == "pattern" and network.dimension == 1 and fixed


def _certified(scaling: Scaling, limit: CouplingLimit, width: float) -> tuple[float, Certificate | None]:
    if limit.unlimited:
        found = _proof(scaling, Fraction(1))
        return (inf, found) if found.proven else (0.0, None)
    factor = limit.proven
    for step in range(6):
        kappa = tidy(factor)
        found = _proof(scaling, kappa)
        if found.proven:
            return float(kappa), found
        factor = limit.proven * (1 - width / 8 * 2**step)
    found = _proof(scaling, Fraction(1))  # today's strength, where there is most room
    return (1.0, found) if limit.proven > 1 and found.proven else (0.0, None)


def _proof(scaling: Scaling, kappa: Fraction) -> Certificate:
    """A certificate at that factor; where the declared disturbances break a limit, one about small disturbances.

    Stability of the coupled loop does not hang on how large the disturbances are, keeping the limits does. The second
    certificate declares peaks of zero and states in its validity how large disturbances may be.
    """
    network = scaling.at(kappa)
    if not has_limits(scaling) or worst_use(scaling, float(kappa)) < 1:
        found = prove(network, scaling.gains, route="peak", target=NEAR_ONE)
        if found.proven or not found.radius.upper < 1:
            return found
    return prove(_undisturbed(network), scaling.gains, route="peak", target=NEAR_ONE)


def _undisturbed(network: Network) -> Network:
    """The same network with declared disturbance peaks of zero."""
    kinds = tuple(
        replace(kind, disturbances=tuple(replace(w, peak=Fraction(0)) for w in kind.disturbances))
        for kind in network.kinds
    )
    return replace(network, kinds=kinds)


def _links(scaling: Scaling, folded: Folded, limit: CouplingLimit, width: float) -> tuple[LinkTolerance, ...]:
    """Both tolerances of every link; none where today's network is not proven (then no single link has a margin)."""
    network = scaling.network
    if not network.links or not folded.stable or folded.radius()[1] >= 1:
        return ()
    single = _single(scaling, folded)
    whole: dict[str, CouplingLimit] = {}
    for name in network.classes():
        alone = Scaling(network, scaling.gains, (name,), scaling.own_parts, scaling.width)
        same = scaling.classes in (None, (name,)) and network.classes() == (name,)
        whole[name] = limit if same else coupling_limit(alone, width)
    return tuple(
        LinkTolerance(link.name, _words(link), whole[link.name].proven, alone_factor, whole[link.name].capped)
        for link, alone_factor in zip(network.links, single, strict=True)
        if link.sort == "link"  # tolerances and nonlinear terms are what they are; only couplings have a margin
    )


def _single(scaling: Scaling, folded: Folded) -> tuple[float | None, ...]:
    """The factor on one copy of each link alone; of members the least over all copies, None where it is not offered.

    Rows with alternatives (rules, links that may weaken) are no sums, and beside an edge copies differ: None.
    """
    network, plan = scaling.network, folded.plan
    assert plan is not None
    nothing: tuple[float | None, ...] = (None,) * len(network.links)
    if network.description == "pattern" and network.dimension == 1 and plan.choice.max(initial=-1) < 0:
        peaks = {network.kinds[spec.kind].name: p.upper for spec, p in zip(plan.specs, folded.peaks, strict=True)}
        return pattern_link_tolerances(network, peaks)
    if network.members is None or plan.choice.max(initial=-1) >= 0:
        return nothing
    return _least_over_copies(network, folded, nothing)


def _least_over_copies(network: Network, folded: Folded, nothing: tuple[float | None, ...]) -> tuple[float | None, ...]:
    plan = folded.plan
    assert plan is not None
    peaks = [folded.peaks[k].upper for k in plan.unit_spec.tolist()]
    first = np.flatnonzero((plan.row_offer[plan.row] == 0) & (folded.role != DRIFT))  # one term per ray
    strengths = [abs(float(link.strength)) for link in plan.links]
    source = plan.source[first]
    found = LinkNetwork.of(
        peaks, plan.row_unit[source], plan.row_offer[source], plan.row_unit[plan.row[first]], plan.take[first],
        np.array(strengths)[plan.link[first]],
    ).tolerances()  # fmt: skip
    least = np.full(len(network.links), inf)
    np.minimum.at(least, plan.link[first], found)
    return tuple(float(v) for v in least) if len(first) else nothing


def _within(
    scaling: Scaling, proven: float, certificate: Certificate | None, width: float, progress: Listener
) -> tuple[float | None, bool]:
    """Largest factor within actuator limits and bands, and whether a certificate at that factor agrees."""
    if not has_limits(scaling) or proven <= 0:
        return (0.0 if has_limits(scaling) else None), False
    progress("checking actuator limits and bands")
    if certificate is not None and proven < inf and not _peaks_set_aside(scaling, certificate):
        return proven, True  # the certificate at the proven factor already keeps every limit
    factor = largest_within(scaling, proven, width)
    for _ in range(4):
        if factor <= 0:
            break
        kappa = tidy(factor)
        try:
            found = prove(scaling.at(kappa), scaling.gains, route="peak", target=NEAR_ONE)
        except SynthError:
            break
        if found.proven and all(p.limit is None or p.value < p.limit for p in found.peaks):
            return float(kappa), True
        factor *= 1 - width / 2
    return factor, False


def _notes(scaling: Scaling, limit: CouplingLimit, proven: float, certificate: Certificate | None) -> tuple[str, ...]:
    notes = []
    if not limit.nominal_proven:
        notes.append("today's network itself is not proven with these gains; the factor is below 1 or 0.")
    if limit.proven > 0 and certificate is None and proven > 0:
        notes.append(
            "the radius is enclosed below 1 up to there; no certificate of this description was made, so no "
            "stand-alone check has confirmed it."
        )
    elif limit.proven > 0 and certificate is None:
        notes.append(f"the search found {limit.proven:.6g}, but no certificate was accepted there; nothing is claimed.")
    if not limit.lost_confirmed:
        notes.append("the limit of the class is an estimate: no enclosure confirmed it within the width.")
    if limit.capped:
        notes.append(f"the search stopped at {limit.proven:g} times today's strength without a failure.")
    if limit.unlimited and proven > 0:
        notes.append("the chosen links lie on no closed path, so their strength does not change the radius.")
    if limit.nominal_proven and proven > 0 and limit.covered < min(limit.proven, proven):
        notes.append(
            f"every factor from 1 to {limit.covered:.6g} is proven; between there and {proven:.6g} the factors tried "
            "were, the ones in between were not."
        )
    if certificate is not None and certificate.validity is not None and _peaks_set_aside(scaling, certificate):
        w = certificate.validity.w
        notes.append(
            f"at {proven:.6g} times today's strength the declared disturbances are too large for the limits; the "
            f"certificate there is about stability, and keeps every limit for disturbances up to {w:.3g} from rest."
        )
    if scaling.own_parts and scaling.moves_units:
        notes.append("own parts of relative links grow with the factor.")
    return tuple(notes)


def _peaks_set_aside(scaling: Scaling, certificate: Certificate) -> bool:
    """Whether the certificate is about the network with disturbance peaks of zero though larger ones are declared."""
    declared = any(w.peak > 0 for kind in scaling.network.kinds for w in kind.disturbances)
    model = certificate.document["model"]
    return declared and not any(Fraction(w["peak"]) > 0 for kind in model["kinds"] for w in kind["disturbances"])


def _words(link: Link) -> str:
    delay = f", up to {_decimal(link.delay)} s late" if link.delay else ""
    at = f" at {' '.join(f'{step:+d}' for step in link.at)}" if link.at else ""
    if link.choice:
        at = " within its rule"
    return f"{link.name} ({link.source_kind}.{link.offer}{at} -> {link.kind}.{link.take}{delay})"


def _decimal(value: Fraction) -> str:
    return f"{float(value):g}"


def _whole(network: Network) -> str:
    """What the proof is about, to be read after 'for'."""
    units = _units_word(network)
    if network.members is not None:
        return f"these {len(network.members.names)} units and no larger network"
    if network.description == "rules":
        return f"any number of {units} in every wiring within the rules, rewired at any time"
    edges = " behind this edge" if len(network.edges) == 1 else " between these edges" if network.edges else ""
    return f"any number of {units}{edges}"


def _units_word(network: Network) -> str:
    """Plain English plural of the kind where there is only one, 'units' otherwise."""
    return f"{network.kinds[0].name}s" if len(network.kinds) == 1 else "units"
