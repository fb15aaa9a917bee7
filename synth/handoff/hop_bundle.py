"""The bundle of a string that sees only gaps: gain table, hop statement, and a second table for a radio that is lost.

It is no bundle of a proof of calm, and its README says so. With ``radio`` in the problem file the gap to fall back to
is worked out: the same gains with what the radio fed at zero, at the smallest time gap for which the hop claim is
proven (where the file names a gap_parameter), or gains designed anew without the radio.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.base.files import whole_folder
from synth.base.progress import Listener, silent
from synth.base.provenance import sha256
from synth.handoff.bundle import UnprovenTable
from synth.handoff.statement import MANIFEST, PROVENANCE, manifest, provenance
from synth.handoff.table import SIGN_CONVENTION, csv_text, gain_rows
from synth.local.hop_designing import hop_design
from synth.margin.hop_finding import hop_margin, without_radio
from synth.network.gains import Gains, gain_set
from synth.network.hop_wish import HopWish
from synth.network.model import Network
from synth.network.varying import with_parameters
from synth.proof.hop_statement import EXCLUDES, HopStatement, prove_hop, wish_of

STATEMENT, TABLE, LOST_TABLE, LOST_STATEMENT = (
    "hop_statement.json",
    "gains.csv",
    "gains_radio_lost.csv",
    "hop_statement_radio_lost.json",
)
NOT_SWITCHING = (
    "Not covered: the instant of switching. With the radio, and after it is lost, each table has its own hop claim; no "
    "claim is made for strings in which some vehicles have switched and others not, nor for the time in which a gap is "
    "still opening to its fallback. Open the gap gently, before the radio is given up where that can be foreseen."
)
NOT_FLASHED = "Not proven as flashed: a hop claim is about controllers in continuous time and exact arithmetic."


@dataclass(frozen=True)
class Fallback:
    """What to fall back to when the radio is lost for good.

    ``gains`` and ``network`` (its time gaps changed, its radio gone) belong together; ``statement``: what is proven of
    them; ``how``: in words where the gains come from.
    """

    network: Network
    gains: Gains
    statement: HopStatement
    how: str


@dataclass(frozen=True)
class HopBundle:
    """A hand-off folder as written. ``proven`` (as flashed) is always False; ``holds``: the hop claim in the tables."""

    path: Path
    files: tuple[str, ...]
    holds: str
    meaning: str
    time_gaps: Mapping[str, float]
    fallback_gaps: Mapping[str, float] | None
    fallback_holds: str | None

    proven = False

    def as_json(self) -> dict[str, Any]:
        """The keys of a hand-off."""
        return {
            "bundle": str(self.path),
            "files": list(self.files),
            "proven": False,
            "proven_continuous": False,
            "reason": NOT_FLASHED,
            "hop_claim": self.holds,
            "meaning": self.meaning,
            "time_gaps_s": dict(self.time_gaps),
            "radio_lost": None
            if self.fallback_gaps is None
            else {
                "hop_claim": self.fallback_holds,
                "time_gaps_s": dict(self.fallback_gaps),
                "switching": NOT_SWITCHING,
            },
            "scaling": {},
            "sign_convention": SIGN_CONVENTION,
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """For a terminal."""
        lines = [f"Bundle {self.path}: {len(self.files)} files, sign convention {SIGN_CONVENTION}.", self.meaning]
        lines += [f"Time gap of a {name}: {value:.6g} s." for name, value in self.time_gaps.items()]
        if self.fallback_gaps is not None:
            lines += [
                f"With the radio lost, time gap of a {name}: {value:.6g} s (hop claim for {self.fallback_holds}s)."
                for name, value in self.fallback_gaps.items()
            ]
            lines.append(NOT_SWITCHING)
        return "\n".join([*lines, NOT_FLASHED]) + "\n"


def radio_lost(network: Network, gains: Gains, seed: int = 0, progress: Listener = silent) -> Fallback:
    """Gains and time gaps for a radio lost for good; InputError if the file names no radio.

    Raises what the hop design raises. ``statement.proven`` may be False: then there is no fallback with a claim.
    """
    wish = wish_of(network)
    if not wish.radio:
        raise InputError("design.hop names no radio that could be lost.")
    silenced = _deaf(network, gains, wish)
    lost = without_radio(network, wish)
    progress("looking for time gaps to fall back to without radio")
    if wish.gap_parameter is not None:
        found = hop_margin(lost, silenced, table=False, shares=False)
        if all(gap.proven is not None for gap in found.gaps.values()):
            values = {
                name: {wish.gap_parameter: max(found.declared[name], _rounded_up(gap.proven or Fraction(0)))}
                for name, gap in found.gaps.items()
            }
            wider = without_radio(with_parameters(network, values), wish)
            statement = prove_hop(wider, silenced)
            if statement.proven:
                how = "the same gains, what the radio fed at zero, at a wider time gap"
                return Fallback(wider, silenced, statement, how)
    progress("designing gains without radio")
    bounds = {k: {a: dict(s) for a, s in v.items()} for k, v in network.goal.gain_bounds.items()}
    for kind in network.cell_kinds:
        for actuator in kind.inputs:
            row = bounds.setdefault(kind.name, {}).setdefault(actuator.name, {})
            row.update({name: Fraction(0) for name in _radio_sensors(network, kind.name, wish)})
    lost = replace(lost, goal=replace(lost.goal, gain_bounds=bounds))
    designed = hop_design(
        lost,
        wish.notion,
        wish.dead_time,
        wish.sensing,
        wish.most_jerk,
        seed,
        least="time gap",
        gap_error=wish.gap_error,
    )
    how = "gains designed anew without the radio"
    return Fallback(lost, designed.gains, prove_hop(lost, designed.gains), how)


def _rounded_up(value: Fraction) -> Fraction:
    return Fraction(math.ceil(value * 1000), 1000)


def _radio_sensors(network: Network, name: str, wish: HopWish) -> list[str]:
    """Sensors of a kind that read nothing but what the radio brings."""
    kind = network.kind(name)
    takes = {link.take for link in network.links if link.kind == name}
    sight = {link.take for link in network.links if link.kind == name and link.name not in wish.radio}
    dead = [i for i, take in enumerate(kind.takes) if take.name in takes - sight]
    return [
        sensor.name
        for q, sensor in enumerate(kind.sensors)
        if not any(kind.C.rows[q])
        and any(kind.N.rows[q])
        and not any(kind.N[q, i] for i in range(len(kind.takes)) if i not in dead)
    ]


def _deaf(network: Network, gains: Gains, wish: HopWish) -> Gains:
    """The gains with those of the radio's sensors at zero."""
    sets = []
    for kind in network.kinds:
        names = _radio_sensors(network, kind.name, wish)
        K = ExactMatrix.of(
            [
                [Fraction(0) if s.name in names else value for s, value in zip(kind.sensors, row, strict=True)]
                for row in gains[kind.name].K.rows
            ]
        )
        sets.append(gain_set(kind, K))
    return Gains(tuple(sets))


