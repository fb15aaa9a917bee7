"""Local gains for a string that sees only gaps: the smallest time gap whose hop claim is proven.

The time gap a string keeps is -T'(0): so much later does a follower repeat what its predecessor did. It follows from
the gains, so nothing about it need be declared. The search works on fast estimates of the hop (values of T on a grid of
frequencies, one inverse transform) and is trusted in nothing: its gains are rounded, and the hop claim, the limits and
the modes of what was rounded are then decided exactly (synth.gain.hop). Where that fails the search is repeated with
every limit a little tighter.

Search: differential evolution (Storn and Price 1997), then a simplex (Nelder and Mead 1965); the penalties are ours.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError, SynthError
from synth.base.exact import ExactMatrix, Number, exact
from synth.gain.dead_time import DelayLoop
from synth.gain.dead_time_kernel import peak_of_response
from synth.gain.dead_time_roots import UndecidedError, zeros_right_of
from synth.gain.hop import MEAN_SQUARE, MEANING, NOT_ISS, PEAK, HopGains, hop_gains
from synth.gain.hop_network import HopLoop, hop_loops
from synth.local.region import inside_disc
from synth.network.gains import Gains, gain_set
from synth.network.model import Kind, Network

Array = NDArray[np.float64]

_SAMPLES = 500
_WEIGHT = 200.0  # of a broken limit, in the unit of the time gap
_LIGHT = 4.0  # of the same while the search is global
_MARGINS = (0.003, 0.01, 0.03)
_WIDEST = 50.0  # bound of a gain the user did not bound


@dataclass(frozen=True)
class HopDesign:
    """Gains of a string and the hop claim proven for them.

    ``time_gaps``: kind -> -T'(0) in seconds, exact; ``hops``: everything proven; ``claim`` as asked for, or weaker;
    ``reached``: whether the claim asked for and every limit was proven; ``notes``: what was not.
    """

    gains: Gains
    notion: str
    time_gaps: Mapping[str, Fraction]
    hops: HopGains
    reached: bool
    notes: tuple[str, ...]

    @property
    def claim(self) -> str:
        """What is proven: 'peak', 'mean square' or 'none'."""
        return self.hops.claim

    def as_json(self) -> dict[str, object]:
        """Plain data, with the cautions."""
        return {
            "notion": self.notion,
            "claim": self.claim,
            "reached": self.reached,
            "time_gaps": {name: float(value) for name, value in self.time_gaps.items()},
            "gains": {name: found.as_dict() for name, found in self.gains.items()},
            "hops": self.hops.as_json(),
            "notes": list(self.notes),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """The answer in words."""
        gaps = ", ".join(f"{name} {float(value):.4g} s" for name, value in self.time_gaps.items())
        first = f"Time gap kept: {gaps}. " + MEANING[self.claim]
        return "\n".join([first, *(f"Note: {note}" for note in self.notes), NOT_ISS]) + "\n"


def hop_design(
    network: Network,
    notion: str = PEAK,
    dead_time: Number = 0,
    sensing: Mapping[str, Number] | None = None,
    most_jerk: Number | None = None,
    seed: int = 0,
) -> HopDesign:
    """Gains that keep the smallest time gap found, with the hop claim of ``notion`` proven for any order of the kinds.

    Honoured of the goal: ``gain_bounds``, ``uses``, ``slowest``, ``fastest`` (the disc, of the loop with every dead
    time at zero). ``most_jerk``: largest rate of the unit's own acceleration per unit of the predecessor's, 1/s (the
    acceleration itself never exceeds the leader's under the peak claim). Gains without a bound stay within 50.
    Raises InputError where the string is none, where kinds have several actuators, or hops depend on the pair.
    """
    if notion not in (PEAK, MEAN_SQUARE):
        raise InputError(f"the notion is {notion!r}; accepted are 'peak' and 'mean square'.")
    late = {name: exact(value) for name, value in (sensing or {}).items()}
    rate = None if most_jerk is None else exact(most_jerk)
    task = _Task(network, notion, exact(dead_time), late, rate)
    found: Gains | None = None
    notes: list[str] = []
    chosen = {kind.name: task.start(kind) for kind in network.cell_kinds}
    first: dict[str, Kind] = {}
    for kind in network.cell_kinds:
        twin = first.setdefault(kind.group, kind)
        if twin is kind:
            chosen[kind.name], why = _designed(task, chosen, kind, seed)
        else:  # one gain set for several places of the cell: found at the first, checked at every other
            chosen[kind.name] = list(chosen[twin.name])
            why = _unproven(task, task.loop(chosen, kind))
        notes += why
    found = task.gains(chosen)
    hops = hop_gains(network, found, dead_time=dead_time, sensing=sensing, any_order=True)
    gaps = {hop.kind: time_gap(hop.loop.loop) for hop in hops.hops}
    order = {"none": 0, MEAN_SQUARE: 1, PEAK: 2}
    return HopDesign(found, notion, gaps, hops, order[hops.claim] >= order[notion] and not notes, tuple(notes))


def time_gap(loop: DelayLoop) -> Fraction:
    """-T'(0)/T(0) in seconds, exactly: how much later a follower repeats a slow change of its predecessor."""
    num, den = loop.transfer("hop")
    n, d = num.taylor(1), den.taylor(1)
    return d[1] / d[0] - n[1] / n[0]


class _Task:
    """What is asked for, and the way from numbers to loops."""

    def __init__(
        self,
        network: Network,
        notion: str,
        dead_time: Fraction,
        sensing: dict[str, Fraction],
        most_jerk: Fraction | None,
    ) -> None:
        self.network, self.notion, self.most_jerk = network, notion, most_jerk
        self.dead_time, self.sensing = dead_time, sensing
        groups: dict[str, Kind] = {}
        for kind in network.cell_kinds:
            if kind.sensors != groups.setdefault(kind.group, kind).sensors:
                raise InputError(f"{kind.name!r} shares its gains with a kind that has other sensors.")
            if len(kind.inputs) != 1:
                raise InputError(f"{kind.name!r} has {len(kind.inputs)} actuators; the hop design takes exactly one.")

    def free(self, kind: Kind) -> list[int]:
        """The sensors whose gains are free."""
        actuator = kind.inputs[0].name
        uses = self.network.goal.uses.get(kind.name, {}).get(actuator)
        bounds = self.network.goal.gain_bounds.get(kind.name, {}).get(actuator, {})
        return [
            q
            for q, sensor in enumerate(kind.sensors)
            if (uses is None or sensor.name in uses) and bounds.get(sensor.name, 1) != 0
        ]

    def box(self, kind: Kind) -> list[float]:
        """The largest modulus of every free gain."""
        bounds = self.network.goal.gain_bounds.get(kind.name, {}).get(kind.inputs[0].name, {})
        return [float(bounds.get(kind.sensors[q].name, Fraction(_WIDEST))) for q in self.free(kind)]

    def start(self, kind: Kind) -> list[Fraction]:
        """Zero gains."""
        return [Fraction(0)] * len(self.free(kind))

    def gains(self, chosen: Mapping[str, list[Fraction]]) -> Gains:
        """Gains of all kinds."""
        sets = []
        for kind in self.network.cell_kinds:
            row = [Fraction(0)] * len(kind.sensors)
            for q, value in zip(self.free(kind), chosen[kind.name], strict=True):
                row[q] = value
            sets.append(gain_set(kind, ExactMatrix.of([row])))
        return Gains(tuple(sets))

    def loop(self, chosen: Mapping[str, list[Fraction]], kind: Kind) -> HopLoop:
        """The hop of one kind; InputError if it depends on whom it follows."""
        _, loops = hop_loops(self.network, self.gains(chosen), None, self.dead_time, self.sensing, any_order=True)
        mine = [hop for hop in loops if hop.kind == kind.name]
        if len(mine) > 1:
            raise InputError(
                f"what a {kind.name} does depends on the kind it follows, so its gains cannot be designed by itself; "
                "offer the same derivatives of the hop signal in every kind."
            )
        return mine[0]

    def broken(self, hop: HopLoop, margin: float = 0.0) -> list[str]:
        """The limits that are not proven to hold (the claim itself is looked at elsewhere)."""
        goal, loop = self.network.goal, hop.loop
        out = []
        if goal.slowest is not None:
            try:
                quick = zeros_right_of(loop.characteristic, goal.slowest) == 0
            except UndecidedError:
                quick = False
            if not quick:
                out.append(f"a mode of {hop.kind} decays slower than {float(goal.slowest):g} 1/s")
        if goal.fastest is not None and not inside_disc(_undelayed(loop), goal.fastest):
            out.append(f"a mode of {hop.kind} is faster than {float(goal.fastest):g} 1/s")
        if self.most_jerk is not None:
            found = peak_of_response(_with_rate(loop), "rate", 1e-4)
            if not found.upper <= self.most_jerk:
                out.append(f"the jerk of {hop.kind} is {found.upper:.4g} per unit of acceleration ahead")
        return out


def _undelayed(loop: DelayLoop) -> list[Fraction]:
    """Characteristic polynomial with every dead time at zero, highest power first."""
    total = [Fraction(0)] * (loop.size + 1)
    for row in loop.characteristic.terms.values():
        for i, c in enumerate(row):
            total[i] += c
    return total[::-1]


def _with_rate(loop: DelayLoop) -> DelayLoop:
    """The loop with the outlet 'rate': the derivative of the hop signal without what enters it directly."""
    row = loop.H["hop"] @ loop.now
    through: dict[Fraction, Fraction] = {}
    for d, column in loop.D.items():
        value = (loop.H["hop"] @ column)[0, 0]
        if value:
            through[d] = value
    return DelayLoop(loop.A, loop.D, {**loop.H, "rate": row}, {**loop.F, "rate": through} if through else loop.F)


def _designed(
    task: _Task, chosen: dict[str, list[Fraction]], kind: Kind, seed: int
) -> tuple[list[Fraction], list[str]]:
    """Gains of one kind, and what could not be proven of them."""
    estimate = _Estimate(task, chosen, kind)
    box = task.box(kind)
    # Several short searches, each finished by a simplex, find more than one long one.
    tries = [_search(estimate, box, seed + 1000 * i, _LIGHT if i else _WEIGHT) for i in range(3)]
    best: tuple[list[Fraction], list[str]] | None = None
    for point in sorted(tries, key=estimate):
        for margin in _MARGINS:
            estimate.margin = margin
            for weight in (4 * _LIGHT, _WEIGHT):
                estimate.weight = weight
                point = _polished(estimate, point, box)
            values = [Fraction(f"{value:.6g}") for value in point]
            why = _unproven(task, task.loop({**chosen, kind.name: values}, kind))
            if best is None or len(why) < len(best[1]):
                best = (values, why)
            if not why:
                return values, why
        estimate.margin = 0.0
    assert best is not None
    return best


def _unproven(task: _Task, hop: HopLoop) -> list[str]:
    from synth.gain.hop import hop_of

    try:
        found = hop_of(replace(hop, disturbances={}), 1e-5)
        broken = task.broken(hop)
    except SynthError as reason:
        return [str(reason)]
    good = found.claim == PEAK or (task.notion == MEAN_SQUARE and found.claim == MEAN_SQUARE)
    return broken if good else [f"the hop claim for {hop.kind} is not proven", *broken]


class _Estimate:
    """Time gap plus penalties in doubles, for gains of one kind; smaller is better."""

    def __init__(self, task: _Task, chosen: dict[str, list[Fraction]], kind: Kind) -> None:
        """Read the loop as an affine function of the gains, from the exact loops at zero and at each unit gain."""
        self.task, self.margin, self.weight = task, 0.0, _WEIGHT
        zero = task.start(kind)
        self.base = task.loop({**chosen, kind.name: zero}, kind).loop
        self.units = []
        for i in range(len(zero)):
            unit = list(zero)
            unit[i] = Fraction(1)
            self.units.append(task.loop({**chosen, kind.name: unit}, kind).loop)
        goal = task.network.goal
        self.fastest = None if goal.fastest is None else float(goal.fastest)
        self.slowest = float(goal.slowest) if goal.slowest is not None else 0.02
        self.row = self.base.H["hop"].floats()[0]
        self.parts = {b: self._affine(b, "A") for b in {d for u in (self.base, *self.units) for d in u.A}}
        self.inlets = {b: self._affine(b, "D") for b in {d for u in (self.base, *self.units) for d in u.D}}

    def _affine(self, delay: Fraction, part: str) -> tuple[Array, Array]:
        n = self.base.size
        empty = ExactMatrix.zeros(n, n if part == "A" else 1)
        first = getattr(self.base, part).get(delay, empty).floats()
        slopes = [getattr(unit, part).get(delay, empty).floats() - first for unit in self.units]
        return first, np.array(slopes)

    def __call__(self, gains: Array) -> float:
        """The number to make small."""
        A = {b: first + np.tensordot(gains, slopes, 1) for b, (first, slopes) in self.parts.items()}
        D = {b: (first + np.tensordot(gains, slopes, 1))[:, 0] for b, (first, slopes) in self.inlets.items()}
        D.setdefault(Fraction(0), np.zeros(self.base.size))
        whole = np.sum(list(A.values()), axis=0)
        modes = np.linalg.eigvals(whole)
        slow = float(-modes.real.max())
        lag = self.slowest * (1 + self.margin) - slow
        if slow <= 1e-6 or lag > 0.5 * self.slowest:
            return 1e3 * (1 + max(0.0, lag))
        over = max(0.0, lag / self.slowest)
        if self.fastest is not None:
            over += max(0.0, float(np.abs(modes).max()) / (self.fastest * (1 - self.margin)) - 1)
        far = float(np.abs(modes).max())
        late = max((float(b) for b in (*A, *D)), default=0.0)
        shape = (
            self._late(A, D, 30 / slow + 4 * late, far) if late else self._undelayed(whole, D[Fraction(0)], slow, far)
        )
        if shape is None:
            return 1e3
        if self.task.notion == PEAK:
            over += max(0.0, shape.excess - 1e-7) + shape.thin(slow, self.margin)
        else:
            over += max(0.0, shape.louder + 1e-6 + 0.1 * self.margin)
        if self.task.most_jerk is not None:
            over += max(0.0, shape.jerk / (float(self.task.most_jerk) * (1 - self.margin)) - 1)
        return shape.gap + self.weight * over

    def _undelayed(self, A: Array, D: Array, slow: float, far: float) -> _Shape | None:
        """From modes and residues, on a grid of times and one of frequencies that suit them."""
        modes, V = np.linalg.eig(A)
        try:
            residues = (self.row @ V) * np.linalg.solve(V, D.astype(complex))
        except np.linalg.LinAlgError:
            return None
        steady = -(residues / modes).sum().real
        if steady <= 0:
            return None
        times = np.sinh(np.linspace(0, np.arcsinh(30 * far / slow), _SAMPLES)) / far
        waves = np.exp(modes[:, None] * times)
        kernel = (residues @ waves).real / steady
        w = np.geomspace(slow / 100, 30 * far, 400)
        T = np.abs((residues[:, None] / (1j * w - modes[:, None])).sum(axis=0)) / steady
        slope = np.abs(((residues * modes) @ waves).real)
        return _Shape(
            times,
            kernel,
            2 * float(np.trapezoid(np.maximum(-kernel, 0), times)),
            float(((T - 1) * (1 + (far / w) ** 2)).max()),
            float(np.trapezoid(slope, times) + abs(self.row @ D)),
            float((residues / modes**2).sum().real) / steady,
        )

    def _late(self, A: dict[Fraction, Array], D: dict[Fraction, Array], end: float, far: float) -> _Shape | None:
        """From values of T on the imaginary axis by one inverse transform."""
        count = 1 << min(13, max(9, math.ceil(math.log2(end * far * 5))))
        s = 2j * np.pi * np.fft.rfftfreq(count, end / count)
        n = len(self.row)
        left = s[:, None, None] * np.eye(n) - np.sum(
            [np.exp(-s * float(b))[:, None, None] * part for b, part in A.items()], axis=0
        )
        right = np.sum([np.exp(-s * float(d))[:, None] * column for d, column in D.items()], axis=0)
        T = np.linalg.solve(left, right[:, :, None])[:, :, 0] @ self.row
        times, step = np.asarray(np.arange(count) * (end / count), dtype=np.float64), end / count
        kernel = np.fft.irfft(T, count) / step
        tail = float(np.abs(kernel[-count // 16 :]).max())
        # A hint only: the response of an unstable loop does not vanish before it starts.
        if not (np.all(np.isfinite(kernel)) and tail < 0.05 * float(np.abs(kernel).max())):
            return None
        w = s.imag[1:]
        return _Shape(
            times,
            kernel,
            float(np.abs(kernel).sum() * step) - 1 - 1e-6,
            float(((np.abs(T[1:]) - 1) * (1 + (far / w) ** 2)).max()),
            float(np.abs(np.fft.irfft(s * T, count)).sum()),
            float((times * kernel).sum() * step),
        )


@dataclass(frozen=True, eq=False)
class _Shape:
    """Estimates of one hop: kernel over time, |T|_1 - 1, how far |T| is above 1, jerk, time gap."""

    times: Array
    kernel: Array
    excess: float
    louder: float
    jerk: float
    gap: float

    def thin(self, slow: float, margin: float) -> float:
        """How far the kernel, with its slowest decay taken out, comes too near to zero after its largest value."""
        if not margin:
            return 0.0
        seen = slow * self.times < 12
        weighted = (self.kernel * np.exp(np.minimum(slow * self.times, 12.0)))[seen]
        top = int(np.argmax(weighted))
        return max(0.0, margin - float(weighted[top:].min() / max(float(weighted[top]), 1e-300)))


def _signed(point: Array, box: Array) -> Array:
    """From [-1, 1] to gains: cubes, so that small and large gains are searched alike."""
    return np.asarray(point**3 * box)


def _search(estimate: _Estimate, box: list[float], seed: int, light: float) -> Array:
    """A global search with light penalties, along whose valleys it can move, then simplices with heavier ones."""
    estimate.weight = light
    point = _global(estimate, box, seed)
    for weight in (light, _WEIGHT):
        estimate.weight = weight
        point = _polished(estimate, point, box)
    return point


def _global(estimate: _Estimate, box: list[float], seed: int) -> Array:
    from scipy.optimize import differential_evolution

    size = np.array(box)

    def call(x: Array) -> float:
        return estimate(_signed(x, size))

    found: Any = differential_evolution(
        call,
        [(-1.0, 1.0)] * len(box),  # type: ignore[arg-type]
        seed=seed,
        popsize=10,
        maxiter=60,
        tol=1e-6,
        polish=False,
        init="sobol",
    )
    return _signed(np.asarray(found.x), size)


def _polished(estimate: _Estimate, point: Array, box: list[float]) -> Array:
    size = np.array(box)
    for _ in range(3):
        scale = np.maximum(np.abs(point), 1e-3 * size)
        after = _simplex(lambda x, scale=scale: estimate(np.clip(x * scale, -size, size)), point / scale)  # type: ignore[misc]
        after = np.clip(after * scale, -size, size)
        if math.isclose(estimate(after), estimate(point), rel_tol=1e-5):
            return np.asarray(after)
        point = after
    return np.asarray(point)


def _simplex(call: Callable[[Array], float], start: Array) -> Array:
    from scipy.optimize import minimize

    options = {"maxfev": 500, "xatol": 1e-7, "fatol": 1e-7}
    return np.asarray(minimize(call, start, method="Nelder-Mead", options=options).x, dtype=np.float64)  # type: ignore[call-overload]
