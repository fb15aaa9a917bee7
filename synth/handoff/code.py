"""What the code must do beside the gains, as data: states that controllers keep, and what is rounded."""

from __future__ import annotations

from fractions import Fraction

from synth.base.exact import exact
from synth.handoff.table import exact_text
from synth.network.controller import firmware_rows, innovation_rows
from synth.network.model import Network
from synth.network.rounding import Rounding

Parts = tuple[tuple[str, Fraction], ...]
UPDATE = "once per period: state = state + period * rate, the rate from the sample and the command of that sample"


def controllers(network: Network) -> dict[str, object]:
    """Per kind that keeps states: its innovations and the fixed part of each state's rate, factors as exact text.

    Rates are per second in declared units; what gains add to a rate is the actuator of that name among the rows.
    """
    found: dict[str, object] = {}
    for kind in network.kinds:
        rates = firmware_rows(kind)
        if rates:
            found[kind.name] = {
                "start": "zero",
                "update": UPDATE,
                "innovation_rows": [_row(name, parts) for name, parts in innovation_rows(kind)],
                "firmware_rows": [_row(name, parts) for name, parts in rates],
            }
    return found


def _row(name: str, parts: Parts) -> dict[str, object]:
    return {"of": name, "sum": [{"signal": signal, "factor": exact_text(factor)} for signal, factor in parts]}


def rounding_document(rounding: Rounding) -> dict[str, object]:
    """What is rounded, as exact texts by "kind.signal"; nothing that is not named is rounded."""
    groups = ("sensors", "commands", "products", "stored")
    found: dict[str, object] = {
        name: {key: exact_text(exact(value)) for key, value in getattr(rounding, name).items()} for name in groups
    }
    words = None if rounding.word is None else {"word": rounding.word, "fraction": rounding.fraction}
    return {**found, "form": rounding.form, "gains": words}
