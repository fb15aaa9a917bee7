"""The sections of the report about what came after the proof: margin, simulation, bundle, cautions, provenance."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from synth.base.caution import CAUTIONS
from synth.base.provenance import versions
from synth.network.model import Network
from synth.report.figures import class_words, draw_margin, exact_words, proven_words
from synth.report.html import Child, Html, bullets, element, figure, lower, paragraph, table
from synth.report.sections import section

if TYPE_CHECKING:
    from synth.handoff import Bundle
    from synth.margin import Margin
    from synth.proof import Certificate

NO_MARGIN = "The margin was not computed: no margin was handed to this report."
NO_BUNDLE = "No bundle was written: hand-off was not run."


def margin_section(margin: Margin | None) -> Html:
    """How much stronger the links may get: proven, limit of the class, exact; then link by link."""
    title = "How much stronger the links may get"
    if margin is None:
        return section("margin", title, paragraph(NO_MARGIN, cls="absent"))
    which = "all links" if margin.classes is None else "links of class " + ", ".join(margin.classes)
    own = ""
    if margin.relative:
        own = "; own parts of relative links " + ("grow with them" if margin.own_parts else "stay as they are")
    rows: list[list[Child]] = [
        ["Proof", proven_words(margin), f"route {margin.route}; any delay, loss or sign within the class of links"],
        ["Class", class_words(margin), "from there some delays, losses and signs of that size do harm"],
        ["Network as declared", exact_words(margin), "every link exactly at its strength and delay"],
    ]
    if margin.within_limits_factor is not None:
        word = "certified" if margin.within_limits_certified else "computed, no certificate at that strength"
        rows.append(["Limits and bands", f"kept up to {lower(margin.within_limits_factor)}", word])
    parts: list[Child] = [
        paragraph(margin.sentence()),
        paragraph(f"Factors multiply the declared strengths of {which}{own}; 1 is the network as declared."),
        figure(draw_margin(margin), "Factors on the link strengths, from what is proven to where the network breaks."),
        table("Factors", ("Limit of", "Factor", "Meaning"), rows),
    ]
    if margin.links:
        tolerances = [
            [
                link.link,
                ("at least " if link.capped else "") + lower(link.tolerance),
                "not computed" if link.single is None else lower(link.single),
            ]
            for link in margin.links
        ]
        header = ("Link", "Its whole class", "One single copy")
        parts.append(table("Factor on one link, all others as declared", header, tolerances, numeric=(1, 2)))
    parts += [paragraph(f"Note: {note}") for note in margin.notes]
    return section("margin", title, *parts)


def bundle_section(bundle: Bundle | None) -> Html:
    """What was handed to the firmware team."""
    title = "Hand-off"
    if bundle is None:
        return section("handoff", title, paragraph(NO_BUNDLE, cls="absent"))
    flashed = "yes" if bundle.proven else "no"
    return section(
        "handoff",
        title,
        paragraph(
            f"The bundle holds {len(bundle.rows)} gains in {len(bundle.files)} files. Proven for the continuous loop: "
            f"{'yes' if bundle.proven_continuous else 'no'}. Proven as flashed: {flashed}. {bundle.reason}"
        ),
        bullets(element("code", name) for name in bundle.files),
    )


def caution_section() -> Html:
    """The cautions that travel with every output."""
    return section("cautions", "Cautions", bullets(CAUTIONS))


def provenance_section(
    network: Network,
    results: Sequence[tuple[str, Any]],
    certificate: Certificate | None,
    bundle: Bundle | None = None,
    flashed: Certificate | None = None,
) -> Html:
    """Hashes and versions, what was and was not run, and how to verify."""
    rows: list[list[Child]] = [["Network", element("code", network.hash)]]
    if certificate is not None:
        rows.append(["Certificate", element("code", str(certificate.hash))])
    if flashed is not None and flashed.proven:
        rows.append(["Certificate of the code as flashed", element("code", str(flashed.hash))])
    rows += [[name, version] for name, version in sorted(versions().items())]
    ran = [f"{name}: {'in this report' if result is not None else 'not run'}" for name, result in results]
    verify: list[Child] = [
        *_proof_checks(bundle, certificate),
        join_code("The files of the bundle: ", "sha256sum -c SHA256SUMS", "."),
        "The network: the hash above is that of the exact matrices, links and bounds, however the file was written.",
    ]
    if certificate is None:
        verify = ["There is no certificate to verify yet."]
    return section(
        "provenance",
        "Provenance and how to verify",
        table("What this report is about", ("Item", "SHA-256 or version"), rows),
        element("h3", "Stages"),
        bullets(ran),
        element("h3", "How to verify"),
        bullets(verify),
    )


def _proof_checks(bundle: Bundle | None, certificate: Certificate | None) -> list[Child]:
    """The commands that check the proofs; a bundle of the firmware route has that proof under the plain name."""
    firmware = (bundle is not None and bundle.proven) or (certificate is not None and certificate.route == "firmware")
    where = " in the bundle." if bundle is not None else ", with the checker that a bundle carries."
    if not firmware:
        return [join_code("The proof, with a bare Python: ", "python3 check.py certificate.json", where)]
    found: list[Child] = [
        join_code("The proof as flashed, with a bare Python: ", "python3 check_firmware.py certificate.json", where)
    ]
    if bundle is not None and "certificate_continuous.json" in bundle.files:
        command = "python3 check.py certificate_continuous.json"
        found.append(join_code("The proof about the continuous loop: ", command, where))
    return found


def join_code(before: str, code: str, after: str) -> Html:
    """A sentence with a command in it."""
    return element("span", before, element("code", code), after)
