"""The sections of the report about the network, the gains and the proof."""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.base.unit_text import quotient
from synth.handoff.table import SIGN_CONVENTION
from synth.network.describing import inner_text, internal
from synth.network.gains import Gains
from synth.network.model import Kind, Network
from synth.report.charts import share_bar
from synth.report.figures import draw_radius
from synth.report.html import (
    Child,
    Html,
    bullets,
    element,
    enclosure,
    exactly,
    figure,
    lower,
    paragraph,
    quantity,
    table,
    unit_text,
    upper,
)
from synth.report.words import MOST_LINKS, equations, link_sentence, links_shown, summary

if TYPE_CHECKING:
    from synth.local import Design
    from synth.margin import Margin
    from synth.proof import Certificate

_MOST_LINES, _MOST_KINDS = 40, 12
_ROUTES = {
    "peak": "every unit counts by the largest peak that it can answer a peak of one with, its peak gain",
    "storage": "every unit counts by how far a quadratic function of its state, its storage, can rise",
    "firmware": "every sampled unit counts by its peak gain, the largest over all phases of a sample period",
}
NOT_DESIGNED = "No design was handed to this report: the gains are not shown."
NOT_PROVEN_YET = "No proof was attempted: no certificate was handed to this report, so nothing below is guaranteed."


def section(anchor: str, title: str, *children: Child) -> Html:
    """A section with its heading."""
    return element("section", element("h2", title), *children, id=anchor)


def verdict(network: Network, certificate: Certificate | None, flashed: Certificate | None = None) -> Html:
    """The outcome in a few sentences, marked by word, sign and border."""
    many = "any number of units" if network.units is None else f"exactly these {network.units} units"
    if certificate is None:
        return _verdict("open", "○", "Nothing proven", NOT_PROVEN_YET)
    low, high, target = certificate.radius.lower, certificate.radius.upper, certificate.target
    if certificate.proven:
        loop = "The code as flashed" if certificate.route == "firmware" else "The continuous loop"
        sentence = (
            f"{loop}, {many}: while no actuator saturates and every band is kept, the states stay bounded under "
            f"bounded disturbances and decay when these end. The radius is at most {upper(high)}"
        ) + (f", the target is {quantity(target)}." if target is not None else ".")
        return _verdict("yes", "✓", "Proven", f"{sentence}{_flashed_words(network, certificate, flashed)}")
    why = " ".join(reason if reason.endswith(".") else f"{reason}." for reason in certificate.reasons)
    return _verdict("no", "✗", "Not proven", f"{why or 'No reason was recorded.'} Radius: {enclosure(low, high)}.")


def _flashed_words(network: Network, certificate: Certificate, flashed: Certificate | None) -> str:
    """What is known of the sampled code, for the verdict."""
    if certificate.route == "firmware":
        return ""
    if flashed is not None and flashed.proven:
        period = network.goal.period
        every = "" if period is None else f" (sampled every {exactly(period, 's')})"
        return f" Proven as flashed too{every}: radius at most {upper(flashed.radius.upper)}."
    return " Nothing is proven about the code as flashed (sampled, late, rounded)."


def _verdict(look: str, sign: str, word: str, sentence: str) -> Html:
    sign_part = element("span", sign, aria_hidden="true", cls="sign")
    return element("p", sign_part, " ", element("strong", f"{word}."), " ", sentence, cls=f"verdict {look}")


def asked(network: Network) -> Html:
    """What the problem file says: kinds, equations, limits, links, goal."""
    parts: list[Child] = [paragraph(line) for line in summary(network)[:_MOST_LINES]]
    shown = list(network.kinds) if network.members is None else list(network.kinds)[:_MOST_KINDS]
    for kind in shown:
        lines = element("pre", "\n".join(equations(kind)))
        parts += [element("h3", f"Kind {kind.name}"), lines, *_controller(kind), _signals(network, kind.name)]
        inner = [line.strip() for line in inner_text(kind)]
        if inner:
            parts += [
                paragraph("How the proof counts tolerances and nonlinear terms of this kind (in brackets above):"),
                bullets(inner),
            ]
    if len(network.kinds) > len(shown):
        parts.append(paragraph(f"{len(network.kinds) - len(shown)} more kinds are in the certificate, not here."))
    parts.append(element("h3", "Links"))
    links = links_shown(network)
    if links:
        items: list[Child] = [
            join_words(element("strong", link.name), f": {link_sentence(network, link)}.")
            for link in links[:MOST_LINKS]
        ]
        more = len(links) - len(items)
        parts += [paragraph("Seen from unit i:") if any(link.at for link in links) else None, bullets(items)]
        parts += [paragraph(f"{more} more kinds of link are in the certificate, not here.")] if more else []
    else:
        parts.append(paragraph("None: the units do not act on each other."))
    goal = network.goal
    wanted = [f"Target: radius at most {exactly(goal.target)}."]
    if goal.slowest is not None:
        wanted.append(f"Slowest mode of a closed unit: decay of at least {exactly(goal.slowest, '1/s')}.")
    if goal.fastest is not None:
        wanted.append(f"Fastest mode of a closed unit: modulus at most {exactly(goal.fastest, '1/s')}.")
    if goal.period is not None:
        wanted.append(
            f"Sample period of the controller: {exactly(goal.period, 's')}, computation delay "
            f"{exactly(goal.computation_delay, 's')} (part of a proof as flashed, not of that of the continuous loop)."
        )
    parts += [element("h3", "Goal"), bullets(wanted)]
    return section("asked", "What was asked", *parts)


