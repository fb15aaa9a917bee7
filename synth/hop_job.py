"""The whole job for a string that sees only gaps: a hop claim instead of a proof, because the file asks for it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from synth.base.caution import cautions_text
from synth.base.errors import InputError, SynthError
from synth.base.files import whole_folder
from synth.base.progress import Listener, silent
from synth.network.gains import Gains
from synth.network.model import Network

_GROWTH = 1000


def design_hop(network: Network, seed: int = 0, progress: Listener = silent) -> Any:
    """Gains as the section ``hop`` asks for them; a ``HopDesign``.

    Where the time gap is a parameter of the file, gains do not change it; the least gap error (or effort, without one)
    is then sought instead of the least time gap.
    """
    from synth.local.hop_designing import hop_design
    from synth.proof.hop_statement import wish_of

    wish = wish_of(network)
    least = wish.least
    if least == "time gap" and wish.gap_parameter is not None:
        least = "effort" if wish.gap_error is None else "gap error"
    return hop_design(
        network,
        wish.notion,
        wish.dead_time,
        wish.sensing,
        wish.most_jerk,
        seed,
        least=least,
        most_gap=wish.time_gap,
        gap_error=wish.gap_error,
        progress=progress,
    )


def growth_of(statement: Any, vehicles: int = _GROWTH) -> Any:
    """Growth with length of what was proven, or None where it cannot be worked out."""
    from synth.gain.strings.hop_length import hop_growth

    if statement.hops is None:
        return None
    try:
        return hop_growth(statement.hops, vehicles)
    except InputError:
        return None


def run_hop_job(
    network: Network, out: str | Path, *, gains: Gains | None = None, seed: int = 0, progress: Listener = silent
) -> Any:
    """Run every stage and leave the results in ``out``, which appears whole or not at all; a ``WholeJob``.

    ``gains`` skips the design. Law: ``proven`` is True only if the hop claim the file asks for holds, no simulated
    vehicle passes its bound and none touches another.
    """
    from synth.handoff.hop_bundle import hand_off_hop
    from synth.margin.hop_finding import hop_margin
    from synth.network import describe
    from synth.proof.hop_statement import prove_hop
    from synth.report.hop_picture import string_picture
    from synth.report.hop_section import write_hop_report
    from synth.simulate.manoeuvres import run_manoeuvres
    from synth.whole_job import WholeJob, plain_json, wrapped

    final = Path(out)
    with whole_folder(final, "run") as work:
        progress("checking the network")
        described = describe(network)
        chosen: Any = design_hop(network, seed, progress) if gains is None else None
        used: Gains = chosen.gains if gains is None else gains
        statement = prove_hop(network, used, progress)
        if statement.proven:
            statement.save(work / "hop_statement.json")
        found: dict[str, Any] = {}
        refusals: dict[str, str] = {}
        stages: dict[str, Callable[[], Any]] = {
            "margin": lambda: hop_margin(network, used, progress=progress),
            "simulation": lambda: run_manoeuvres(network, used, statement, seed=seed, progress=progress),
        }
        for name, stage in stages.items():
            try:
                found[name] = stage()
            except SynthError as error:
                refusals[name] = str(error)
        if statement.proven:
            progress("writing the hand-off bundle")
            found["handoff"] = hand_off_hop(network, used, statement, work / "bundle", seed, progress)
        else:
            refusals["handoff"] = "the hop claim asked for is not proven, so no bundle was written."
        progress("writing the report")
        growth = growth_of(statement)
        limits, trajectory, bundle = (found.get(name) for name in ("margin", "simulation", "handoff"))
        write_hop_report(work / "report.html", network, used, statement, growth, limits, trajectory, bundle)
        if trajectory is not None:
            (work / "string.svg").write_text(string_picture(trajectory, trajectory.runs[0]), encoding="utf-8")
        document: dict[str, Any] = {
            "network": described.as_json(),
            "design": _designed(chosen, used),
            "proof": statement.as_json(),
            **{
                name: found[name].as_json() if name in found else {"not_run": refusals[name]}
                for name in ("margin", "simulation", "handoff")
            },
            "report": str(final / "report.html"),
        }
        if bundle is not None:
            document["handoff"]["bundle"] = str(final / "bundle")
        text = _text(described, chosen, statement, growth, found, refusals).replace(str(work), str(final))
        text += f"Files\n-----\neverything is in {final} (open report.html first)\n"
        (work / "result.json").write_text(plain_json(document), encoding="utf-8")
        (work / "summary.txt").write_text(wrapped(f"{text}\nCautions\n--------\n{cautions_text()}\n"), encoding="utf-8")
    clean = trajectory is None or not (trajectory.violations or trajectory.collisions)
    return WholeJob(document, text, statement.proven and clean, final)


def _designed(chosen: Any, used: Gains) -> dict[str, Any]:
    """The design's document, or the gains in service."""
    if chosen is not None:
        return {**chosen.as_json(), "target": None, "radius": None, "blocking": None}
    return {"gains": {kind: used[kind].as_dict() for kind in used}, "in_service": True}


def _text(
    described: Any,
    chosen: Any,
    statement: Any,
    growth: Any,
    found: Mapping[str, Any],
    refusals: Mapping[str, str],
) -> str:
    parts: list[tuple[str, str]] = [("Network", described.as_text())]
    if chosen is not None:
        parts.append(("Gains", chosen.as_text()))
    parts.append(("Hop claim", statement.as_text()))
    if growth is not None:
        parts.append(("Growth with length", growth.as_text()))
    for title, name in (("Smallest time gap", "margin"), ("Simulation", "simulation"), ("Hand-off", "handoff")):
        parts.append((title, found[name].as_text() if name in found else f"not run: {refusals[name]}"))
    lines: list[str] = []
    for title, body in parts:
        lines += [title, "-" * len(title), body.replace(cautions_text(), "").rstrip(), ""]
    return "\n".join(lines) + "\n"
