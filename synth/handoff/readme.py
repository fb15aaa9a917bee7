"""README.txt of a bundle: what the firmware team reads first."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.caution import CAUTIONS
from synth.base.exact import Number, exact
from synth.base.files import MARK
from synth.handoff.code import UPDATE
from synth.handoff.digits import digits
from synth.handoff.operating import operating_values
from synth.handoff.scaling import Facts
from synth.handoff.table import SIGN_CONVENTION, GainRow, exact_text
from synth.network.controller import firmware_rows, innovation_rows
from synth.network.model import Network
from synth.network.rounding import Rounding

WIDTH = 88

NOT_AS_FLASHED = (
    "The certificate is about the continuous-time loop with the exact gains of the table. It does not cover sampling, "
    "computing time, rounding and fixed-point arithmetic of the code that will be flashed, so the bundle does not "
    "count as proven as flashed."
)

AS_FLASHED = (
    "The certificate is about the code as flashed: these gains digit for digit, with the sample period, computation "
    "delay and rounding that it names, and nothing else."
)

BESIDE = (
    "certificate_continuous.json is a second proof, about the continuous-time loop with the same gains; margins and "
    "simulations of the tool are about that one."
)

CONTENTS = (
    ("gains.csv", "the gains, one per line, exact, with units (RFC 4180)"),
    ("gains.json", "the same rows, what every signal means, ranges, cautions"),
    ("gains.csv-metadata.json", "description of gains.csv (W3C CSVW)"),
    ("datapackage.json", "description of gains.csv (Frictionless)"),
    ("certificate.json", "the proof, as data"),
    ("certificate_continuous.json", "the proof about the continuous loop (check.py)"),
    ("timing.csv", "how far periods and delays may grow, one at a time"),
    ("check.py", "checks the proof again, needs nothing but Python"),
    ("check_firmware.py", "the same for a proof as flashed, with the next two"),
    ("check_flashed.py", "the loops of check_firmware.py"),
    ("check_sampled.py", "the arithmetic of check_firmware.py"),
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


@dataclass(frozen=True)
class Story:
    """What a bundle's certificate says and reaches.

    ``as_flashed``: it is about the sampled and rounded code, not about the continuous loop; ``continuous``: a second
    one about the continuous loop lies beside it; ``unproven`` why the code as flashed is not proven, where it was
    tried; ``timing`` the text of the timing sheet.
    """

    claim: str
    covers: Sequence[str]
    excludes: Sequence[str]
    as_flashed: bool = False
    continuous: bool = False
    unproven: str = ""
    timing: str | None = None

    @property
    def proven_continuous(self) -> bool:
        """Whether a certificate about the continuous loop is in the bundle."""
        return self.continuous or not self.as_flashed

    @property
    def reason(self) -> str:
        """What the bundle's proof is about, and why not about the code as flashed."""
        if self.as_flashed:
            return AS_FLASHED
        return NOT_AS_FLASHED + (f" It was tried: {self.unproven}" if self.unproven else "")

    def has(self, name: str) -> bool:
        """Whether a file of CONTENTS is in the bundle."""
        if name.startswith("check_"):
            return self.as_flashed
        return {"certificate_continuous.json": self.continuous, "timing.csv": self.timing is not None}.get(name, True)


