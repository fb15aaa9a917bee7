"""The report of a hop claim: what is claimed and what is not, hop by hop, growth, gaps, manoeuvres, hand-off."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

from synth.base.caution import CAUTIONS
from synth.base.files import write_text
from synth.base.provenance import sha256
from synth.gain.strings.hop import MEANING
from synth.gain.strings.hop_length import HopGrowth
from synth.network.model import Network
from synth.report.hop_picture import string_picture
from synth.report.html import (
    Child,
    Html,
    bullets,
    element,
    enclosure,
    figure,
    join,
    lower,
    paragraph,
    quantity,
    table,
    upper,
)
from synth.report.outcomes import caution_section
from synth.report.page import Report, document
from synth.report.sections import gains_section, section

if TYPE_CHECKING:
    from synth.handoff.hop_bundle import HopBundle
    from synth.margin.hop_finding import HopMargin
    from synth.proof.hop_statement import HopStatement
    from synth.simulate.manoeuvres import HopTrajectory

NOT_CALM = "This report is about a hop claim, which is weaker than a proof that the whole stays calm."


def write_hop_report(
    path: str | Path,
    network: Network,
    gains: Any,
    statement: HopStatement,
    growth: HopGrowth | None = None,
    margin: HopMargin | None = None,
    trajectory: HopTrajectory | None = None,
    bundle: HopBundle | None = None,
) -> Report:
    """Write the report to ``path``: one HTML file without scripts and without anything to fetch.

    A stage that is None is said not to have run. Raises StorageFailure if the disk refuses.
    """
    parts = [
        _claim(statement),
        gains_section(network, gains, None),
        _hops(statement),
        _growth(growth),
        _gaps(margin),
        _manoeuvres(trajectory),
        _bundle(bundle),
        caution_section(),
    ]
    header = element(
        "header",
        paragraph("Local feedback gains with a hop claim"),
        element("h1", network.title),
        paragraph(NOT_CALM),
        paragraph(statement.sentence),
        paragraph(CAUTIONS[0], cls="quiet"),
    )
    text = document(network.title, join([header, element("main", *parts)]))
    write_text(path, text)
    return Report(Path(path), sha256(text))


def _claim(statement: HopStatement) -> Html:
    rows: list[list[Child]] = [
        [name, said, "this one holds" if name == statement.claim else ""] for name, said in MEANING.items()
    ]
    parts: list[Child] = [
        table("Claims, from the strongest, and what each means for a driver", ("Claim", "Meaning", ""), rows),
        paragraph(f"Asked for: {statement.notion}. Proven: {'yes' if statement.proven else 'no'}."),
        *(paragraph(f"Not proven: {reason}.") for reason in statement.reasons),
        element("h3", "Covered"),
        bullets(statement.covers),
        element("h3", "Not covered"),
        bullets(statement.as_json()["excludes"]),
        paragraph(str(statement.as_json()["rechecked"])),
    ]
    return section("claim", "What is claimed", *parts)


def _hops(statement: HopStatement) -> Html:
    if statement.hops is None:
        return section("hops", "Hop by hop", paragraph("A unit is unstable by itself, so there are no hop gains."))
    rows: list[list[Child]] = []
    for hop in statement.hops.hops:
        sign = {None: "not decided", 0: "no"}.get(hop.one_sign.sign, "yes, proven")
        error = "" if hop.gap_error is None else upper(hop.gap_error.upper)
        gap = quantity(float(statement.time_gaps[hop.kind]), "s")
        rows.append(
            [
                f"{hop.kind} behind {hop.after}",
                enclosure(hop.peak.lower, hop.peak.upper),
                enclosure(hop.mean_square.lower, hop.mean_square.upper),
                sign,
                error,
                gap,
            ]
        )
    header = ("Hop", "Peak hop gain", "Mean-square hop gain", "One sign", "Gap error per leader's rate", "Time gap")
    parts: list[Child] = [table("Hop gains, enclosed", header, rows, numeric=(1, 2, 4, 5))]
    if statement.bounds:
        bounds: list[list[Child]] = [
            [b.kind, b.what, upper(b.value, b.unit), "" if b.limit is None else quantity(b.limit, b.unit)]
            for b in statement.bounds
        ]
        caption = "Under the declared leader, of every follower however far back"
        parts.append(table(caption, ("Kind", "Of its", "At most", "Limit"), bounds, numeric=(2, 3)))
    return section("hops", "Hop by hop", *parts)


def _growth(growth: HopGrowth | None) -> Html:
    title = "What adds up along the string"
    if growth is None:
        return section(
            "growth", title, paragraph("Not worked out: a unit is unstable, or the kinds share no disturbance.")
        )
    rows: list[list[Child]] = []
    for k in sorted({*(10**i for i in range(6) if 10**i <= growth.vehicles[-1]), int(growth.vehicles[-1])}):
        hop, gap, pushed = growth.at(k)
        rows.append([str(k), quantity(hop), "" if math.isnan(gap) else quantity(gap), quantity(pushed), ""])
    rows += [[str(k), "", "", quantity(value), f"extrapolated with {growth.law}"] for k, value in growth.extrapolated]
    header = ("Vehicle", "Leader's peak times", "Gap error per rate", f"Pushes ({growth.name}) on all before it", "")
    said = (
        "Estimates by fast transforms, in the order of the cell, with a relative error of about "
        f"{growth.error:.1g}; no part of any claim. The last column is the peak of the signal per unit of a push that "
        "acts on every vehicle."
    )
    return section("growth", title, paragraph(said), table("Growth with length", header, rows, numeric=(0, 1, 2, 3)))


def _gaps(margin: HopMargin | None) -> Html:
    title = "The smallest time gap"
    if margin is None:
        return section("margin", title, paragraph("Not worked out.", cls="absent"))
    parts: list[Child] = []
    found = margin.as_json()
    if margin.gaps:
        rows: list[list[Child]] = [
            [
                name,
                quantity(float(margin.declared[name]), "s"),
                "none found" if gap.proven is None else upper(float(gap.proven), "s"),
                "none found" if gap.breaks is None else lower(float(gap.breaks), "s"),
            ]
            for name, gap in margin.gaps.items()
        ]
        parts.append(
            table("With the gains as they are", ("Kind", "Declared", "Proven at", "Fails at"), rows, (1, 2, 3))
        )
    if margin.table:
        moved: list[list[Child]] = [
            [
                f"{row['what']} {row['value']}".strip(),
                "none" if row["proven"] is None else upper(row["proven"], "s"),
                "none found" if row["breaks"] is None else lower(row["breaks"], "s"),
            ]
            for row in found["table"]
        ]
        caption = f"How it moves for a {margin.worst}"
        parts.append(table(caption, ("Changed", "Proven at", "Fails at"), moved, numeric=(1, 2)))
    said = margin.no_share if margin.shares is None else margin.shares.as_text()
    parts += [element("h3", "From hop to proof"), *(paragraph(line.strip()) for line in said.strip().splitlines())]
    return section("margin", title, *parts)


def _manoeuvres(trajectory: HopTrajectory | None) -> Html:
    title = "Manoeuvres of the leader, simulated"
    if trajectory is None:
        return section("simulation", title, paragraph("No simulation was run.", cls="absent"))
    rows: list[list[Child]] = [
        [
            run.name,
            "" if run.collisions is None else str(run.collisions),
            "" if run.closest is None else quantity(run.closest),
            quantity(max(run.ratios.values()), count=3) if run.ratios else "",
            str(run.violations) if trajectory.compared else "",
            "yes" if run.met else "no",
        ]
        for run in trajectory.runs
    ]
    header = ("Manoeuvre", "Collisions", "Smallest gap", "Largest part of a bound", "Above a bound", "A limit was met")
    parts: list[Child] = [
        table(f"{trajectory.units} vehicles, {trajectory.duration:g} s each", header, rows, numeric=(1, 2, 3, 4)),
        *([paragraph(trajectory.why)] if trajectory.why else []),
        paragraph("A simulation supports a claim, it never is one; it is no test of safety."),
        figure(
            string_picture(trajectory, trajectory.runs[0]),
            f"{trajectory.runs[0].name}: the signal and the gaps of the vehicles over time.",
        ),
    ]
    return section("simulation", title, *parts)


def _bundle(bundle: HopBundle | None) -> Html:
    if bundle is None:
        text = "No bundle was written: the hop claim asked for is not proven."
        return section("handoff", "Hand-off", paragraph(text, cls="absent"))
    return section("handoff", "Hand-off", *(paragraph(line) for line in bundle.as_text().splitlines()[1:]))
