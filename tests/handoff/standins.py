"""Small objects with the interface of a certificate, for tests that are about the folder and not about the proof."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path
from types import SimpleNamespace
from typing import Any

from synth.network.gains import Gains
from synth.network.model import Network

NORM = "maximum over states and units, declared units"


@dataclass(frozen=True)
class Peak:
    kind: str
    role: str
    signal: str
    value: float
    unit: str
    limit: float | None = None


def convoy_peaks() -> tuple[Peak, ...]:
    """Invented numbers, easy to recognise in an output."""
    return (
        Peak("hauler", "state", "slot", 0.4321, "m"),
        Peak("hauler", "state", "speed", 0.7, "m/s"),
        Peak("hauler", "state", "drive", 1.25, "m/s^2"),
        Peak("hauler", "offer", "place", 0.4321, "m", 1.5),
        Peak("hauler", "actuator", "demand", 2.125, "m/s^2", 2.5),
    )


@dataclass(frozen=True)
class FakeCertificate:
    """A certificate that claims what it is told to claim."""

    network: Network
    gains: Gains
    proven: bool = True
    route: str = "peak"
    claim: str = "Every signal stays bounded and decays, for any number of haulers."
    radius: Any = field(default_factory=lambda: SimpleNamespace(lower=0.61234, upper=0.61239))
    target: float | None = 0.9
    constants: Any = field(default_factory=lambda: SimpleNamespace(C=12.5, alpha=0.125, G=3.75, norm=NORM))
    peaks: tuple[Peak, ...] = field(default_factory=convoy_peaks)
    validity: Any = field(
        default_factory=lambda: SimpleNamespace(X0=0.0625, w=0.34375, factor=1.1456, meaning="as said")
    )
    covers: tuple[str, ...] = ("Links that are up to 0.1 s late.", "Any number of units.")
    excludes: tuple[str, ...] = ("Sampling of the controllers.",)
    reasons: tuple[str, ...] = ()
    hash: str = "c" * 64

    @property
    def document(self) -> dict[str, Any]:
        return {
            "network_hash": self.network.hash,
            "gains": [
                {"kind": g.kind, "actuators": list(g.actuators), "signals": list(g.signals), "K": g.K.texts()}
                for g in self.gains.sets
            ],
            "peaks": [
                {"kind": p.kind, "role": p.role, "signal": p.signal, "value": repr(p.value), "in": p.unit}
                for p in self.peaks
            ],
        }

    def save(self, path: str | Path) -> None:
        Path(path).write_text(json.dumps(self.document, sort_keys=True) + "\n", encoding="utf-8")
