"""README.txt of a bundle: what the firmware team reads first."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence

from synth.base.caution import CAUTIONS
from synth.base.files import MARK
from synth.handoff.digits import digits
from synth.handoff.operating import operating_values
from synth.handoff.scaling import Facts
from synth.handoff.table import SIGN_CONVENTION, GainRow
from synth.network.model import Network

WIDTH = 88

NOT_AS_FLASHED = (
    "The certificate is about the continuous-time loop with the exact gains of the table. Sampling, computing time, "
    "rounding and fixed-point arithmetic of the code that will be flashed are not covered by certificates of this "
    "version, so the bundle does not count as proven as flashed."
)

CONTENTS = (
    ("gains.csv", "the gains, one per line, exact, with units (RFC 4180)"),
    ("gains.json", "the same rows, the meaning of every signal, ranges, cautions"),
    ("gains.csv-metadata.json", "description of gains.csv (W3C CSVW)"),
    ("datapackage.json", "description of gains.csv (Frictionless)"),
    ("certificate.json", "the proof, as data"),
    ("check.py", "re-verifies the proof with a bare Python, nothing to install"),
    ("provenance.json", "hashes of the inputs and versions (in-toto statement)"),
    ("SHA256SUMS", "hashes of all files above and of this README"),
    (MARK, "says that the tool wrote this folder; no further use"),
)

# The MIT licence asks that its notice travels with copies of the program; check.py is such a copy.
_LICENCE = """\
check.py is part of localgain. SPDX-License-Identifier: MIT

Copyright (c) 2026 the localgain authors

Permission is hereby granted, free of charge, to any person obtaining a copy
of this software and associated documentation files (the "Software"), to deal
in the Software without restriction, including without limitation the rights
to use, copy, modify, merge, publish, distribute, sublicense, and/or sell
copies of the Software, and to permit persons to whom the Software is
furnished to do so, subject to the following conditions:

The above copyright notice and this permission notice shall be included in all
copies or substantial portions of the Software.