def hand_off_hop(
    network: Network,
    design_or_gains: Any,
    statement: HopStatement,
    out: str | Path,
    seed: int = 0,
    progress: Listener = silent,
) -> HopBundle:
    """Write the bundle of a proven hop claim into the folder ``out``, whole or not at all.

    Raises UnprovenTable if the statement is not proven or is about other gains or another network.
    """
    wish = wish_of(network)
    gains = getattr(design_or_gains, "gains", design_or_gains)
    if not statement.proven:
        why = "; ".join(statement.reasons) or "the hop claim was not decided"
        raise UnprovenTable(f"no bundle was written to {out}: the hop claim asked for does not stand ({why}).")
    said = {entry["kind"]: entry["K"] for entry in statement.document["gains"]}
    same = {name: [[str(v) for v in row] for row in found.K.rows] for name, found in gains.items()}
    if statement.document["network_hash"] != network.hash or said != same:
        raise UnprovenTable(
            f"no bundle was written to {out}: the hop statement is about other gains or another network."
        )
    fallback = radio_lost(network, gains, seed, progress) if wish.radio else None
    kept = fallback is not None and fallback.statement.proven
    with whole_folder(out, "handoff") as work:
        files = {TABLE: csv_text(gain_rows(network, gains)).encode(), STATEMENT: _json(statement.document)}
        if fallback is not None and kept:
            files[LOST_TABLE] = csv_text(gain_rows(fallback.network, fallback.gains)).encode()
            files[LOST_STATEMENT] = _json(fallback.statement.document)
        files["README.txt"] = _readme(network, statement, fallback).encode()
        files[PROVENANCE] = _json(provenance(files, network.hash, sha256(files[STATEMENT]), False, False))
        files[MANIFEST] = manifest(files).encode()
        for name, data in files.items():
            (work / name).write_bytes(data)
    return HopBundle(
        Path(out),
        tuple(sorted(files)),
        statement.notion,
        statement.sentence,
        {name: float(value) for name, value in statement.time_gaps.items()},
        {name: float(v) for name, v in fallback.statement.time_gaps.items()} if fallback is not None and kept else None,
        fallback.statement.notion if fallback is not None and kept else None,
    )


def _json(value: object) -> bytes:
    return (json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


def _readme(network: Network, statement: HopStatement, fallback: Fallback | None) -> str:
    lines = [
        network.title,
        "=" * len(network.title),
        "",
        "What these gains are for",
        statement.sentence,
        "This is no certificate, and no proof that the whole stays calm.",
        "",
        f"Sign convention: {SIGN_CONVENTION}; an actuator is the sum over its rows of gain times signal, as",
        "differences from steady driving, time in s. The gains go with these time gaps and with no smaller ones:",
        *(f"  {name}: {float(value):.9g} s" for name, value in statement.time_gaps.items()),
        "",
        "Files",
        f"  {TABLE}: the gains, exact",
        f"  {STATEMENT}: what is proven, of which model and gains, with its hash",
    ]
    if fallback is not None and fallback.statement.proven:
        lines += [
            f"  {LOST_TABLE}: the gains when the radio is lost for good ({fallback.how})",
            f"  {LOST_STATEMENT}: what is proven of them",
            "",
            "Radio lost: use the second table and these time gaps",
            *(f"  {name}: {float(value):.9g} s" for name, value in fallback.statement.time_gaps.items()),
            fallback.statement.sentence,
            NOT_SWITCHING,
        ]
    elif fallback is not None:
        lines += ["", "Radio lost: no gains and gap with a hop claim were found. Do not drive so without the radio."]
    lines += ["", "Not covered", *(f"- {text}" for text in EXCLUDES), f"- {NOT_FLASHED}"]
    lines += ["", "Cautions", cautions_text(), ""]
    return "\n".join(lines)
