"""Thinned samples of a march, cut into kinds: what a trajectory keeps to look at."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.simulate.model import Array, Section
from synth.simulate.stepper import Block

BUDGET = 40e6  # bytes of samples kept over all runs of one simulation
GROUPS = {"states": "states", "offers": "offers", "actuators": "inputs", "disturbances": "disturbances"}


@dataclass
class Recorder:
    """Keeps every ``stride``-th step of a march; ``offset`` in s is added to its times."""

    section: Section
    stride: int
    offset: float = 0.0
    times: list[Array] = field(default_factory=list)
    kept: dict[str, list[Array]] = field(default_factory=lambda: {group: [] for group in GROUPS})

    def __call__(self, block: Block) -> None:
        """Keep the samples of this block that fall on the stride (copies)."""
        chosen = np.flatnonzero((block.first + 1 + np.arange(len(block.times))) % self.stride == 0)
        if not chosen.size:
            return
        self.times.append(block.times[chosen] + self.offset)
        for group, values in (
            ("states", block.x),
            ("offers", block.z1),
            ("actuators", block.y1),
            ("disturbances", block.w),
        ):
            self.kept[group].append(values[chosen])

    def samples(self, run: int) -> tuple[Array, dict[str, dict[str, Array]]]:
        """(times, group -> kind -> [sample, cell, signal]) of one run."""
        times = np.concatenate(self.times) if self.times else np.zeros(0)
        found: dict[str, dict[str, Array]] = {}
        for group, source in GROUPS.items():
            found[group] = {}
            for kind, (low, high) in _ranges(self.section, source).items():
                if self.times:
                    parts = [values[:, low:high, :, run] for values in self.kept[group]]
                    joined = np.concatenate(parts).transpose(0, 2, 1)
                    where = self.section.where
                    found[group][kind] = np.ascontiguousarray(joined if where is None else joined[:, where[kind]])
                else:
                    units = self.section.cells if self.section.where is None else len(self.section.where[kind])
                    found[group][kind] = np.zeros((0, units, high - low))
        return times, found


def _ranges(section: Section, group: str) -> dict[str, tuple[int, int]]:
    ranges: dict[str, tuple[int, int]] = getattr(section.shape, group)
    return ranges


def stride_for(section: Section, steps: int, runs: int) -> int:
    """The stride that keeps ``runs`` runs of ``steps`` steps within BUDGET, at most about 1000 samples each."""
    n, _, nw, _, nz, ny = section.block.sizes
    per_sample = 8.0 * section.cells * (n + nw + nz + ny)
    samples = max(2, min(1000, int(BUDGET / (per_sample * max(runs, 1)))))
    return max(1, -(-steps // samples))
