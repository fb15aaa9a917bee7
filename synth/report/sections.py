"""The sections of the report about the network, the gains and the proof."""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.handoff.quantity import quotient
from synth.handoff.table import SIGN_CONVENTION
from synth.network.gains import Gains
from synth.network.model import Network
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
from synth.report.words import equations, link_sentence, summary

if TYPE_CHECKING:
    from synth.local import Design
    from synth.margin import Margin
    from synth.proof import Certificate

NOT_DESIGNED = "No design was handed to this report: the gains are not shown."
NOT_PROVEN_YET = "No proof was attempted: no certificate was handed to this report, so nothing below is guaranteed."


def section(anchor: str, title: str, *children: Child) -> Html:
    """A section with its heading."""
    return element("section", element("h2", title), *children, id=anchor)


def verdict(network: Network, certificate: Certificate | None) -> Html:
    """The outcome in one sentence, marked by word, sign and border."""
    many = "any number of units" if network.units is None else f"exactly these {network.units} units"
    if certificate is None:
        return _verdict("open", "○", "Nothing proven", NOT_PROVEN_YET)
    low, high, target = certificate.radius.lower, certificate.radius.upper, certificate.target
    if certificate.proven:
        sentence = f"For {many} the network stays bounded and decays: the radius is at most {upper(high)}" + (
            f", the target is {quantity(target)}." if target is not None else "."
        )
        return _verdict("yes", "✓", "Proven", sentence)
    why = " ".join(reason if reason.endswith(".") else f"{reason}." for reason in certificate.reasons)
    return _verdict("no", "✗", "Not proven", f"{why or 'No reason was recorded.'} Radius: {enclosure(low, high)}.")


def _verdict(look: str, sign: str, word: str, sentence: str) -> Html:
    sign_part = element("span", sign, aria_hidden="true", cls="sign")
    return element("p", sign_part, " ", element("strong", f"{word}."), " ", sentence, cls=f"verdict {look}")


def asked(network: Network) -> Html:
    """What the problem file says: kinds, equations, limits, links, goal."""
    parts: list[Child] = [paragraph(summary(network))]
    for kind in network.kinds:
        lines = element("pre", "\n".join(equations(kind)))
        parts += [element("h3", f"Kind {kind.name}"), lines, _signals(network, kind.name)]
    parts.append(element("h3", "Links"))
    if network.links:
        items: list[Child] = [
            join_words(element("strong", link.name), f": {link_sentence(network, link)}.") for link in network.links
        ]
        parts += [paragraph("Seen from unit i:"), bullets(items)]
    else:
        parts.append(paragraph("None: the units do not act on each other."))
    goal = network.goal
    wanted = [f"Target: radius at most {exactly(goal.target)}."]
    if goal.slowest is not None:
        wanted.append(f"Slowest mode of a closed unit: decay of at least {exactly(goal.slowest, '1/s')}.")
    if goal.fastest is not None:
        wanted.append(f"Fastest mode of a closed unit: modulus at most {exactly(goal.fastest, '1/s')}.")
    if goal.period is not None:
        wanted.append(f"Sample period of the controller: {exactly(goal.period, 's')} (not part of the proof).")
    parts += [element("h3", "Goal"), bullets(wanted)]
    return section("asked", "What was asked", *parts)


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
        add("state", state.name, state.unit, state.band, "band ±")
    for actuator in kind.inputs:
        add("actuator", actuator.name, actuator.unit, actuator.limit, "limit ±")
    for disturbance in kind.disturbances:
        add("disturbance", disturbance.name, disturbance.unit, disturbance.peak, "peak ±")
    for take in kind.takes:
        add("taken", take.name, take.unit, take.band, "band ±")
    for offer in kind.offers:
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
    ]
    if margin is not None and margin.bottleneck:
        shares = ", ".join(f"{name} {quantity(100 * share, count=2)} %" for name, share in margin.bottleneck)
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
    note = (
        "Upper bounds on the absolute value under the declared disturbances, starting from rest, at every time and for "
        "every unit. An actuator below its limit never saturates inside the declared envelope."
    )
    header = ("Kind", "Role", "Signal", "Peak at most", "Bound", "Share", "")
    return section("peaks", title, paragraph(note), table("Peaks", header, rows, numeric=(3, 4, 5)))


def constants_section(certificate: Certificate | None) -> Html:
    """C, alpha and G with the norm in words, and where the claim is valid."""
    title = "Constants of the guarantee"
    if certificate is None or certificate.constants is None:
        why = NOT_PROVEN_YET if certificate is None else "There are none: the claim was not proven."
        return section("constants", title, paragraph(why, cls="absent"))
    constants, valid = certificate.constants, certificate.validity
    rows: list[list[Child]] = [
        ["C", upper(constants.C), "how much an initial deviation may grow before it decays"],
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
    ]
    return section("constants", title, *parts)


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
