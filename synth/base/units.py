"""Physical units with exact factors to SI: what a problem file may write behind a number.

A unit is a rational factor to SI times whole powers of seven base units. Products are written ``N m`` or ``N*m``,
quotients ``m/s`` (``m/s/s`` is m/s^2), powers ``s^2``, ``m3`` or ``s^-1``, and ``1/s^2`` starts from one. A product
by a space is refused after a slash, because ``N m/rad s`` is read in two ways; write ``N m/(rad s)``.

Decisions (ours): an angle is dimensionless, ``rad`` is 1, so that torque over inertia is an angular acceleration
without ceremony; ``deg``, ``rev`` and ``rpm`` use pi rounded to 40 decimals, an error far below any model's. ``Hz`` is
1/s (cycles count as 1). ``%`` is 1/100 and ``pu`` (per unit) is 1. ``degC`` and ``degF`` are *differences* of
temperature, as everything in a linear model about an operating point is. Months and years are left out: they have no
fixed length.

Law: ``parse_unit`` turns products, quotients and powers of texts into products, quotients and powers of units, and
``parse_unit(unit.text)`` has the dimension of ``unit``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import nearest

Dimension = tuple[int, ...]

BASE: tuple[str, ...] = ("m", "kg", "s", "A", "K", "mol", "cd")
NONE: Dimension = (0,) * len(BASE)
PI = Fraction("3.1415926535897932384626433832795028841972")
LARGEST_POWER = 12
LARGEST_EXPONENT = 308
LONGEST_NUMBER = 400


class UnitError(ValueError):
    """A text is no unit or no quantity; the message is one sentence for the user."""


@dataclass(frozen=True)
class Unit:
    """``factor`` SI units of the given ``dimension`` (powers of m, kg, s, A, K, mol, cd)."""

    factor: Fraction = Fraction(1)
    dimension: Dimension = NONE

    def __mul__(self, other: Unit) -> Unit:
        """The product of two units."""
        powers = tuple(a + b for a, b in zip(self.dimension, other.dimension, strict=True))
        return Unit(self.factor * other.factor, powers)

    def __truediv__(self, other: Unit) -> Unit:
        """The quotient of two units."""
        return self * other**-1

    def __pow__(self, power: int) -> Unit:
        """A whole power of the unit."""
        return Unit(self.factor**power, tuple(power * a for a in self.dimension))

    @property
    def text(self) -> str:
        """The SI unit of this dimension, in a form that ``parse_unit`` reads; the factor is not in it."""
        return dimension_text(self.dimension)


def dimension_text(dimension: Dimension) -> str:
    """The SI unit of a dimension: ``m/s^2``, ``kg m^2/(s^3 A)``, ``1``."""

    def powers(sign: int) -> list[str]:
        pairs = zip(BASE, dimension, strict=True)
        return [name + (f"^{abs(p)}" if abs(p) > 1 else "") for name, p in pairs if p * sign > 0]

    above, below = powers(1), powers(-1)
    if not below:
        return " ".join(above) or "1"
    under = below[0] if len(below) == 1 else f"({' '.join(below)})"
    return f"{' '.join(above) or '1'}/{under}"


def _unit(factor: Fraction | int | str, **powers: int) -> Unit:
    return Unit(Fraction(factor), tuple(powers.get(name, 0) for name in BASE))


_PREFIXES: dict[str, Fraction] = {
    "G": Fraction(10**9), "M": Fraction(10**6), "k": Fraction(1000),
    "m": Fraction(1, 1000), "u": Fraction(1, 10**6), "µ": Fraction(1, 10**6), "n": Fraction(1, 10**9),
}  # fmt: skip

# Names that take a prefix (kW, mbar, ms).
_PREFIXED: dict[str, Unit] = {
    "m": _unit(1, m=1), "g": _unit("0.001", kg=1), "s": _unit(1, s=1), "A": _unit(1, A=1), "K": _unit(1, K=1),
    "mol": _unit(1, mol=1), "cd": _unit(1, cd=1), "rad": _unit(1), "Hz": _unit(1, s=-1),
    "N": _unit(1, kg=1, m=1, s=-2), "Pa": _unit(1, kg=1, m=-1, s=-2), "bar": _unit(10**5, kg=1, m=-1, s=-2),
    "J": _unit(1, kg=1, m=2, s=-2), "W": _unit(1, kg=1, m=2, s=-3), "VA": _unit(1, kg=1, m=2, s=-3),
    "var": _unit(1, kg=1, m=2, s=-3), "Wh": _unit(3600, kg=1, m=2, s=-2),
    "C": _unit(1, A=1, s=1), "Ah": _unit(3600, A=1, s=1), "V": _unit(1, kg=1, m=2, s=-3, A=-1),
    "ohm": _unit(1, kg=1, m=2, s=-3, A=-2), "S": _unit(1, kg=-1, m=-2, s=3, A=2),
    "F": _unit(1, kg=-1, m=-2, s=4, A=2), "H": _unit(1, kg=1, m=2, s=-2, A=-2),
    "Wb": _unit(1, kg=1, m=2, s=-2, A=-1), "T": _unit(1, kg=1, s=-2, A=-1),
    "L": _unit("0.001", m=3), "l": _unit("0.001", m=3), "t": _unit(1000, kg=1),
}  # fmt: skip

# Names that stand alone.
_ALONE: dict[str, Unit] = {
    "cm": _unit("0.01", m=1), "dm": _unit("0.1", m=1), "hPa": _unit(100, kg=1, m=-1, s=-2), "cL": _unit("1e-5", m=3),
    "min": _unit(60, s=1), "h": _unit(3600, s=1), "d": _unit(86400, s=1), "ha": _unit(10**4, m=2),
    "degC": _unit(1, K=1), "°C": _unit(1, K=1), "degF": _unit("5/9", K=1), "°F": _unit("5/9", K=1),
    "Ω": _unit(1, kg=1, m=2, s=-3, A=-2), "atm": _unit(101325, kg=1, m=-1, s=-2),
    "deg": _unit(PI / 180), "°": _unit(PI / 180), "rev": _unit(2 * PI), "rpm": _unit(2 * PI / 60, s=-1),
    "%": _unit("0.01"), "pu": _unit(1),
    "ft": _unit("0.3048", m=1), "inch": _unit("0.0254", m=1), "mi": _unit("1609.344", m=1),
    "mph": _unit("0.44704", m=1, s=-1), "kn": _unit(Fraction(1852, 3600), m=1, s=-1),
    "lb": _unit("0.45359237", kg=1), "lbf": _unit("4.4482216152605", kg=1, m=1, s=-2),
    "psi": _unit(Fraction("4.4482216152605") / Fraction("0.0254") ** 2, kg=1, m=-1, s=-2),
    "gal": _unit("0.003785411784", m=3),
}  # fmt: skip

# What people spell out, and the symbol it has here.
_SPELT_OUT: dict[str, str] = {
    spelt + plural: symbol
    for symbol, words in {
        "m": "meter metre", "s": "second sec", "min": "minute", "h": "hour hr", "d": "day", "kg": "kilogram",
        "t": "tonne ton",
        "A": "ampere amp", "V": "volt", "W": "watt", "N": "newton", "J": "joule", "Pa": "pascal", "K": "kelvin",
        "L": "liter litre",
        "rad": "radian", "deg": "degree", "degC": "celsius", "%": "percent", "ohm": "ohms", "Hz": "hertz",
        "km/h": "kph kmh",
    }.items()
    for spelt in words.split()
    for plural in ("", "s")
}  # fmt: skip


def _table() -> dict[str, Unit]:
    names = {p + n: Unit(f * u.factor, u.dimension) for n, u in _PREFIXED.items() for p, f in _PREFIXES.items()}
    names.update(_PREFIXED)
    names.update(_ALONE)  # last: 'min' is a minute and 'cd' a candela, whatever the prefixes spell
    return names


UNITS: dict[str, Unit] = _table()

_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻", "0123456789-")
_TOKEN = re.compile(
    r"\s*(?:(?P<name>[A-Za-zµμΩ°%]+)|(?P<power>(?:\^|\*\*)\s*[+-]?\d+|[+-]\d+|\d+)|(?P<sign>[()*·/]))", re.ASCII
)


def _tokens(text: str) -> Iterator[tuple[str, str, bool]]:
    """(sort, text, whether a space stands before it) of each token; a superscript counts as a power."""
    plain = re.sub(r"[⁰¹²³⁴⁵⁶⁷⁸⁹⁻]+", lambda found: "^" + found[0].translate(_SUPERSCRIPTS), text)
    at = 0
    while at < len(plain.rstrip()):
        found = _TOKEN.match(plain, at)
        if found is None and re.match(r"\s*(?:[.,]\d|\^|\*\*)", plain[at:]):
            raise UnitError(f"the powers in the unit {text!r} must be whole numbers, such as 'm^2' or 's^-1'")
        if found is None:
            raise UnitError(
                f"{text!r} is not a unit; accepted are names, '1', products, '/', powers: 'm/s^2', '1/s', 'kW'"
            )
        sort = found.lastgroup or ""
        yield sort, found[sort], plain[at : found.start(sort)] != ""
        at = found.end()


class _Reader:
    """Recursive descent over the tokens of one unit text."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.tokens = list(_tokens(text))
        self.at = 0

    def peek(self) -> tuple[str, str, bool]:
        return self.tokens[self.at] if self.at < len(self.tokens) else ("end", "", False)

    def product(self, depth: int) -> Unit:
        if depth > 5:
            raise UnitError(f"the parentheses in the unit {self.text!r} are nested too deeply")
        result = Unit() if self.peek()[1] == "/" else self.factor(depth)
        divided = False
        while True:
            sort, text, _ = self.peek()
            if sort == "sign" and text in "*·/":
                self.at += 1
                part = self.factor(depth)
                divided = divided or text == "/"
                result = result / part if text == "/" else result * part
            elif sort == "name" or text == "(":
                if divided:
                    raise UnitError(f"the unit {self.text!r} can be read in two ways; put what stands below in ( )")
                result = result * self.factor(depth)
            else:
                return result

    def factor(self, depth: int) -> Unit:
        sort, text, _ = self.peek()
        self.at += 1
        if sort == "name":
            return self.raised(lookup(text))
        if text == "1" and sort == "power":
            return Unit()
        if text == "(":
            inside = self.product(depth + 1)
            if self.peek()[1] != ")":
                raise UnitError(f"a ')' is missing in the unit {self.text!r}")
            self.at += 1
            return self.raised(inside)
        if sort == "end":
            raise UnitError(f"the unit {self.text!r} ends too early; accepted are 'm/s^2', '1/s', 'kW' and the like")
        raise UnitError(f"{text!r} is out of place in the unit {self.text!r}; accepted are 'm/s^2', '1/s', 'kW'")

    def raised(self, unit: Unit) -> Unit:
        sort, text, spaced = self.peek()
        if sort != "power" or (spaced and text[0] not in "^*"):
            return unit
        self.at += 1
        power = text.lstrip("^* ")
        if len(power) > 3 or abs(int(power)) > LARGEST_POWER:
            raise UnitError(f"the power {power} in the unit {self.text!r} is too large; at most {LARGEST_POWER}")
        return unit ** int(power)