def _controller(kind: Kind) -> list[Html]:
    """What runs in the controller beside the gains, where it has states of its own."""
    own = kind.controller
    if own is None:
        return []
    words = [f"{state} adds up {sensor} over time" for state, sensor in own.integrals.items()]
    words += [f"{estimate} follows {state}, corrected by the gains" for estimate, state in own.estimates.items()]
    words += [f"{state} is a memory whose rate of change the gains set" for state in own.memory]
    made = f" Not actuators of the plant but rates of these states: {', '.join(own.inputs)}." if own.inputs else ""
    return [
        paragraph(
            f"The controller of this kind has states of its own, which run in the firmware and are part of the proof: "
            f"{'; '.join(words)}.{made}"
        )
    ]


def join_words(*children: Child) -> Html:
    """Children in one line."""
    return element("span", *children)


def _signals(network: Network, name: str) -> Html:
    """Table of a kind's signals with units and declared bounds."""
    kind = network.kind(name)
    rows: list[list[Child]] = []

    def add(role: str, signal: str, unit: str, bound: Fraction | None, word: str) -> None:
        rows.append([role, signal, unit_text(unit) or "1", "" if bound is None else f"{word} {exactly(bound, unit)}"])

    for state in kind.states:
        own = kind.controller is not None and state.name in kind.controller.states
        add("controller state" if own else "state", state.name, state.unit, state.band, "band ±")
    for actuator in kind.inputs:
        own = kind.controller is not None and actuator.name in kind.controller.inputs
        add(
            "rate of a controller state" if own else "actuator", actuator.name, actuator.unit, actuator.limit, "limit ±"
        )
    for disturbance in (w for w in kind.disturbances if not internal(w.name)):
        add("disturbance", disturbance.name, disturbance.unit, disturbance.peak, "peak ±")
    for take in (t for t in kind.takes if not internal(t.name)):
        add("taken", take.name, take.unit, take.band, "band ±")
    for offer in (o for o in kind.offers if not internal(o.name)):
        add("offered", offer.name, offer.unit, offer.band, "band ±")
    return table(f"Signals of {name}", ("Role", "Name", "Unit", "Declared bound"), rows)


def gains_section(network: Network, gains: Gains | None, design: Design | None) -> Html:
    """The gain table with units and sign convention; how the design went."""
    if gains is None:
        return section("gains", "Gains", paragraph(NOT_DESIGNED, cls="absent"))
    rows: list[list[Child]] = []
    for kind in network.kinds:
        found = gains.get(kind.name)
        if found is None:
            continue
        for i, actuator in enumerate(kind.inputs):
            for j, sensor in enumerate(kind.sensors):
                unit = quotient(actuator.unit, sensor.unit)
                rows.append([kind.name, actuator.name, sensor.name, exactly(found.K[i, j]), unit_text(unit) or "1"])
    parts: list[Child] = [
        paragraph(
            f"Sign convention: {SIGN_CONVENTION}. The command of an actuator is the sum of gain times signal; "
            "nothing is subtracted. Values behind ≈ are rounded for print, the exact ones are in the gain table."
        ),
        table("Gains", ("Kind", "Actuator", "Signal", "Gain", "Unit"), rows, numeric=(3,)),
    ]
    if design is None:
        parts.append(paragraph("These gains were handed in as they stand; no design was run.", cls="absent"))
    else:
        parts += _search(design)
    return section("gains", "Gains", *parts)


def _search(design: Design) -> Iterator[Html]:
    """What the search reached, and what stopped it where it did not reach the target."""
    reached = "reached" if design.reached else "not reached"
    yield paragraph(f"Target of the design {quantity(design.target)}: {reached}.")
    if not design.reached:
        yield element("pre", design.explain())


def radius_section(certificate: Certificate | None, margin: Margin | None) -> Html:
    """The enclosure of the radius against target and 1, and the bottleneck."""
    title = "Radius of the gain operator"
    if certificate is None:
        return section("radius", title, paragraph(NOT_PROVEN_YET, cls="absent"))
    low, high = certificate.radius.lower, certificate.radius.upper
    parts: list[Child] = [
        paragraph(
            "The radius says by which factor peaks change, in the long run, each time they pass from unit to unit. "
            "Below 1 they die out. The ends of the interval are rounded outward."
        ),
        figure(
            draw_radius(low, high, certificate.target), f"Radius {enclosure(low, high)}, route {certificate.route}."
        ),
        paragraph(f"Route {certificate.route}: {_ROUTES.get(certificate.route, 'see the claim below')}."),
    ]
    if margin is not None and margin.bottleneck:
        shares = ", ".join(f"{name} {quantity(100 * share, '%', count=2)}" for name, share in margin.bottleneck)
        parts.append(paragraph(f"Bottleneck, the share of each link class in the radius: {shares}."))
    return section("radius", title, *parts)


