"""A string of up to 10,000 vehicles behind a leader, in time: dead times, delays, saturation, limited jerk.

    x_i' = A x_i + B u_i(t - dead) + D v_i      y_i = C x_i + N v_i      u_i = K y_i, sensor q read ``sensing[q]`` late
    v_i = strength z_{i-1}(t - delay) - own_strength z_i

Runge-Kutta of order 4 with one step for all vehicles; what is late is read from stored samples, in straight lines
between them. Without a delay the whole string is coupled inside every stage. With a limit of the jerk the command is
held over a step. All signals are differences from steady driving. The gap of a vehicle is the integral of the hop
signal ahead minus its own, added as a state here, whatever the kind calls it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.network.gains import Gains
from synth.network.hop_wish import HopWish
from synth.network.model import Kind, Link, Network
from synth.simulate.leaders import Manoeuvre

Array = NDArray[np.float64]
MOST_VEHICLES = 10_000
_MOST_STEPS = 2_000_000
_SHOWN_VEHICLES, _SHOWN_TIMES = 60, 300


@dataclass(frozen=True, eq=False)
class StringRun:
    """One run. Arrays per vehicle (the first follower first), in the units of the hop signal and seconds.

    ``peak``, ``rate``, ``jerk``: largest modulus of the hop signal, its rate of change and the rate of that (from
    differences over a step); ``gap_error``: of the offer so named (nan without one); ``least_gap``: smallest change of
    the gap from steady driving; ``saturated``, ``limited``: commands cut at their limit, or held back by the jerk.
    ``times``, ``shown``, ``signal``, ``gap``: samples to draw (times x vehicles shown).
    """

    order: tuple[str, ...]
    dt: float
    peak: Array
    rate: Array
    jerk: Array
    gap_error: Array
    least_gap: Array
    saturated: int
    limited: int
    times: Array
    shown: NDArray[np.int64]
    signal: Array
    gap: Array


class String:
    """Vehicles in the given order, ready to be run behind leaders."""

    def __init__(self, network: Network, gains: Gains, wish: HopWish, order: Sequence[str]) -> None:
        """``order``: kind of the first follower, the second, ...; InputError for unknown kinds and wrong lengths."""
        if not 1 <= len(order) <= MOST_VEHICLES:
            raise InputError(f"a string of {len(order)} vehicles cannot be run; name 2 to {MOST_VEHICLES}.")
        self.order, self.wish = tuple(order), wish
        self.signals = _signals(network, wish.signal)
        self.groups = []
        for kind in network.cell_kinds:
            at = np.array([i for i, name in enumerate(order) if name == kind.name], dtype=np.int64)
            if len(at):
                self.groups.append(_Group(kind, network.links, gains, wish, at, self.signals))
        if sum(len(group.at) for group in self.groups) != len(order):
            raise InputError("the order of the string names kinds that the cell does not have.")
        self.derivatives = _derivatives(network, wish.signal, self.signals)

    def step_for(self, asked: float | None) -> float:
        """A step that resolves every mode and fits into every dead time and delay."""
        late = sorted({lag for group in self.groups for lag in group.lags if lag > 0})
        quick = max(group.fastest for group in self.groups)
        step = min([0.05, 0.2 / max(quick, 1e-6), *late]) if asked is None else asked
        if late:  # the smallest lateness is a whole number of steps
            step = late[0] / int(np.ceil(late[0] / step - 1e-9))
        return float(step)

    def run(self, leader: Manoeuvre, seconds: float, limits: bool = True, dt: float | None = None) -> StringRun:
        """Run behind ``leader`` for ``seconds``; ``limits`` False: actuators without limits (what a claim is about)."""
        step = self.step_for(dt)
        count = int(np.ceil(seconds / step))
        if count * max(1, len(self.order) // 100) > _MOST_STEPS:
            raise InputError(
                f"{len(self.order)} vehicles over {seconds:g} s take {count} steps of {step:.3g} s, which is too much "
                "here; name fewer vehicles or a shorter time."
            )
        return _Run(self, leader, step, limits).go(count)


def _signals(network: Network, signal: str) -> tuple[str, ...]:
    """The offers that are heard, the hop signal first."""
    return tuple(dict.fromkeys([signal, *(link.offer for link in network.links)]))


def _derivatives(network: Network, signal: str, signals: tuple[str, ...]) -> tuple[bool, ...]:
    """For the leader, who is no unit: whether each signal heard is the hop signal itself or its rate of change.

    InputError for others, whose values would need a model of the leader.
    """
    found = []
    for name in signals:
        for kind in network.cell_kinds:
            hop, row = (kind.H.row(kind.index("offers", offer)) for offer in (signal, name))
            if row == hop:
                found.append(False)
            elif row == hop @ kind.A and not any((hop @ kind.B).rows[0]) and not any((hop @ kind.D).rows[0]):
                found.append(True)
            else:
                raise InputError(
                    f"a leader's {name!r} cannot be told from its {signal!r}: the offer is neither that signal nor its "
                    "rate of change, so a leader that is not one of the kinds cannot be simulated."
                )
            break
    return tuple(found)


class _Group:
    """All vehicles of one kind, as matrices."""

    def __init__(
        self,
        kind: Kind,
        links: tuple[Link, ...],
        gains: Gains,
        wish: HopWish,
        at: NDArray[np.int64],
        signals: tuple[str, ...],
    ) -> None:
        self.kind, self.at = kind, at
        self.A, self.B, self.C, self.D, self.N = (getattr(kind, name).floats() for name in ("A", "B", "C", "D", "N"))
        self.H = np.array([kind.H.floats()[kind.index("offers", name)] for name in signals])
        self.K = gains[kind.name].K.floats()
        self.late = np.array([float(wish.dead_time + wish.sensing.get(s.name, Fraction(0))) for s in kind.sensors])
        self.heard: list[tuple[int, int, float, float]] = []  # take, signal, strength, delay
        own = np.zeros((len(kind.takes), len(signals)))
        for link in links:
            if link.kind != kind.name:
                continue
            take, k = kind.index("takes", link.take), signals.index(link.offer)
            own[take, k] += float(link.own_strength)
            if not link.own_part:
                self.heard.append((take, k, float(link.strength), float(link.delay)))
        self.own = own @ self.H  # takes x states
        self.error = None if wish.gap_error is None else kind.H.floats()[kind.index("offers", wish.gap_error)]
        self.limit = np.array([np.inf if a.limit is None else float(a.limit) for a in kind.inputs])
        closed = self.A + self.B @ self.K @ self.C - (self.D + self.B @ self.K @ self.N) @ self.own
        self.fastest = float(np.abs(np.linalg.eigvals(closed)).max())
        self.lags = {float(v) for v in self.late} | {delay for *_, delay in self.heard}


class _Past:
    """Samples at whole steps, the newest last, as far back as anybody looks."""

    def __init__(self, first: Array, depth: int, step: float) -> None:
        self.ring = np.repeat(first[None], depth + 3, axis=0)
        self.newest, self.step = 0, step

    def add(self, value: Array) -> None:
        self.newest += 1
        self.ring[self.newest % len(self.ring)] = value

    def back(self, late: float, ahead: float) -> Array:
        """The value ``late`` seconds before the moment ``ahead`` (0 to 1 steps) after the newest sample."""
        place = max(late / self.step - ahead, 0.0)
        whole = int(place + 1e-9)
        share = min(max(place - whole, 0.0), 1.0)
        one = self.ring[(self.newest - whole) % len(self.ring)]
        if share < 1e-9:
            return np.asarray(one)
        return np.asarray((1 - share) * one + share * self.ring[(self.newest - whole - 1) % len(self.ring)])


class _Run:
    def __init__(self, string: String, leader: Manoeuvre, step: float, limits: bool) -> None:
        self.s, self.leader, self.step, self.limits = string, leader, step, limits
        n = len(string.order)
        self.jerk = float(string.wish.jerk) * step if limits and string.wish.jerk is not None else None
        deepest = max(lag for group in string.groups for lag in group.lags)
        depth = int(np.ceil(deepest / step)) + 1
        self.past = _Past(np.zeros((n + 1, len(string.signals))), depth, step)
        self.read = [_Past(np.zeros((len(g.at), len(g.kind.sensors))), depth, step) for g in string.groups]
        self.x = [np.zeros((len(g.at), len(g.kind.states))) for g in string.groups]
        self.gap = np.zeros(n)
        self.held = [np.zeros((len(g.at), len(g.kind.inputs))) for g in string.groups]
        self.saturated = self.limited = 0

    def offered(self, x: list[Array], t: float) -> Array:
        """Every heard signal of the leader (row 0) and of all followers."""
        z = np.empty((len(self.s.order) + 1, len(self.s.signals)))
        now = np.array([t])
        for k, rate in enumerate(self.s.derivatives):
            z[0, k] = (self.leader.slope(now) if rate else self.leader.at(now))[0]
        for group, state in zip(self.s.groups, x, strict=True):
            z[group.at + 1] = state @ group.H.T
        return z

    def taken(self, g: int, x: Array, z: Array, ahead: float) -> Array:
        """What the vehicles of a group take now."""
        group = self.s.groups[g]
        v = -x @ group.own.T
        for take, k, strength, delay in group.heard:
            source = z if delay == 0 else self.past.back(delay, ahead)
            v[:, take] += strength * source[group.at, k]
        return np.asarray(v)

    def command(self, g: int, y: Array, ahead: float, count: bool) -> Array:
        """Commands as carried out: late readings, then limits."""
        group = self.s.groups[g]
        seen = y.copy()
        for q, late in enumerate(group.late):
            if late > 0:
                seen[:, q] = self.read[g].back(float(late), ahead)[:, q]
        u = seen @ group.K.T
        if not self.limits:
            return np.asarray(u)
        cut = np.clip(u, -group.limit, group.limit)
        if count:
            self.saturated += int((np.abs(u) > group.limit).any(axis=1).sum())
        return np.asarray(cut)

    def slopes(self, x: list[Array], t: float, ahead: float) -> tuple[list[Array], Array]:
        """Rates of all states and gaps at a stage ``ahead`` steps after the newest sample."""
        z = self.offered(x, t)
        out = []
        for g, group in enumerate(self.s.groups):
            v = self.taken(g, x[g], z, ahead)
            if self.jerk is None:
                u = self.command(g, x[g] @ group.C.T + v @ group.N.T, ahead, False)
            else:
                u = self.held[g]
            out.append(x[g] @ group.A.T + u @ group.B.T + v @ group.D.T)
        return out, z[:-1, 0] - z[1:, 0]

    def advance(self, t: float) -> None:
        """One step of Runge and Kutta's method of order 4."""
        h, x = self.step, self.x
        k1, g1 = self.slopes(x, t, 0.0)
        k2, g2 = self.slopes([a + h / 2 * b for a, b in zip(x, k1, strict=True)], t + h / 2, 0.5)
        k3, g3 = self.slopes([a + h / 2 * b for a, b in zip(x, k2, strict=True)], t + h / 2, 0.5)
        k4, g4 = self.slopes([a + h * b for a, b in zip(x, k3, strict=True)], t + h, 1.0)
        self.x = [a + h / 6 * (b + 2 * c + 2 * d + e) for a, b, c, d, e in zip(x, k1, k2, k3, k4, strict=True)]
        self.gap = self.gap + h / 6 * (g1 + 2 * g2 + 2 * g3 + g4)

    def sample(self, t: float) -> Array:
        """Store what is later looked back at; the command held next; the signals of all."""
        z = self.offered(self.x, t)
        if t > 0:
            self.past.add(z)
        else:
            self.past.ring[0] = z  # before the start everything drives steadily, which is zero
        for g, group in enumerate(self.s.groups):
            v = self.taken(g, self.x[g], z, 0.0)
            y = self.x[g] @ group.C.T + v @ group.N.T
            if t > 0:
                self.read[g].add(y)
            u = self.command(g, y, 0.0, True)
            if self.jerk is not None:
                change = np.clip(u - self.held[g], -self.jerk, self.jerk)
                self.limited += int((np.abs(u - self.held[g]) > self.jerk * (1 + 1e-12)).any(axis=1).sum())
                self.held[g] = self.held[g] + change
        return z

    def go(self, count: int) -> StringRun:
        n, h = len(self.s.order), self.step
        peak, rate, jerk, least = (np.zeros(n) for _ in range(4))
        error = np.full(n, np.nan if self.s.wish.gap_error is None else 0.0)
        shown = np.unique(np.linspace(0, n - 1, min(n, _SHOWN_VEHICLES)).round().astype(np.int64))
        every = max(1, count // _SHOWN_TIMES)
        times, signal, gaps = [], [], []
        before = slope = np.zeros(n)
        for k in range(count + 1):
            z = self.sample(k * h)[1:, 0]
            if not np.all(np.isfinite(z)) or np.abs(z).max() > 1e12:
                raise InputError("the string diverges under these gains, so it cannot be run in time.")
            new = (z - before) / h
            peak, rate = np.maximum(peak, np.abs(z)), np.maximum(rate, np.abs(new))
            jerk = np.maximum(jerk, np.abs(new - slope) / h)
            least = np.minimum(least, self.gap)
            for group, x in zip(self.s.groups, self.x, strict=True):
                if group.error is not None:
                    error[group.at] = np.maximum(error[group.at], np.abs(x @ group.error))
            if k % every == 0:
                times.append(k * h)
                signal.append(z[shown])
                gaps.append(self.gap[shown])
            before, slope = z, new
            if k < count:
                self.advance(k * h)
        return StringRun(
            self.s.order, h, peak, rate, jerk, error, least, self.saturated, self.limited,
            np.array(times), shown, np.array(signal), np.array(gaps),
        )  # fmt: skip
