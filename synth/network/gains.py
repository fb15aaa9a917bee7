"""Gains of the local controllers: u = K y for each kind, exact, with the names of both sides."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from synth.base.exact import ExactMatrix
from synth.network.model import Kind


@dataclass(frozen=True)
class GainSet:
    """K of one kind: row per actuator, column per sensor, entry in (actuator unit)/(sensor unit); u = K y."""

    kind: str
    actuators: tuple[str, ...]
    signals: tuple[str, ...]
    K: ExactMatrix

    def as_dict(self) -> dict[str, object]:
        """Plain data for JSON; K as nearest doubles."""
        return {"signals": list(self.signals), "actuators": list(self.actuators), "K": self.K.floats().tolist()}


@dataclass(frozen=True)
class Gains(Mapping[str, GainSet]):
    """One gain set per kind, looked up by the kind's name."""

    sets: tuple[GainSet, ...]

    def __getitem__(self, kind: str) -> GainSet:
        """The gain set of that kind; KeyError if it has none."""
        for gain_set in self.sets:
            if gain_set.kind == kind:
                return gain_set
        raise KeyError(kind)

    def __iter__(self) -> Iterator[str]:
        """Kind names in network order."""
        return (gain_set.kind for gain_set in self.sets)

    def __len__(self) -> int:
        """Number of kinds."""
        return len(self.sets)


def gain_set(kind: Kind, K: ExactMatrix) -> GainSet:
    """Gain set of ``kind`` with the matrix ``K`` (inputs x sensors); ValueError if the shape does not fit."""
    expected = (len(kind.inputs), len(kind.sensors))
    if K.shape != expected:
        raise ValueError(f"K of {kind.name} must have shape {expected}, not {K.shape}")
    return GainSet(kind.name, tuple(a.name for a in kind.inputs), tuple(s.name for s in kind.sensors), K)
