"""The command line: `synth VERB FILE [options]`; results on standard output, progress on standard error.

Exit codes: 0 done and proven (or verified); 1 done, but not proven, not verified, target not reached, obstruction found
or violations seen; 2 the input is wrong; 3 something failed inside; 130 interrupted. No traceback reaches a user.
"""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable, Sequence
from functools import wraps
from pathlib import Path
from typing import Any, NoReturn

import click

from synth import cli_hop
from synth.base.errors import InputError, Problem, SynthError, nearest
from synth.cli_parts import (
    FILE,
    GAINS,
    JSON,
    OUT,
    QUIET,
    SEED,
    TARGET,
    deliver,
    hop_network,
    leave,
    listener,
    network_and_gains,
    network_of,
    options,
    promised_sizes,
    target_of,
)

HELP = {"help_option_names": ["-h", "--help"]}


class _Verbs(click.Group):
    """Group of verbs that names the nearest one when a verb is misspelt, and lists them in working order."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)

    def resolve_command(self, ctx: click.Context, args: list[str]) -> Any:
        if args and not args[0].startswith("-") and args[0] not in self.commands:
            known = ", ".join(self.commands)
            close = nearest(args[0], self.commands)
            raise click.UsageError(f"there is no verb {args[0]!r}{close}; the verbs are {known}.")
        return super().resolve_command(ctx, args)


@click.group(cls=_Verbs, context_settings=HELP)
@click.version_option(package_name="localgain", prog_name="synth")
def verbs() -> None:
    """Pick local feedback gains for a large network of coupled machines and prove the whole stays calm.

    FILE is a problem file (YAML). Start with `synth run FILE --out DIR`. An engineering aid, not an approval.
    """


@verbs.command()
@click.argument("name", type=click.Path(path_type=Path))
def new(name: Path) -> None:
    """Write NAME.yaml, a commented problem file to start from, and the schema that editors complete it with."""
    from synth.network.starter import write_starter

    click.echo(write_starter(name), nl=False)
    leave(True)


@verbs.command()
@options(FILE, JSON, OUT, QUIET)
def check(file: Path, as_json: bool, out: Path | None, quiet: bool) -> None:
    """Read FILE, explain the network (with --out also as a picture), find what no local feedback can do."""
    from synth.network import describe

    listener(quiet)("reading and looking for obstructions")
    network, hop = hop_network(file)
    if hop:
        cli_hop.check(network, as_json, out)
    described = describe(network)
    document = described.as_json()
    files: dict[str, Any] = {"check.json": document}
    if out is not None:
        from synth.report.picture import network_picture

        files["network.svg"] = network_picture(network)
    deliver(document, described.as_text(), as_json, out, files)
    leave(document["obstruction"] is None)


@verbs.command()
@options(FILE, TARGET, SEED, JSON, OUT, QUIET)
@click.option(
    "--work",
    type=click.Path(path_type=Path),
    help="File that keeps finished units, so that an interrupted run goes on.",
)
@click.option("--sampled", is_flag=True, help="Seek the gains on the sampled units in any case (needs design.period).")
def design(
    file: Path,
    target: float | None,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
    work: Path | None,
    sampled: bool,
) -> None:
    """Pick local gains with the smallest spectral radius within the limits of FILE."""
    from synth.handoff.table import csv_text, gain_rows
    from synth.local import design as make_design

    network, hop = hop_network(file)
    if hop:
        cli_hop.refuse_target(target)
        cli_hop.design(network, seed, as_json, out, quiet)
    chosen = make_design(
        network,
        target=target_of(target),
        seed=seed,
        progress=listener(quiet),
        work=work,
        sampled=True if sampled else None,
    )
    document = chosen.as_json()
    files = {"design.json": document, "gains.csv": csv_text(gain_rows(network, chosen.gains))}
    deliver(document, chosen.as_text(), as_json, out, files)
    leave(chosen.reached)


@verbs.command()
@options(FILE, GAINS)
@click.option("--route", type=click.Choice(["auto", "peak", "storage", "firmware"]), default="auto", show_default=True)
@options(TARGET, SEED, JSON, OUT, QUIET)
def prove(
    file: Path,
    gains: Path | None,
    route: str,
    target: float | None,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
) -> None:
    """Build a certificate for fresh gains, or for gains already in service (--gains)."""
    from synth.proof import prove as make_proof

    network, hop = hop_network(file)
    if hop:
        cli_hop.refuse_target(target, route)
        cli_hop.prove(network, gains, seed, as_json, out, quiet)
    network, used = network_and_gains(network, gains, target, seed, quiet)
    certificate = make_proof(network, used, route=route, target=target_of(target), progress=listener(quiet))
    kept = out is not None and certificate.proven  # an unproven certificate is never written: it could be mistaken
    document = {**certificate.as_json(), "certificate": str(out / "certificate.json") if out and kept else None}
    text = certificate.as_text()
    if certificate.proven and not kept:
        text = text.rstrip() + "\nThe certificate was not kept; name a folder with --out to keep it.\n"

    def save(work: Path) -> None:
        if kept:
            certificate.save(work / "certificate.json")

    deliver(document, text, as_json, out, {"proof.json": document}, save)
    leave(certificate.proven)


@verbs.command()
@options(FILE, GAINS)
@click.option("--class", "classes", multiple=True, help="Scale only this link class (may be repeated; default: all).")
@click.option("--fixed-own-parts", is_flag=True, help="Keep the own part of relative links at today's strength.")
@click.option("--redesign", is_flag=True, help="Also pick the gains anew at each strength.")
@options(SEED, JSON, OUT, QUIET)
def margin(
    file: Path,
    gains: Path | None,
    classes: tuple[str, ...],
    fixed_own_parts: bool,
    redesign: bool,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
) -> None:
    """Find how much stronger the links may get: proven, the limit of the class, and where it really breaks."""
    from synth.margin import margin as find_margin

    network, hop = hop_network(file)
    if hop:
        cli_hop.refuse_couplings(classes, fixed_own_parts, redesign)
        cli_hop.margin(network, gains, seed, as_json, out, quiet)
    network, used = network_and_gains(network, gains, None, seed, quiet)
    for name in classes:
        if name not in network.classes():
            known = ", ".join(network.classes()) or "none"
            close = nearest(name, network.classes())
            raise InputError(f"--class {name}: no link class has this name{close}; known: {known}.")
    found = find_margin(
        network,
        used,
        classes=classes or None,
        own_parts=not fixed_own_parts,
        redesign=redesign,
        progress=listener(quiet),
    )
    document = found.as_json()
    deliver(document, found.as_text(), as_json, out, {"margin.json": document})
    leave(found.proven_factor >= 1)


@verbs.command()
@options(FILE, GAINS)
@click.option("--units", type=click.IntRange(2), help="Number of cells simulated (default: the file's).")
@click.option(
    "--seconds", type=click.FloatRange(min=0, min_open=True), help="Length of each run (default: the file's)."
)
@options(SEED, JSON, OUT, QUIET)
def simulate(
    file: Path,
    gains: Path | None,
    units: int | None,
    seconds: float | None,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
) -> None:
    """Run the closed loop against disturbances and an adversary; count every sample above its proven bound."""
    from synth.proof import prove as make_proof
    from synth.simulate import simulate as run_simulation

    network, hop = hop_network(file)
    if hop:
        cli_hop.simulate(network, gains, units, seconds, seed, as_json, out, quiet)
    network, used = network_and_gains(network, gains, None, seed, quiet)
    progress = listener(quiet)
    certificate = make_proof(network, used, progress=progress)
    trajectory = run_simulation(network, used, certificate, units=units, seconds=seconds, seed=seed, progress=progress)
    document = trajectory.as_json()
    files = {"simulation.json": document}
    deliver(document, trajectory.as_text(), as_json, out, files, lambda work: trajectory.save(work / "trajectory.npz"))
    leave(certificate.proven and trajectory.violations == 0)


@verbs.command()
@options(FILE, GAINS, TARGET, SEED, JSON)
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder of the bundle.")
@click.option("--route", type=click.Choice(["auto", "peak", "storage", "firmware"]), default="auto", show_default=True)
@options(QUIET)
def handoff(
    file: Path,
    gains: Path | None,
    target: float | None,
    seed: int,
    as_json: bool,
    out: Path,
    route: str,
    quiet: bool,
) -> None:
    """Write the bundle for the firmware team: gain table, certificate, checker, manifest.

    Where FILE declares a sample period, the code as flashed is proven too; exit code 0 means that it is.
    """
    from synth.base.files import refuse_foreign
    from synth.proof import prove as make_proof
    from synth.proof.firmware_limits import prove_as_flashed
    from synth.whole_job import bundle_of

    refuse_foreign(out, "handoff")
    network, hop = hop_network(file)
    if hop:
        cli_hop.refuse_target(target, route)
        cli_hop.handoff(network, gains, seed, as_json, out, quiet)
    network, used = network_and_gains(network, gains, target, seed, quiet)
    wanted, progress = target_of(target), listener(quiet)
    continuous = "auto" if route == "firmware" else route
    certificate = make_proof(network, used, route=continuous, target=wanted, progress=progress)
    sampled = route == "firmware" or (route == "auto" and network.goal.period is not None)
    flashed = prove_as_flashed(network, used, target=wanted, progress=progress) if sampled else None
    if route == "firmware" and flashed is not None and not flashed.takes:
        raise InputError(flashed.reason)
    bundle = bundle_of(network, used, certificate, flashed, out)
    deliver(bundle.as_json(), bundle.as_text(), as_json, None, {})
    leave(bundle.proven)


@verbs.command()
@options(FILE, GAINS, TARGET, SEED, JSON)
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder for everything; it appears whole.")
@options(QUIET)
def run(file: Path, gains: Path | None, target: float | None, seed: int, as_json: bool, out: Path, quiet: bool) -> None:
    """Do the whole job: check, design, prove, margin, simulate, hand off, report."""
    from synth.base.files import refuse_foreign
    from synth.network import read_gains
    from synth.whole_job import run_whole_job

    refuse_foreign(out, "run")
    network, hop = hop_network(file)
    if hop:
        cli_hop.refuse_target(target)
        cli_hop.run(network, gains, seed, as_json, out, quiet)
    in_service = None if gains is None else read_gains(gains, network)
    job = run_whole_job(network, out, gains=in_service, target=target_of(target), seed=seed, progress=listener(quiet))
    deliver(job.document, job.text, as_json, None, {})
    leave(job.proven)


@verbs.command()
@click.argument("certificate", type=click.Path(path_type=Path))
@click.option(
    "--for", "problem", type=click.Path(path_type=Path), help="Also demand that it is about this problem file."
)
@options(JSON, QUIET)
def verify(certificate: Path, problem: Path | None, as_json: bool, quiet: bool) -> None:
    """Re-check a certificate in exact arithmetic, believing nothing in it."""
    from synth.proof import verify as check_again

    listener(quiet)("deriving every number again")

    network = None if problem is None else network_of(problem)
    found = check_again(certificate, network)
    deliver(found.as_json(), found.as_text(), as_json, None, {})
    leave(found.verified)


@verbs.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--gains", type=click.Path(path_type=Path), required=True, help="Gain table in service (CSV or JSON).")
@click.option(
    "--joining",
    type=click.Path(path_type=Path),
    required=True,
    help="Problem file of the network as it will be: FILE with one kind new or changed, or with more units.",
)
@click.option(
    "--certificate",
    type=click.Path(path_type=Path),
    help="Take the promised sizes from this certificate of FILE (peak route), after verifying it.",
)
@options(TARGET, SEED, JSON, OUT, QUIET)
def admit(
    file: Path,
    gains: Path,
    joining: Path,
    certificate: Path | None,
    target: float | None,
    seed: int,
    as_json: bool,
    out: Path | None,
    quiet: bool,
) -> None:
    """Test whether a unit may join FILE, or be changed, with everybody else's gains untouched; find its gains."""
    from synth.handoff.table import csv_text, gain_rows
    from synth.local import admit as test_joining
    from synth.network import read_gains
    from synth.network.gains import Gains

    network, after = network_of(file), network_of(joining)
    cli_hop.refuse_joining(network, after)
    in_service = read_gains(gains, network)
    promised = None if certificate is None else promised_sizes(certificate, network)
    found = test_joining(
        network, in_service, after, promised=promised, target=target_of(target), seed=seed, progress=listener(quiet)
    )
    document = found.as_json()
    files: dict[str, Any] = {"admit.json": document}
    if found.admitted:
        newest = {} if found.gains is None else {found.gains.kind: found.gains}
        everybody = Gains(tuple(newest.get(k.name) or in_service[k.name] for k in after.kinds))
        files["gains.csv"] = csv_text(gain_rows(after, everybody))
    deliver(document, found.as_text(), as_json, out, files)
    leave(found.admitted)


