"""Units of products and quotients as readable text, worked out from the texts of both sides.

Only equal symbols cancel; nothing is converted (km against m stays km/m), so the text never hides a factor.
"""

from __future__ import annotations

import re

_FACTOR = re.compile(r"^(?P<symbol>°?[^\W\d_][^\W\d]*|[%°])(?:\^?(?P<power>-?\d+))?$")


def quotient(above: str, below: str) -> str:
    """Text of ``above``/``below`` with common symbols cancelled: ``quotient('m/s^2', 'm') == '1/s^2'``.

    A text that is not a plain product of symbols with whole powers is kept and bracketed: ``(above)/(below)``.
    """
    if below.strip() in ("", "1"):
        return above.strip() or "1"
    top, bottom = _powers(above), _powers(below)
    if top is None or bottom is None:
        return f"({above.strip()})/({below.strip()})"
    for symbol, power in bottom.items():
        top[symbol] = top.get(symbol, 0) - power
    return _written(top)


def product(first: str, second: str) -> str:
    """Text of ``first`` times ``second``: ``product('m/s', 's') == 'm'``, ``product('K', 's') == 'K s'``.

    A text that is not a plain product of symbols with whole powers is kept and bracketed: ``(first) (second)``.
    """
    left, right = _powers(first), _powers(second)
    if left is None or right is None:
        return f"({first.strip()}) ({second.strip()})"
    for symbol, power in right.items():
        left[symbol] = left.get(symbol, 0) + power
    return _written(left).replace("*", " ")


def _powers(text: str) -> dict[str, int] | None:
    """Whole powers by symbol in order of appearance, or None if the text is not such a product."""
    found: dict[str, int] = {}
    for count, part in enumerate(text.replace("·", "*").strip().split("/")):
        sign = -1 if count else 1
        factors = re.split(r"\s*[*.]\s*|\s+", part.strip())
        if count and len(factors) > 1:
            return None  # a/b*c is read both ways by people; keep the text as it stands
        for factor in factors:
            if factor == "1":
                continue
            match = _FACTOR.match(factor)
            if match is None:
                return None
            symbol = match["symbol"]
            found[symbol] = found.get(symbol, 0) + sign * int(match["power"] or 1)
    return found


def _written(powers: dict[str, int]) -> str:
    """A product as text: powers above the bar first, one bar, brackets where several symbols stand below it."""
    above = [_power_text(symbol, power) for symbol, power in powers.items() if power > 0]
    below = [_power_text(symbol, -power) for symbol, power in powers.items() if power < 0]
    text = "*".join(above) or "1"
    if len(below) == 1:
        return f"{text}/{below[0]}"
    return f"{text}/({'*'.join(below)})" if below else text


def _power_text(symbol: str, power: int) -> str:
    return symbol if power == 1 else f"{symbol}^{power}"
