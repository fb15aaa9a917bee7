"""The gain table: one row for each gain, exact, with the units and the sign convention beside the number.

Laws: reading the CSV text back with ``synth.network.read_gains`` gives gains equal to the ones written, digit for
digit, and so does the JSON form; equal inputs give equal bytes.
"""

from __future__ import annotations

import csv
import io
from dataclasses import asdict, dataclass, replace
from fractions import Fraction

from synth.handoff.quantity import quotient
from synth.network.gains import Gains
from synth.network.model import Network

SIGN_CONVENTION = "u = K y"

COLUMNS = (
    "kind",
    "actuator",
    "signal",
    "gain",
    "gain_unit",
    "actuator_unit",
    "signal_unit",
    "sign_convention",
    "period_s",
    "certificate_sha256",
)


_MOST_PLACES = 390


@dataclass(frozen=True)
class GainRow:
    """One entry of K: ``actuator`` gets ``gain`` times ``signal``; every field is the text that stands in the table."""

    kind: str
    actuator: str
    signal: str
    gain: str
    gain_unit: str
    actuator_unit: str
    signal_unit: str
    sign_convention: str
    period_s: str
    certificate_sha256: str

    def as_dict(self) -> dict[str, str]:
        """The row by column name, in column order."""
        return asdict(self)


def exact_text(value: Fraction) -> str:
    """The number as text without loss: a plain decimal where one of at most 390 places exists, else ``'1/3'``.

    More places than that would be refused by whoever reads the table back (a double has so many only below 1e-100).
    Law: ``Fraction(exact_text(value)) == value``.
    """
    twos, rest = _factor_out(value.denominator, 2)
    fives, rest = _factor_out(rest, 5)
    if rest != 1:
        return str(value)
    places = max(twos, fives)
    if places > _MOST_PLACES:
        return str(value)
    digits = str(abs(value.numerator) * 10**places // value.denominator).rjust(places + 1, "0")
    whole = digits if places == 0 else f"{digits[:-places]}.{digits[-places:]}"
    return f"-{whole}" if value < 0 else whole


def _factor_out(number: int, prime: int) -> tuple[int, int]:
    """How often ``prime`` divides ``number``, and what is left."""
    count = 0
    while number % prime == 0:
        number //= prime
        count += 1
    return count, number


def gain_rows(network: Network, gains: Gains, certificate_sha256: str = "") -> tuple[GainRow, ...]:
    """A row for every actuator and sensor of every kind, in the order of the network; zeros are rows too.

    A zero that is left out of a table cannot be told from a gain that got lost, so none is left out.
    """
    period = "" if network.goal.period is None else exact_text(network.goal.period)
    rows = []
    for kind in network.kinds:
        K = gains[kind.name].K
        for i, actuator in enumerate(kind.inputs):
            for j, sensor in enumerate(kind.sensors):
                rows.append(
                    GainRow(
                        kind.name,
                        actuator.name,
                        sensor.name,
                        exact_text(K[i, j]),
                        quotient(actuator.unit, sensor.unit),
                        actuator.unit,
                        sensor.unit,
                        SIGN_CONVENTION,
                        period,
                        certificate_sha256,
                    )
                )
    return tuple(rows)


def grouped_rows(network: Network, rows: tuple[GainRow, ...]) -> tuple[GainRow, ...]:
    """The rows of every gain set once, with its name in the column ``kind``, where several kinds carry the same gains.

    Law: read_gains reads both forms to the same gains. A set that bears the name of its only kind stays as it is.
    """
    found: list[GainRow] = []
    for group, names in network.gain_groups().items():
        found += [replace(row, kind=group) for row in rows if row.kind == names[0]]
    return tuple(found)


def csv_text(rows: tuple[GainRow, ...]) -> str:
    """The rows as CSV with a header row (RFC 4180: comma, CR LF, quotes doubled)."""
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\r\n")
    writer.writerow(COLUMNS)
    for row in rows:
        fields = row.as_dict()
        writer.writerow([fields[name] for name in COLUMNS])
    return stream.getvalue()