def lookup(name: str) -> Unit:
    """The unit of that name; UnitError with the nearest known name if there is none."""
    unit = UNITS.get(name.replace("μ", "µ"))
    if unit is None and name.lower() in _SPELT_OUT:
        raise UnitError(
            f"unknown unit {name!r} (did you mean {_SPELT_OUT[name.lower()]!r}?); units are written by symbol",
        )
    if unit is None:
        raise UnitError(
            f"unknown unit {name!r}{_close_unit(name)}; compose it from SI names such as m, kg, s, A, K, W, bar"
        )
    return unit


def parse_unit(text: str) -> Unit:
    """Read a unit such as ``m/s^2``, ``km/h``, ``1/s``, ``%`` or ``1`` (dimensionless); UnitError if it is none."""
    if not text.strip():
        raise UnitError("a unit is missing; write '1' where there is none")
    if len(text) > 100:
        raise UnitError("a unit longer than 100 characters is not accepted")
    reader = _Reader(text)
    unit = reader.product(0)
    if reader.at < len(reader.tokens):
        raise UnitError(f"{reader.peek()[1]!r} is out of place in the unit {text!r}; accepted are 'm/s^2', '1/s', 'kW'")
    if any(abs(power) > LARGEST_POWER for power in unit.dimension):
        raise UnitError(f"the unit {text!r} has a power above {LARGEST_POWER}")
    return unit