def readme_text(network: Network, rows: Sequence[GainRow], scaling: Mapping[str, Facts], story: Story) -> str:
    """The whole README as text, at most 88 columns except where a name or a file name is longer."""
    contents = [line for line in CONTENTS if story.has(line[0])]
    checker = "check_firmware.py" if story.as_flashed else "check.py"
    commands = [
        ("sha256sum -c SHA256SUMS", "no file was changed on the way"),
        (f"python3 {checker} certificate.json", "the proof holds (Python 3 alone)"),
    ]
    if story.continuous:
        commands.append(("python3 check.py certificate_continuous.json", "so does the second one"))
    parts = [
        _heading(f"Local feedback gains: {network.title}", "="),
        _paragraph(
            "Gains for local controllers, with a proof. Every unit of a kind uses the same gains and uses only "
            "the signals listed below."
        ),
        _heading("Cautions"),
        _bullets(CAUTIONS),
        _heading("What is in here"),
        "".join(f"  {name:<28} {what}\n" for name, what in contents),
        _heading("How to check what you got"),
        "".join(f"  {command:<47} {what}\n" for command, what in commands) + "\n",
        _paragraph(
            "Do both on the receiving side, before and after the values enter the firmware. A table with one gain "
            "changed is a different design and needs a new certificate."
        ),
        _heading("How to use a row"),
        _use(network, rows, story),
        _heading("Gains"),
        _gains(rows),
        *_controllers(network, story),
        _heading("Ranges to provide for"),
        _ranges(scaling),
        _heading("What the proof says"),
        _paragraph(story.claim),
        *([_paragraph(AS_FLASHED)] if story.as_flashed else []),
        *([_paragraph(BESIDE)] if story.continuous else []),
        _heading("Covered"),
        _bullets(story.covers),
        _heading("Not covered"),
        _bullets([*story.excludes, *([] if story.as_flashed else [story.reason])]),
        *([] if story.timing is None else [_heading("How far times may grow"), _bullets(story.timing.splitlines())]),
        _heading("Licence"),
        _LICENCE,
    ]
    return "\n".join(part.rstrip("\n") + "\n" for part in parts)


def _controllers(network: Network, story: Story) -> list[str]:
    """What the firmware must compute beside the gains, where controllers keep states; nothing where none does."""
    lines: list[str] = []
    for kind in network.kinds:
        lines += [f"{kind.name}: {name} = {_sum(parts)}" for name, parts in innovation_rows(kind)]
        lines += [f"{kind.name}: rate of {name} = {_sum(parts)}" for name, parts in firmware_rows(kind)]
    if not lines:
        return []
    words = (
        "The controllers keep states of their own, zero at the start. Rates are per second and in the declared units; "
        "what the table calls an actuator and is named ..._rate or ..._correction is such a rate, not a command. These "
        "rows are part of the proven controller as the gains are, "
    )
    words += f"advanced {UPDATE}." if story.as_flashed else "in continuous time and exact arithmetic."
    return [_heading("States that the controllers keep"), _paragraph(words), _bullets(lines)]


def _sum(parts: Sequence[tuple[str, Fraction]]) -> str:
    """A sum for a person: factors of one are left out."""
    said = [name if factor == 1 else f"({exact_text(factor)}) {name}" for name, factor in parts]
    return " + ".join(said) or "0"


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


def _use(network: Network, rows: Sequence[GainRow], story: Story) -> str:
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
    goal = network.goal
    period = goal.period
    if period is None:
        return text + "\nNo sample period was declared.\n"
    declared = (
        f"Declared sample period: {exact_text(period)} s, computation delay {exact_text(goal.computation_delay)} s."
    )
    lines = [f"{words}: multiples of {exact_text(exact(size))}" for words, size in _rounded(goal.rounding)]
    if goal.rounding.form != "exact":
        lines.append(f"sums and products in {goal.rounding.form} precision")
    if goal.rounding.word is not None:
        lines.append(f"gains in words of {goal.rounding.word} bits, {goal.rounding.fraction} behind the point")
    part = "part of" if story.as_flashed else "not part of"
    text += "\n" + _paragraph(
        f"{declared} Sampling and the rounding named here are {part} the proof in certificate.json."
    )
    return text + (_bullets(lines) if lines else "")


def _rounded(rounding: Rounding) -> list[tuple[str, Number]]:
    """What is rounded, in words, with the distance of neighbouring numbers."""
    groups = {
        "sample": rounding.sensors,
        "command": rounding.commands,
        "products summed for": rounding.products,
        "stored state": rounding.stored,
    }
    return [(f"{word} {name}", size) for word, given in groups.items() for name, size in given.items()]


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
