"""Local feedback gains for large networks of coupled machines, with a proof that holds however many there are.

    network = synth.read("convoy.yaml")
    design = synth.design(network)
    certificate = synth.prove(network, design)
    margin = synth.margin(network, design)
    run = synth.simulate(network, design, certificate)
    bundle = synth.hand_off(network, design, certificate, "bundle")
    synth.verify("certificate.json")

The names are looked up when first used, so that importing this package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth import margin as margin
    from synth import simulate as simulate
    from synth.handoff.bundle import hand_off as hand_off
    from synth.local import design as design
    from synth.network.reader import read as read
    from synth.proof.build import prove as prove
    from synth.proof.certificate import verify as verify

# `synth.margin` and `synth.simulate` are stages *and* the call that runs them: those two packages are callable.
_WHERE = {
    "read": "synth.network",
    "design": "synth.local",
    "prove": "synth.proof",
    "verify": "synth.proof",
    "hand_off": "synth.handoff",
}

__all__ = ["design", "hand_off", "margin", "prove", "read", "simulate", "verify"]


def __getattr__(name: str) -> Any:
    """Import a public call, or a callable stage, the first time it is asked for."""
    if name in _WHERE:
        return getattr(import_module(_WHERE[name]), name)
    if name in ("margin", "simulate"):
        return import_module(f"synth.{name}")
    raise AttributeError(f"module 'synth' has no attribute {name!r}")


def __dir__() -> list[str]:
    """The public names."""
    return sorted(__all__)