_DECIMAL = r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE](?P<{0}>[-+]?[0-9]+))?"
_QUANTITY = re.compile(
    rf"\s*(?P<above>{_DECIMAL.format('e1')})"
    rf"(?:\s*/\s*(?P<below>{_DECIMAL.format('e2')})(?=\s|$))?"
    r"(?P<unit>.*)",
    re.DOTALL,
)


def parse_number(text: str) -> Fraction:
    """The exact value of a decimal such as ``-2.5e-3``; UnitError if it is none, too long or its exponent is huge."""
    if len(text) > LONGEST_NUMBER:
        raise UnitError(f"a number of {len(text)} characters is too long; at most {LONGEST_NUMBER}")
    found = re.fullmatch(_DECIMAL.format("e"), text.strip(), re.ASCII)
    if found is None:
        raise UnitError(f"{text!r} is not a number")
    exponent = found["e"]
    if exponent and (len(exponent) > 6 or abs(int(exponent)) > LARGEST_EXPONENT):
        raise UnitError(f"the exponent of {text} is too large; at most {LARGEST_EXPONENT} either way")
    return Fraction(text.strip())


def _close_unit(name: str) -> str:
    """The hint for a misspelt unit: a product without its space, the same letters in the other case, a near name.

    No guess is made from a single letter. A capital K for kilo is a commoner slip than a missing space behind kelvin.
    """
    same = [known for known in UNITS if known.lower() == name.lower()][:1]
    parts = [f"{name[:k]} {name[k:]}" for k in range(1, len(name)) if name[:k] in UNITS and name[k:] in UNITS][:1]
    meant = same + parts if name.startswith("K") else parts + same
    if meant:
        return f" (did you mean {' or '.join(map(repr, meant))}?)"
    return nearest(name, UNITS) if len(name) > 1 else ""


def parse_quantity(text: str) -> tuple[Fraction, Unit, bool]:
    """Read ``0.5 s``, ``2.5`` or ``1/3 s``: the number, its unit, and whether a unit was written at all.

    The number is in the unit as written (multiply by ``unit.factor`` for SI). UnitError if the text is no quantity.
    """
    if len(text) > 2 * LONGEST_NUMBER:
        raise UnitError("a quantity is a number and a unit, and this text is too long for one")
    found = _QUANTITY.fullmatch(text)
    if found is None:
        raise UnitError(
            f"{text.strip()!r} is not a quantity; accepted are a number and a unit, such as '0.5 s' or '1/3 m/s'"
        )
    value = parse_number(found["above"])
    if found["below"]:
        divisor = parse_number(found["below"])
        if divisor == 0:
            raise UnitError(f"{text!r} divides by zero")
        value /= divisor
    written = found["unit"].strip()
    return value, (parse_unit(written) if written else Unit()), bool(written)
