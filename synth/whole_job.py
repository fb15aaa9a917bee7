"""The whole job in one call: check, design, prove, margin, simulate, hand off, report, into one whole folder."""

from __future__ import annotations

import json
import textwrap
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, cast

from synth.base.caution import cautions_text
from synth.base.errors import InputError, SynthError
from synth.base.files import whole_folder
from synth.base.progress import Listener, silent
from synth.network.gains import Gains
from synth.network.model import Network


@dataclass(frozen=True)
class WholeJob:
    """What `synth run` found: the JSON document of the contract, the text for a person, and whether it is proven."""

    document: Mapping[str, Any]
    text: str
    proven: bool
    folder: Path


def plain_json(value: object) -> str:
    """Two-space JSON that ends with a newline; NaN is refused, infinity must already be the text 'inf'."""
    return json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _hop_job(
    network: Network, out: str | Path, gains: Gains | None, target: float | None, seed: int, progress: Listener
) -> WholeJob:
    """The same for a file that asks for a hop claim."""
    from synth.hop_job import run_hop_job

    if target is not None:
        raise InputError("a hop claim has no radius and so no target; leave the target out.")
    return cast("WholeJob", run_hop_job(network, out, gains=gains, seed=seed, progress=progress))


def run_whole_job(
    network: Network,
    out: str | Path,
    *,
    gains: Gains | None = None,
    target: float | None = None,
    seed: int = 0,
    progress: Listener = silent,
) -> WholeJob:
    """Run every stage on ``network`` and leave the results in ``out``, which appears whole or not at all.

    ``gains`` skips the design and proves gains already in service. ``target`` replaces the file's target, ``seed``
    (an integer) fixes the searches and random scenarios. Raises what the stages raise (InputError, ObstructionFound,
    SolverFailure, StorageFailure); then nothing is written and what stood at ``out`` before stands untouched.
    """
    if network.goal.hop is not None:
        return _hop_job(network, out, gains, target, seed, progress)
    from synth.local import design as make_design
    from synth.margin import margin as find_margin
    from synth.network import describe
    from synth.proof import prove
    from synth.report import write_report
    from synth.simulate import simulate as run_simulation

    final = Path(out)
    with whole_folder(final, "run") as work:
        progress("checking the network")
        described = describe(network)
        chosen = None
        if gains is None:
            progress("searching gains")
            chosen = make_design(network, target=target, seed=seed, progress=progress)
        used: Any = chosen if chosen is not None else gains
        progress("proving")
        certificate = prove(network, used, target=target, progress=progress)
        if certificate.proven:
            certificate.save(work / "certificate.json")
        flashed = _flashed(network, used, target, progress, work)
        limits = trajectory = bundle = None
        refusals: dict[str, str] = {}
        progress("finding the largest tolerable coupling")
        try:
            limits = find_margin(network, used, progress=progress)
        except SynthError as error:
            refusals["margin"] = str(error)
        progress("simulating, with an adversary that tries to break the bounds")
        try:
            trajectory = run_simulation(network, used, certificate, seed=seed, progress=progress)
        except SynthError as error:
            refusals["simulation"] = str(error)
        if certificate.proven or (flashed is not None and flashed.proven):
            progress("writing the hand-off bundle")
            bundle = bundle_of(network, used, certificate, flashed, work / "bundle")
        else:
            refusals["handoff"] = "not proven, so no bundle was written: an unproven table must not reach firmware."
        progress("writing the report")
        sampled = None if flashed is None else flashed.certificate
        write_report(work / "report.html", network, chosen, certificate, limits, trajectory, bundle, sampled)
        document = _document(
            described, chosen, gains, certificate, flashed, limits, trajectory, bundle, refusals, final
        )
        (work / "result.json").write_text(plain_json(document), encoding="utf-8")
        text = _text(described, chosen, certificate, flashed, limits, trajectory, bundle, refusals, final, work)
        (work / "summary.txt").write_text(wrapped(f"{text}\nCautions\n--------\n{cautions_text()}\n"), encoding="utf-8")
    # A network that the firmware route cannot take is judged by the continuous loop; the text says so.
    failed = flashed is not None and flashed.takes and not flashed.proven
    return WholeJob(document, text, certificate.proven and not failed, final)