def peaks_section(network: Network, certificate: Certificate | None) -> Html:
    """Guaranteed peaks against limits and bands, with bars."""
    title = "Guaranteed peaks"
    if certificate is None or not certificate.peaks:
        why = NOT_PROVEN_YET if certificate is None else "The certificate holds no peaks."
        return section("peaks", title, paragraph(why, cls="absent"))
    rows: list[list[Child]] = []
    for number, peak in enumerate(certificate.peaks):
        bound = None if peak.limit is None else float(peak.limit)
        share = None if not bound else float(peak.value) / bound
        bar = (
            element("span", "no bound declared", cls="quiet")
            if share is None
            else Html(share_bar(f"share{number}", share))
        )
        against = "" if bound is None else quantity(bound, peak.unit)
        part = "" if share is None else f"{upper(100 * share, count=3)}{' %'}" + ("" if share < 1 else " exceeded")
        rows.append([peak.kind, peak.role, peak.signal, upper(peak.value, peak.unit), against, part, bar])
    loop = "the code as flashed" if certificate.route == "firmware" else "the continuous loop"
    note = (
        f"Upper bounds on the absolute value, for {loop} under the declared disturbances, starting from rest, at every "
        "time and for every unit. An actuator below its limit never saturates inside the declared envelope."
    )
    if any(internal(peak.signal) for peak in certificate.peaks):
        note += (
            " Offers called 'tolerance of' or 'curve of' something are the arguments of the terms named under the kind."
        )
    header = ("Kind", "Role", "Signal", "Peak at most", "Bound", "Share", "")
    return section("peaks", title, paragraph(note), table("Peaks", header, rows, numeric=(3, 4, 5)))


def constants_section(network: Network, certificate: Certificate | None) -> Html:
    """C, alpha and G with the norm in words, and where the claim is valid."""
    title = "Constants of the guarantee"
    if certificate is None or certificate.constants is None:
        why = NOT_PROVEN_YET if certificate is None else "There are none: the claim was not proven."
        return section("constants", title, paragraph(why, cls="absent"))
    constants, valid = certificate.constants, certificate.validity
    rows: list[list[Child]] = [
        ["C", upper(constants.C), "how many times its initial size a deviation may reach before it decays"],
        ["α", lower(constants.alpha, "1/s"), "rate of decay"],
        ["G", upper(constants.G), "from the largest disturbance to the largest state"],
    ]
    if valid is not None:
        rows += [
            ["X₀ allowed", lower(valid.X0), "initial size that keeps every limit and band"],
            ["w allowed", lower(valid.w), "size of disturbances, from rest, that keeps every limit and band"],
            ["as a factor", lower(valid.factor), "the same as a multiple of the declared peaks"],
        ]
    formula = paragraph("sup |x(t)| ≤ C e", element("sup", "−αt"), " X", element("sub", "0"), " + G sup |w|")
    parts: list[Child] = [
        formula,
        table("Constants", ("Constant", "Value", "Meaning"), rows, numeric=(1,)),
        paragraph(f"Norm: {constants.norm}."),
        paragraph(_mixed(network)),
    ]
    return section("constants", title, *parts)


def _mixed(network: Network) -> str:
    """What a size means that compares numbers of several units."""
    states = [f"{s.name} in {unit_text(s.unit) or '1'}" for k in network.kinds[:1] for s in k.states]
    units = {s.unit for kind in network.kinds for s in kind.states}
    if len(units) == 1:
        return f"All states are in {unit_text(units.pop()) or 'the unit 1'}, so X₀ is a size in that unit."
    return (
        "States of different units are compared here by their bare numbers: an X₀ of 0.1 allows each state of every "
        f"unit 0.1 of its own unit ({', '.join(states)}{', ...' if len(network.kinds) > 1 else ''}). Disturbances "
        "likewise. C, G, X₀ and w therefore depend on the units the problem file declares; the peaks above, each in "
        "the unit of its signal, do not."
    )


def scope_section(certificate: Certificate | None) -> Html:
    """What the proof covers, what it does not."""
    title = "What the proof covers, and what it does not"
    if certificate is None:
        return section("scope", title, paragraph(NOT_PROVEN_YET, cls="absent"))
    columns = (
        element("div", element("h3", "Covered"), bullets(certificate.covers or ("Nothing.",))),
        element("div", element("h3", "Not covered"), bullets(certificate.excludes or ("Nothing was listed.",))),
    )
    claim = paragraph(element("strong", "Claim: "), certificate.claim) if certificate.proven else None
    return section("scope", title, claim, element("div", *columns, cls="two"))
