"""The equations of a kind as they were written, nonlinear terms included, for the simulator.

Everything counts in declared units and as deviation from the operating point; formulas come from the whitelisted
parser, and no text is evaluated.

Law: where no term is nonlinear and no parameter uncertain, ``rate`` is A x + B u + D v + E w.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING, Any

from synth.network.formula import Factor, Formula

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

Names = tuple[tuple[str, Fraction], ...]  # signals of one group, each with the SI value of its declared unit
Evaluation = Callable[[Mapping[str, Any]], Any]


@dataclass(frozen=True)
class Dynamics:
    """x' = f(x, u, v, w), z and y of one kind; the groups hold the signals the user declared (no internal ones).

    ``point`` is the operating point in SI units, ``ranges`` the lowest, nominal and highest value of every parameter
    with a tolerance, in SI units; ``residual`` the largest |f| left at the operating point, in parts of its terms.
    """

    states: Names
    inputs: Names
    takes: Names
    disturbances: Names
    offers: Names
    sensors: Names
    rates: tuple[Formula, ...]
    offered: tuple[Formula, ...]
    read: tuple[Formula, ...]
    point: Mapping[str, Fraction]
    ranges: Mapping[str, tuple[Fraction, Fraction, Fraction]] = field(default_factory=dict)
    residual: float = 0.0

    def rate(
        self,
        x: Floats | Sequence[float],
        u: Floats | Sequence[float] = (),
        v: Floats | Sequence[float] = (),
        w: Floats | Sequence[float] = (),
        parameters: Mapping[str, Any] | None = None,
    ) -> Floats:
        """x' (states first axis, declared units per second) at deviations x, u, v, w of shape (number, ...).

        ``parameters`` gives values within their tolerance (SI units, numbers or arrays over the units); nominal values
        stand for those left out. NaN where a formula is not defined.
        """
        names = self._names(x, u, v, w, parameters)
        return self._stacked(self._rates, self.states, names, {})

    def offers_at(
        self,
        x: Floats | Sequence[float],
        v: Floats | Sequence[float] = (),
        w: Floats | Sequence[float] = (),
        parameters: Mapping[str, Any] | None = None,
    ) -> Floats:
        """The user's offered signals as deviations from their operating values."""
        names = self._names(x, (), v, w, parameters)
        return self._stacked(self._offered, self.offers, names, self.operating["offers"])

    def sensors_at(
        self,
        x: Floats | Sequence[float],
        v: Floats | Sequence[float] = (),
        parameters: Mapping[str, Any] | None = None,
    ) -> Floats:
        """The readings of the sensors as deviations from their operating values."""
        names = self._names(x, (), v, (), parameters)
        return self._stacked(self._read, self.sensors, names, self.operating["sensors"])

    @cached_property
    def operating(self) -> dict[str, dict[str, float]]:
        """The operating value of every signal in its declared unit, by group and name."""
        found = {
            group: {name: float(self.point[name] / factor) for name, factor in getattr(self, group)}
            for group in ("states", "inputs", "takes", "disturbances")
        }
        import numpy as np

        rest = {name: np.float64(value) for name, value in self.point.items()}
        rest |= {name: np.float64(nominal) for name, (_, nominal, _) in self.ranges.items()}
        for group, formulas in (("offers", self._offered), ("sensors", self._read)):
            names: Names = getattr(self, group)
            with np.errstate(all="ignore"):
                found[group] = {n: float(f(rest)) / float(k) for f, (n, k) in zip(formulas, names, strict=True)}
        return found

    @cached_property
    def _rates(self) -> tuple[Evaluation, ...]:
        return tuple(compiled(formula) for formula in self.rates)

    @cached_property
    def _offered(self) -> tuple[Evaluation, ...]:
        return tuple(compiled(formula) for formula in self.offered)

    @cached_property
    def _read(self) -> tuple[Evaluation, ...]:
        return tuple(compiled(formula) for formula in self.read)

    def _names(self, x: Any, u: Any, v: Any, w: Any, parameters: Mapping[str, Any] | None) -> dict[str, Any]:
        import numpy as np

        names: dict[str, Any] = {}
        for group, values in ((self.states, x), (self.inputs, u), (self.takes, v), (self.disturbances, w)):
            given = np.asarray(values, dtype=float)
            if len(given) not in (0, len(group)):
                raise ValueError(f"{len(group)} values are needed for {[name for name, _ in group]}, not {len(given)}")
            for k, (name, factor) in enumerate(group):
                deviation = given[k] * float(factor) if len(given) else 0.0
                names[name] = np.float64(self.point[name]) + deviation
        for name, (_, nominal, _) in self.ranges.items():
            names[name] = np.asarray((parameters or {}).get(name, nominal), dtype=float)
        return names

    def _stacked(
        self, formulas: tuple[Evaluation, ...], group: Names, names: dict[str, Any], rest: Mapping[str, float]
    ) -> Floats:
        import numpy as np

        shape = np.broadcast_shapes(*(np.shape(value) for value in names.values()))
        with np.errstate(all="ignore"):
            rows = [f(names) / float(k) - rest.get(n, 0.0) for f, (n, k) in zip(formulas, group, strict=True)]
        return np.array([np.broadcast_to(row, shape) for row in rows], dtype=float).reshape((len(group), *shape))


def compiled(formula: Formula) -> Evaluation:
    """A function of numpy numbers or arrays by name that gives the formula's value in floating point (SI units).

    Where it is not defined the result is NaN or infinite, with numpy's warnings, which callers silence.
    """
    parts = [(rounded(c), [(_factor(factor), power) for factor, power in atom]) for atom, c in formula.terms]

    def value(names: Mapping[str, Any]) -> Any:
        total: Any = 0.0
        for c, factors in parts:
            term: Any = c
            for factor, power in factors:
                base = factor(names)
                term = term * base if power == 1 else term / base**-power if power < 0 else term * base**power
            total = total + term
        return total

    return value


def rounded(value: Fraction) -> float:
    """The nearest double, infinite beyond their range."""
    try:
        return float(value)
    except OverflowError:
        return math.inf if value > 0 else -math.inf


def _factor(factor: Factor) -> Evaluation:
    import numpy as np

    name = factor.name
    if factor.sort in ("signal", "parameter"):
        return lambda names: names[name]
    inside = [compiled(part) for part in factor.inside]
    first, last, sort = inside[0], inside[-1], factor.sort
    if sort == "group":
        return first
    if sort == "power":
        power = float(factor.power)
        return lambda names: np.power(np.asarray(first(names), dtype=float), power)
    if sort in ("min", "max"):
        reduce = np.minimum if sort == "min" else np.maximum

        def several(names: Mapping[str, Any]) -> Any:
            found = first(names)
            for other in inside[1:]:
                found = reduce(found, other(names))
            return found

        return several
    if sort in ("sat", "deadzone"):

        def limited(names: Mapping[str, Any]) -> Any:
            signal, limit = first(names), last(names)
            kept = np.maximum(-limit, np.minimum(limit, signal))
            return kept if sort == "sat" else signal - kept

        return limited
    function = getattr(np, sort)
    return lambda names: function(first(names))