def _flashed(network: Network, used: Any, target: float | None, progress: Listener, work: Path) -> Any:
    """The verdict about the code where a sample period is declared, its certificate kept; None where none is."""
    if network.goal.period is None:
        return None
    from synth.proof.firmware_limits import prove_as_flashed

    found = prove_as_flashed(network, used, target=target, progress=progress)
    if found.proven and found.certificate is not None:
        found.certificate.save(work / "certificate_as_flashed.json")
    return found


def bundle_of(network: Network, used: Any, certificate: Any, flashed: Any, out: Path) -> Any:
    """The bundle with the strongest proof there is: as flashed and continuous, or the continuous one and why no more.

    ``certificate`` is about the continuous loop, ``flashed`` the verdict about the code (None where not asked for).
    Raises what hand_off raises.
    """
    from synth.handoff import hand_off

    if flashed is None or not flashed.proven:
        return hand_off(network, used, certificate, out, unproven="" if flashed is None else flashed.reason)
    beside = certificate if certificate.proven else None
    return hand_off(network, used, flashed.certificate, out, continuous=beside, timing=flashed.timing)


def _document(
    described: Any,
    chosen: Any,
    gains: Gains | None,
    certificate: Any,
    flashed: Any,
    limits: Any,
    trajectory: Any,
    bundle: Any,
    refusals: Mapping[str, str],
    final: Path,
) -> dict[str, Any]:
    """The JSON of `run`: one key per stage, each as its own verb prints it; a stage that did not run says why."""

    def stage(result: Any, name: str) -> Any:
        return result.as_json() if result is not None else {"not_run": refusals.get(name, "not asked for")}

    designed = chosen.as_json() if chosen is not None else None
    if designed is None and gains is not None:
        designed = {"gains": {kind: gains[kind].as_dict() for kind in gains}, "in_service": True}
    kept = str(final / "certificate.json") if certificate.proven else None
    proof = {**certificate.as_json(), "certificate": kept}
    handed = stage(bundle, "handoff")
    if bundle is not None:
        handed["bundle"] = str(final / "bundle")
    else:
        handed = {"bundle": None, "files": [], "proven": False, "scaling": {}, **handed}
    return {
        "network": described.as_json(),
        "design": designed,
        "proof": proof,
        "as_flashed": {"not_run": "no sample period is declared"} if flashed is None else flashed.as_json(),
        "margin": stage(limits, "margin"),
        "simulation": stage(trajectory, "simulation"),
        "handoff": handed,
        "report": str(final / "report.html"),
    }


def _text(
    described: Any,
    chosen: Any,
    certificate: Any,
    flashed: Any,
    limits: Any,
    trajectory: Any,
    bundle: Any,
    refusals: Mapping[str, str],
    final: Path,
    work: Path,
) -> str:
    """What `run` prints for a person: each stage's own text under a heading, then where the files are."""
    parts = [("Network", described), ("Gains", chosen), ("Proof", certificate), ("Margin", limits)]
    if flashed is not None:
        parts.insert(3, ("As flashed", flashed))
    parts += [("Simulation", trajectory), ("Hand-off", bundle)]
    names = {"Margin": "margin", "Simulation": "simulation", "Hand-off": "handoff"}
    lines: list[str] = []
    for title, result in parts:
        if result is None and title not in names:
            continue
        body = result.as_text() if result is not None else f"not run: {refusals.get(names[title], '')}"
        # Every stage's own text carries the cautions for those who print it alone; here they stand once, at the end.
        body = body.replace(cautions_text(), "").replace(str(work), str(final)).rstrip()
        lines += [title, "-" * len(title), body, ""]
    lines += ["Files", "-----", f"everything is in {final} (open report.html first)", ""]
    return "\n".join(lines) + "\n"


def wrapped(text: str, width: int = 100) -> str:
    """The text with over-long lines broken at spaces; continuation lines keep the indentation of their line."""
    lines: list[str] = []
    for line in text.splitlines():
        indent = " " * (len(line) - len(line.lstrip()) + 2)
        broken = textwrap.wrap(line, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False)
        lines += broken or [""]
    return "\n".join(lines) + "\n"