def _one_sentence(function: Callable[[], None]) -> Callable[[], None]:
    """Turn every way a verb can end into an exit code and, for failures, sentences without a traceback."""

    @wraps(function)
    def guarded() -> None:
        try:
            function()
        except click.ClickException as error:
            _fail(error.format_message(), 2)
        except (click.Abort, KeyboardInterrupt):
            _fail("interrupted; earlier results are intact.", 130)
        except InputError as error:
            _fail(str(error), error.exit_code, error.problems)
        except SynthError as error:
            _fail(str(error), error.exit_code)
        except BrokenPipeError:
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            raise SystemExit(3) from None
        except Exception as error:
            if os.environ.get("SYNTH_DEBUG"):
                raise
            _fail(
                f"an unforeseen failure inside the tool ({type(error).__name__}: {error}); nothing was written. "
                "Please report it with the problem file; SYNTH_DEBUG=1 shows where it happened.",
                3,
            )

    return guarded


def _fail(sentence: str, code: int, problems: Sequence[Problem] = ()) -> NoReturn:
    """Sentences on standard error; with --json also one JSON document on standard output.

    ``problems`` are the sentences one by one with their places, for programs.
    """
    if "--json" in sys.argv[1:] and code != 130:
        from synth.whole_job import plain_json

        document: dict[str, object] = {"error": sentence, "exit_code": code}
        if problems:
            document["error"] = "\n".join(str(problem) for problem in problems)
            document["problems"] = [problem.as_dict() for problem in problems]
        click.echo(plain_json(document), nl=False)
    for line in sentence.splitlines():
        click.echo(line if line[:1].isspace() else f"synth: {line}", err=True)
    raise SystemExit(code)


def _interrupt(*_: object) -> NoReturn:
    raise KeyboardInterrupt


@_one_sentence
def main() -> None:
    """Entry point of the `synth` command."""
    if hasattr(signal, "SIGTERM"):
        signal.signal(signal.SIGTERM, _interrupt)
    verbs.main(standalone_mode=False)


if __name__ == "__main__":
    main()