THE SOFTWARE IS PROVIDED "AS IS", WITHOUT WARRANTY OF ANY KIND, EXPRESS OR
IMPLIED, INCLUDING BUT NOT LIMITED TO THE WARRANTIES OF MERCHANTABILITY,
FITNESS FOR A PARTICULAR PURPOSE AND NONINFRINGEMENT. IN NO EVENT SHALL THE
AUTHORS OR COPYRIGHT HOLDERS BE LIABLE FOR ANY CLAIM, DAMAGES OR OTHER
LIABILITY, WHETHER IN AN ACTION OF CONTRACT, TORT OR OTHERWISE, ARISING FROM,
OUT OF OR IN CONNECTION WITH THE SOFTWARE OR THE USE OR OTHER DEALINGS IN THE
SOFTWARE.
"""


def readme_text(
    network: Network,
    rows: Sequence[GainRow],
    scaling: Mapping[str, Facts],
    claim: str,
    covers: Sequence[str],
    excludes: Sequence[str],
) -> str:
    """The whole README as text, at most 88 columns except where a name or a file name is longer."""
    parts = [
        _heading(f"Local feedback gains: {network.title}", "="),
        _paragraph(
            "Gains for local controllers, with a proof. Every unit of a kind uses the same gains and uses only "
            "the signals listed below."
        ),
        _heading("Cautions"),
        _bullets(CAUTIONS),
        _heading("What is in here"),
        "".join(f"  {name:<24} {what}\n" for name, what in CONTENTS),
        _heading("How to check what you got"),
        "  sha256sum -c SHA256SUMS            no file was changed on the way\n"
        "  python3 check.py certificate.json  the proof holds (Python 3, standard library)\n\n",
        _paragraph(
            "Do both on the receiving side, before and after the values enter the firmware. A table with one gain "
            "changed is a different design and needs a new certificate."
        ),
        _heading("How to use a row"),
        _use(network, rows),
        _heading("Gains"),
        _gains(rows),
        _heading("Ranges to provide for"),
        _ranges(scaling),
        _heading("What the proof says"),
        _paragraph(claim),
        _heading("Covered"),
        _bullets(covers),
        _heading("Not covered"),
        _bullets([*excludes, NOT_AS_FLASHED]),
        _heading("Licence"),
        _LICENCE,
    ]
    return "\n".join(part.rstrip("\n") + "\n" for part in parts)


def _heading(text: str, rule: str = "-") -> str:
    line = " ".join(text.split())
    return f"{line}\n{rule * min(len(line), WIDTH)}\n"


def _paragraph(text: str) -> str:
    return textwrap.fill(text, WIDTH, break_long_words=False, break_on_hyphens=False) + "\n"


def _bullets(lines: Sequence[str]) -> str:
    return "".join(
        textwrap.fill(
            line, WIDTH, initial_indent="- ", subsequent_indent="  ", break_long_words=False, break_on_hyphens=False
        )
        + "\n"
        for line in lines
    )


def _use(network: Network, rows: Sequence[GainRow]) -> str:
    """The sign convention spelled out, and the sample period."""
    text = _paragraph(
        f"Sign convention: {SIGN_CONVENTION}. An actuator's command is the sum of gain times signal over its rows. "
        "Nothing is subtracted: the sign is in the gain. Signals and commands are deviations from the operating "
        "point, in the units written in the row."
    )
    for kind in network.kinds:
        for actuator in kind.inputs:
            terms = [
                f"({row.gain})*{row.signal}" for row in rows if (row.kind, row.actuator) == (kind.name, actuator.name)
            ]
            text += f"\n  {kind.name}: {actuator.name} [{actuator.unit}] =\n"
            text += "".join(f"      {'+ ' if i else '  '}{term}\n" for i, term in enumerate(terms))
    text += _at_rest(network)
    period = network.goal.period
    if period is None:
        return text + "\nNo sample period was declared.\n"
    return text + f"\nDeclared sample period: {rows[0].period_s if rows else period} s.\n"


def _at_rest(network: Network) -> str:
    """Where equations were written about an operating point: its values, which the code must subtract and add."""
    lines = [
        (f"{kind}: {group} {name}", repr(value), unit)
        for kind, values in operating_values(network).items()
        for group, named in values.items()
        for name, (value, unit) in named.items()
    ]
    if not lines:
        return ""
    return (
        "\n"
        + _paragraph(
            "These gains are about an operating point: command = value at rest of the actuator + sum of gain * (signal "
            "- value at rest of the signal)."
        )
        + "\n"
        + _columns([("at rest", "value", "unit"), *lines])
    )


def _gains(rows: Sequence[GainRow]) -> str:
    header = ("kind", "actuator", "signal", "gain", "unit")
    return _columns([header, *((row.kind, row.actuator, row.signal, row.gain, row.gain_unit) for row in rows)])


def _ranges(scaling: Mapping[str, Facts]) -> str:
    """Peaks and ranges by signal and by actuator, each once."""
    lines: dict[tuple[str, str], tuple[str, ...]] = {}
    for facts in scaling.values():
        kind, actuator, signal = facts["kind"], facts["actuator"], facts["signal"]
        for name, side in ((signal, "signal"), (actuator, "actuator")):
            lines[(kind, f"{side} {name}")] = (
                kind,
                f"{side} {name}",
                _upper(facts[f"{side}_peak"]),
                _plus_minus(facts[f"{side}_range"]),
                facts[f"{side}_unit"],
            )
    note = _paragraph(
        "Peaks are guaranteed for the declared disturbances, starting from rest. A start away from rest, or a larger "
        "disturbance, needs more. A range is the smallest power of two that holds the peak (for an actuator with a "
        "limit: the limit)."
    )
    ordered = sorted(lines.values(), key=lambda line: line[1].startswith("actuator"))  # signals first
    return _columns([("kind", "quantity", "peak", "range", "unit"), *ordered]) + "\n" + note


def _upper(value: object) -> str:
    return digits(value, 6) if isinstance(value, float) else "not known"


def _plus_minus(value: object) -> str:
    return f"+-{digits(value, 17)}" if isinstance(value, float) else "not known"


def _columns(table: Sequence[Sequence[str]]) -> str:
    widths = [max(len(line[i]) for line in table) for i in range(len(table[0]))]
    return "".join(
        "  " + "  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip() + "\n"
        for line in table
    )
