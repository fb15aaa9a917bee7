"""The verbs on a problem file that asks for a hop claim; the same options, files and exit codes as for a proof.

Exit code 0: the notion asked for holds. It never says that the whole stays calm.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from synth.base.errors import InputError
from synth.cli_parts import deliver, leave, listener

if TYPE_CHECKING:
    from synth.network.model import Network

_ASKED = (
    "A hop claim is asked for (notion: {notion}): that what a leader does is not amplified from unit to unit. It is "
    "weaker than a proof that the whole stays calm. `synth design`, `prove`, `margin`, `simulate`, `handoff` and `run` "
    "work on it."
)


def gains_for(network: Network, gains: Path | None, seed: int, quiet: bool) -> Any:
    """Gains in service, or freshly designed ones."""
    if gains is not None:
        from synth.network import read_gains

        return read_gains(gains, network)
    from synth.hop_job import design_hop

    return design_hop(network, seed, listener(quiet))


def refuse_target(target: float | None, route: str = "auto") -> None:
    """Options that belong to proofs of calm."""
    if target is not None:
        raise InputError("--target: a hop claim has no radius and so no target; leave the option out.")
    if route != "auto":
        raise InputError(
            f"--route {route}: the file asks for a hop claim, which has its own route; leave the option out."
        )


def refuse_couplings(classes: tuple[str, ...], fixed_own_parts: bool, redesign: bool) -> None:
    """Options of a margin of coupling; a hop claim has a smallest time gap instead."""
    if classes or fixed_own_parts or redesign:
        raise InputError(
            "--class, --fixed-own-parts and --redesign are about how strong links may get; a hop claim has a smallest "
            "time gap instead, so leave them out."
        )


def refuse_joining(*networks: Network) -> None:
    """A unit joins under a proof of calm; for hop claims that is not offered."""
    if any(network.goal.hop is not None for network in networks):
        raise InputError(
            "a file asks for a hop claim, and admitting a unit is about proofs of calm; add the kind to the file and "
            "let `synth prove` decide the claim for any order."
        )


def check(network: Network, as_json: bool, out: Path | None) -> NoReturn:
    """Explain the network, its obstruction, and what is asked for; exit 0 if the network is a string."""
    from synth.gain.strings.hop_network import hop_loops
    from synth.local.hop_task import HopTask
    from synth.network import describe
    from synth.proof.hop_statement import wish_of

    wish = wish_of(network)
    task = HopTask(network, wish.notion)
    zero = {kind.name: task.start(kind) for kind in network.cell_kinds}
    signal, hops = hop_loops(
        network, task.gains(zero), wish.gap_error, wish.dead_time, dict(wish.sensing), wish.any_order
    )
    if signal != wish.signal:
        raise InputError(
            f"design.hop.signal: the signal that comes down this string is {signal!r}, not {wish.signal!r}."
        )
    described = describe(network)
    asked = _ASKED.format(notion=wish.notion)
    pairs = ", ".join(f"{hop.kind} behind {hop.after}" for hop in hops)
    document = {
        **described.as_json(),
        "hop": {"asked": wish.document(), "signal": signal, "hops": [[hop.kind, hop.after] for hop in hops]},
    }
    files: dict[str, Any] = {"check.json": document}
    if out is not None:
        from synth.report.picture import network_picture

        files["network.svg"] = network_picture(network)
    text = f"{described.as_text().rstrip()}\n\nHop claim\n{asked}\nHops to be proven: {pairs}.\n"
    deliver(document, text, as_json, out, files)
    leave(True)


def design(network: Network, seed: int, as_json: bool, out: Path | None, quiet: bool) -> NoReturn:
    """Gains with the hop claim proven."""
    from synth.handoff.table import csv_text, gain_rows

    chosen = gains_for(network, None, seed, quiet)
    document = chosen.as_json()
    files = {"design.json": document, "gains.csv": csv_text(gain_rows(network, chosen.gains))}
    deliver(document, chosen.as_text(), as_json, out, files)
    leave(chosen.reached)


def prove(network: Network, gains: Path | None, seed: int, as_json: bool, out: Path | None, quiet: bool) -> NoReturn:
    """Decide the hop claim, and how pushes add up."""
    from synth.hop_job import growth_of
    from synth.proof.hop_statement import prove_hop

    statement = prove_hop(network, gains_for(network, gains, seed, quiet), listener(quiet))
    growth = growth_of(statement)
    document = statement.as_json()
    text = statement.as_text() + ("" if growth is None else growth.as_text())

    def save(work: Path) -> None:
        if statement.proven:
            statement.save(work / "hop_statement.json")

    deliver(document, text, as_json, out, {"proof.json": document}, save)
    leave(statement.proven)


def margin(network: Network, gains: Path | None, seed: int, as_json: bool, out: Path | None, quiet: bool) -> NoReturn:
    """The smallest time gap, and the way to a proof."""
    from synth.margin.hop_finding import hop_margin

    found = hop_margin(network, gains_for(network, gains, seed, quiet), progress=listener(quiet))
    document = found.as_json()
    deliver(document, found.as_text(), as_json, out, {"margin.json": document})
    leave(found.holds is True)


def simulate(
    network: Network,
    gains: Path | None,
    units: int | None,
    seconds: float | None,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
) -> NoReturn:
    """Manoeuvres of a leader; exit 0 if the claim holds, nothing passed a bound and no vehicle touched another."""
    from synth.proof.hop_statement import prove_hop
    from synth.report.hop_picture import string_picture
    from synth.simulate.manoeuvres import run_manoeuvres

    used, progress = gains_for(network, gains, seed, quiet), listener(quiet)
    statement = prove_hop(network, used, progress)
    run = run_manoeuvres(network, used, statement, units, seconds, seed, progress=progress)
    document = run.as_json()
    files: dict[str, Any] = {"simulation.json": document, "string.svg": string_picture(run, run.runs[0])}
    deliver(document, run.as_text(), as_json, out, files)
    leave(statement.proven and run.violations == 0 and run.collisions == 0)


def handoff(network: Network, gains: Path | None, seed: int, as_json: bool, out: Path, quiet: bool) -> NoReturn:
    """The bundle; exit 1 even where the claim holds, because nothing is proven as flashed."""
    from synth.base.files import refuse_foreign
    from synth.handoff.hop_bundle import hand_off_hop
    from synth.proof.hop_statement import prove_hop

    refuse_foreign(out, "handoff")
    used = gains_for(network, gains, seed, quiet)
    bundle = hand_off_hop(network, used, prove_hop(network, used, listener(quiet)), out, seed, listener(quiet))
    deliver(bundle.as_json(), bundle.as_text(), as_json, None, {})
    leave(bundle.proven)


def run(network: Network, gains: Path | None, seed: int, as_json: bool, out: Path, quiet: bool) -> NoReturn:
    """The whole job."""
    from synth.hop_job import run_hop_job
    from synth.network import read_gains

    in_service = None if gains is None else read_gains(gains, network)
    job = run_hop_job(network, out, gains=in_service, seed=seed, progress=listener(quiet))
    deliver(job.document, job.text, as_json, None, {})
    leave(job.proven)
