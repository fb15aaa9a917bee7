"""The section of the report about the code as flashed: a proof of its own, with its own peaks, beside the loop's."""

from __future__ import annotations

from typing import TYPE_CHECKING

from synth.network.model import Network
from synth.report.html import (
    Child,
    Html,
    bullets,
    element,
    enclosure,
    exactly,
    lower,
    paragraph,
    quantity,
    table,
    upper,
)
from synth.report.sections import section

if TYPE_CHECKING:
    from synth.handoff import Bundle
    from synth.proof import Certificate

TITLE = "The code as flashed"
NOT_TRIED = (
    "Nothing was proven about the code as flashed: no certificate of sampled code was handed to this report. The rest "
    "of it is about controllers that act at every instant."
)


def flashed_section(network: Network, flashed: Certificate | None, bundle: Bundle | None) -> Html:
    """The claim about the sampled code, its radius, peaks and constants; or that there is none, and why."""
    if flashed is None:
        proven = bundle is not None and bundle.proven
        text = f"The bundle carries a proof as flashed: {bundle.reason}" if proven and bundle is not None else NOT_TRIED
        return section("flashed", TITLE, paragraph(text, cls="absent"))
    if not flashed.proven:
        why = " ".join(flashed.reasons) or "No reason was recorded."
        return section("flashed", TITLE, paragraph(element("strong", "Not proven. "), why, cls="verdict no"))
    goal = network.goal
    period = "" if goal.period is None else (
        f" The period is {exactly(goal.period, 's')}, the computation delay {exactly(goal.computation_delay, 's')}."
    )  # fmt: skip
    parts: list[Child] = [
        paragraph(
            "This proof is about what runs: signals sampled once a period by every unit's own clock, commands held in "
            f"between, numbers rounded as stated.{period} The radius is {_radius(flashed)}. Where a peak here is "
            "larger than that of the continuous loop, this one counts for what is flashed."
        ),
        _peaks(flashed),
        _constants(flashed),
        paragraph(element("strong", "Claim: "), flashed.claim),
        element("h3", "Covered"),
        bullets(flashed.covers or ("Nothing.",)),
        element("h3", "Not covered"),
        bullets(flashed.excludes or ("Nothing was listed.",)),
    ]
    return section("flashed", TITLE, *parts)


def _radius(flashed: Certificate) -> str:
    return enclosure(flashed.radius.lower, flashed.radius.upper)


def _peaks(flashed: Certificate) -> Html:
    rows: list[list[Child]] = []
    for peak in flashed.peaks:
        bound = None if peak.limit is None else float(peak.limit)
        against = "no bound declared" if bound is None else quantity(bound, peak.unit)
        share = f"{upper(100 * float(peak.value) / bound, count=3)} %" if bound else ""
        rows.append([peak.kind, peak.role, peak.signal, upper(peak.value, peak.unit), against, share])
    header = ("Kind", "Role", "Signal", "Peak at most", "Bound", "Share")
    return table("Guaranteed peaks as flashed, from rest", header, rows, numeric=(3, 4, 5))


def _constants(flashed: Certificate) -> Html | None:
    constants, valid = flashed.constants, flashed.validity
    if constants is None:
        return None
    words = f"Constants: C {upper(constants.C)}, α {lower(constants.alpha, '1/s')}, G {upper(constants.G)}"
    if valid is not None:
        words += f"; every limit and band is kept from an initial size X₀ of up to {lower(valid.X0)}"
        words += f", or from rest under disturbances of up to {lower(valid.w)}"
    return paragraph(f"{words}. They are explained in the section on the continuous loop.")
