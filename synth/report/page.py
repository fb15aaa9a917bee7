"""Put the sections together and write the page."""

from __future__ import annotations

from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING

from synth.base.caution import CAUTIONS
from synth.base.files import write_text
from synth.base.provenance import sha256
from synth.network.gains import Gains
from synth.network.model import Network
from synth.report.flashed_section import flashed_section
from synth.report.html import Html, element, join, paragraph
from synth.report.outcomes import bundle_section, caution_section, margin_section, provenance_section
from synth.report.response import response_section
from synth.report.sections import (
    asked,
    constants_section,
    gains_section,
    peaks_section,
    radius_section,
    scope_section,
    verdict,
)

if TYPE_CHECKING:
    from synth.handoff import Bundle
    from synth.local import Design
    from synth.margin import Margin
    from synth.proof import Certificate
    from synth.simulate import Trajectory

# Nothing may be fetched and nothing may run, whatever a browser would otherwise allow.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:"

_CONTENTS = (
    ("asked", "What was asked"),
    ("gains", "Gains"),
    ("radius", "Radius of the gain operator"),
    ("margin", "How much stronger the links may get"),
    ("peaks", "Guaranteed peaks"),
    ("response", "Response in simulation"),
    ("constants", "Constants of the guarantee"),
    ("scope", "What the proof covers, and what it does not"),
    ("flashed", "The code as flashed"),
    ("handoff", "Hand-off"),
    ("cautions", "Cautions"),
    ("provenance", "Provenance and how to verify"),
)


@dataclass(frozen=True)
class Report:
    """A written report: where it is, and the SHA-256 of its bytes."""

    path: Path
    sha256: str

    def as_json(self) -> dict[str, object]:
        """Plain data."""
        return {"report": str(self.path), "sha256": self.sha256, "cautions": list(CAUTIONS)}

    def as_text(self) -> str:
        """One line for a terminal."""
        return f"Report {self.path} (opens offline, prints on A4)."


def write_report(
    path: str | Path,
    network: Network,
    design: Design | Gains | None = None,
    certificate: Certificate | None = None,
    margin: Margin | None = None,
    trajectory: Trajectory | None = None,
    bundle: Bundle | None = None,
    flashed: Certificate | None = None,
) -> Report:
    """Write the report to ``path``: one HTML file without scripts and without anything to fetch.

    Each result may be None; the report then says that the stage was not run. ``design`` may be a table of gains in
    service; ``flashed`` is the certificate of the sampled code where one was tried. Equal inputs give equal bytes.
    Raises StorageFailure if the disk refuses.
    """
    text = page(network, design, certificate, margin, trajectory, bundle, flashed)
    write_text(path, text)
    return Report(Path(path), sha256(text))


def page(
    network: Network,
    design: Design | Gains | None = None,
    certificate: Certificate | None = None,
    margin: Margin | None = None,
    trajectory: Trajectory | None = None,
    bundle: Bundle | None = None,
    flashed: Certificate | None = None,
) -> str:
    """The text of the report (see ``write_report``)."""
    gains = design if isinstance(design, Gains) or design is None else design.gains
    searched = None if isinstance(design, Gains) else design
    stages = (
        ("Design", design),
        ("Proof", certificate),
        ("Proof as flashed", flashed),
        ("Margin", margin),
        ("Simulation", trajectory),
        ("Hand-off", bundle),
    )
    main = element(
        "main",
        asked(network),
        gains_section(network, gains, searched),
        radius_section(certificate, margin),
        margin_section(margin),
        peaks_section(network, certificate),
        response_section(trajectory),
        constants_section(network, certificate),
        scope_section(certificate),
        flashed_section(network, flashed, bundle),
        bundle_section(bundle),
        caution_section(),
        provenance_section(network, stages, certificate, bundle, flashed),
    )
    header = element(
        "header",
        paragraph("Local feedback gains with proof"),
        element("h1", network.title),
        verdict(network, certificate, flashed),
        paragraph(CAUTIONS[0], " ", element("a", "All cautions", href="#cautions"), ".", cls="quiet"),
        _contents(),
    )
    return document(network.title, join([header, main]))


def _contents() -> Html:
    """Links to the sections."""
    items = (element("li", element("a", title, href=f"#{anchor}")) for anchor, title in _CONTENTS)
    return element("nav", element("ol", *items), aria_label="Contents")


def document(title: str, body: Html) -> str:
    """The whole HTML file around the body."""
    style = resources.files("synth.report").joinpath("page.css").read_text(encoding="utf-8")
    head = join(
        [
            Html('<meta charset="utf-8">\n'),
            Html(f'<meta http-equiv="Content-Security-Policy" content="{_POLICY}">\n'),
            Html('<meta name="viewport" content="width=device-width, initial-scale=1">\n'),
            element("title", f"{title}: report"),
            Html(f"\n<style>\n{style}</style>\n"),
        ]
    )
    return f'<!DOCTYPE html>\n<html lang="en">\n<head>\n{head}</head>\n<body>\n{body}\n</body>\n</html>\n'
