"""Simulation of everything that is run unit by unit: members, edges, rules, fields, links that weaken."""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, isfinite
from typing import Any

import numpy as np

from synth.base.progress import Listener
from synth.network.gains import Gains
from synth.network.model import Network
from synth.simulate.model import Array, Section
from synth.simulate.prepare import INSIDE, Job, prepare
from synth.simulate.unit_attacks import attack_late_units, attack_units, attack_weakening, wired_attack
from synth.simulate.unit_runs import Collect, march_units, run_wired
from synth.simulate.units import build_units


@dataclass(frozen=True)
class Asked:
    """What a person asked for: size, length in s, seed, scenarios, whether actuators stop at their limits."""

    cells: int
    seconds: float
    seed: int
    scenarios: tuple[str, ...]
    saturate: bool


def run_units(
    network: Network, gains: Gains, certificate: Any, ask: Asked, collect: Collect, progress: Listener
) -> Job:
    """All runs that were asked for; the job holds what they found. Raises what build_units raises."""
    wired = network.without_self_links()
    found = build_units(wired, gains, ask.cells, ask.seed)
    job = prepare(found.section, certificate, ask.seconds, ask.saturate, progress)
    run_wired(found, job, ask.scenarios, ask.seed, collect)
    steps = ceil(job.seconds / float(job.step))
    if "adversary" in ask.scenarios:
        if found.section.peaks.any():
            progress("finding the worst disturbance for the links as wired")
            march_units(found, job, wired_attack(found, job, steps), steps, collect)
            attack_weakening(found, job, steps, collect)
        moved = any(link.sort != "link" for link in network.links) or network.description == "rules"
        everything = build_units(network, gains, ask.cells, ask.seed, full=True) if moved else found
        for title, amplitude, scale in attack_sizes(job, everything.section):
            job.progress(f"adversary over every admitted link behaviour ({title})")
            attack_units(everything, job, amplitude, scale, title, collect)
        attack_late_units(found, job, collect)
    if "written" in ask.scenarios and any(kind.dynamics is not None for kind in network.kinds):
        job.notes.append(
            "equations as written are run for lines of fixed links only; here nonlinear terms stand on their centre "
            "lines, and the adversary over the class moves them freely within their ranges"
        )
    if "held" in ask.scenarios and network.goal.period is not None:
        job.notes.append("the sampled and held controller is run for lines of fixed links only")
    return job


def attack_sizes(job: Job, section: Section) -> list[tuple[str, Array, float | None]]:
    """With the declared peaks and, where it differs, with equal sizes for G: title, amplitude, scale."""
    found: list[tuple[str, Array, float | None]] = []
    if not section.block.sizes[2]:
        return found
    if section.peaks.any():
        found.append(("any links", job.amplitude, job.scale))
    if len(set(section.peaks)) > 1 or not section.peaks.any():
        size = job.claim.w * INSIDE if job.claim is not None and isfinite(job.claim.w) else 1.0
        found.append(("any links, equal disturbances", np.full(len(section.peaks), size), None))
    return found
