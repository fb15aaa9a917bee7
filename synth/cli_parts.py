"""What the verbs of the command line share: options, reading, progress, delivery of results."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any, NoReturn

import click

from synth.base.errors import InputError
from synth.base.progress import Listener, silent


def options(*chosen: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Attach several click options to a verb, in reading order."""

    def attach(function: Any) -> Any:
        for option in reversed(chosen):
            function = option(function)
        return function

    return attach


FILE = click.argument("file", type=click.Path(path_type=Path))
JSON = click.option("--json", "as_json", is_flag=True, help="Print exactly one JSON document instead of text.")
OUT = click.option(
    "--out", type=click.Path(path_type=Path), help="Folder for the results; it appears whole or not at all."
)
TARGET = click.option("--target", type=float, help="Spectral radius to reach, between 0 and 1 (default: the file's).")
SEED = click.option(
    "--seed", type=click.IntRange(0), default=0, show_default=True, help="Fixes searches and random runs."
)
GAINS = click.option(
    "--gains", type=click.Path(path_type=Path), help="Gain table (CSV or JSON) in service, instead of fresh gains."
)
QUIET = click.option("--quiet", is_flag=True, help="No progress on standard error.")


def network_of(file: Any) -> Any:
    """The network of a problem file; a network that was read already is itself."""
    from synth.network import read

    return read(file) if isinstance(file, Path) else file


def hop_network(file: Path) -> tuple[Any, bool]:
    """The network of a problem file, and whether it asks for a hop claim (then ``synth.cli_hop`` has the verbs)."""
    network = network_of(file)
    return network, network.goal.hop is not None


def target_of(target: float | None) -> float | None:
    """The target, found in range."""
    if target is not None and not 0 < target < 1:
        raise InputError(f"--target {target}: a spectral radius between 0 and 1 (both excluded) is needed.")
    return target


def network_and_gains(file: Any, gains: Path | None, target: float | None, seed: int, quiet: bool) -> tuple[Any, Any]:
    """The network (or file read already), and either the gains of the table or a fresh design."""
    network = network_of(file)
    if gains is not None:
        from synth.network import read_gains

        return network, read_gains(gains, network)
    from synth.local import design as make_design

    return network, make_design(network, target=target_of(target), seed=seed, progress=listener(quiet))


def listener(quiet: bool) -> Listener:
    """A listener that writes to standard error: one line that is overwritten on a terminal, plain lines elsewhere."""
    if quiet:
        return silent
    if not sys.stderr.isatty():
        return lambda message: click.echo(f"synth: {message}", err=True)
    from rich.console import Console

    console = Console(stderr=True)
    return lambda message: console.print(f"[dim]synth: {message}[/dim]", highlight=False)


def deliver(
    document: Any,
    text: str,
    as_json: bool,
    out: Path | None,
    files: dict[str, Any],
    also: Callable[[Path], Any] | None = None,
) -> None:
    """Write the files (whole folder), then print the JSON document or the text, with the cautions after the text."""
    from synth.base.caution import cautions_text
    from synth.whole_job import plain_json, wrapped

    if out is not None:
        from synth.base.files import whole_folder

        verb = click.get_current_context().info_name or ""
        with whole_folder(out, verb) as work:
            for name, content in files.items():
                (work / name).write_text(content if isinstance(content, str) else plain_json(content), encoding="utf-8")
            if also is not None:
                also(work)
    if as_json:
        click.echo(plain_json(document), nl=False)
        return
    shown = text.replace(cautions_text(), "").rstrip()
    if out is not None:
        shown += f"\n\nWritten to {out}."
    click.echo(wrapped(f"{shown}\n\nCautions\n--------\n{cautions_text()}\n"), nl=False)


def leave(good: bool) -> NoReturn:
    """Exit code 0 or 1."""
    raise SystemExit(0 if good else 1)


def promised_sizes(certificate: Path, network: Any) -> Any:
    """Sizes by outlet from a certificate that is verified and about ``network``."""
    import json
    from fractions import Fraction

    from synth.proof import verify as check_again

    found = check_again(certificate, network)
    if not found.verified:
        raise InputError(f"--certificate {certificate}: not verified for FILE: {'; '.join(found.reasons[:2])}")
    document = json.loads(certificate.read_text(encoding="utf-8"))
    if document["route"] != "peak":
        raise InputError(
            f"--certificate {certificate}: sizes of outlets stand in certificates of the peak route only; this one is "
            f"of route {document['route']}. Leave the option out to take sizes from the radius in service."
        )
    return {entry["of"]: Fraction(entry["s"]) for entry in document["point"]}
