"""From a network and its gains to a certificate that anyone can re-check with the standard library alone.

In come a network and exact gains; out goes a claim with printed numbers, its evidence, and the verdict of the checker.
It stands on the small-gain theorem in the sup norm (theory: sections 2, 3 and 10); proven means that check.py accepted.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.network.rounding import Rounding as Rounding
    from synth.proof.build import prove as prove
    from synth.proof.certificate import Certificate as Certificate
    from synth.proof.certificate import Verification as Verification
    from synth.proof.certificate import verify as verify
    from synth.proof.firmware import prove_firmware as prove_firmware
    from synth.proof.hop_statement import HopStatement as HopStatement
    from synth.proof.hop_statement import prove_hop as prove_hop

_HOMES = {
    "Certificate": "certificate",
    "HopStatement": "hop_statement",
    "Rounding": "firmware",
    "Verification": "certificate",
    "prove": "build",
    "prove_firmware": "firmware",
    "prove_hop": "hop_statement",
    "verify": "certificate",
}

__all__ = list(_HOMES)


def __getattr__(name: str) -> object:
    """Import a public name when it is first used, so that importing the package stays light."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
