"""HTML built from parts, with every text escaped unless it was built here: names from a problem file can do no harm."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from fractions import Fraction
from html import escape

from synth.handoff.digits import digits
from synth.handoff.table import exact_text

_RAISED = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")
NO_BREAK = "\u00a0"


class Html(str):
    """Text that is HTML already; only this module and the SVG board make it."""

    __slots__ = ()


Child = str | Html | None


def element(name: str, *children: Child, **attributes: str) -> Html:
    """``<name ...>children</name>``; plain strings are escaped, None is left out; ``cls`` stands for ``class``."""
    written = "".join(
        f' {"class" if key == "cls" else key.replace("_", "-")}="{escape(value)}"' for key, value in attributes.items()
    )
    return Html(f"<{name}{written}>{join(children)}</{name}>")


def join(children: Iterable[Child]) -> Html:
    """The children one after the other; plain strings are escaped."""
    return Html("".join(child if isinstance(child, Html) else escape(child) for child in children if child is not None))


def paragraph(*children: Child, **attributes: str) -> Html:
    """A paragraph."""
    return element("p", *children, **attributes)


def bullets(items: Iterable[Child]) -> Html:
    """An unnumbered list."""
    return element("ul", *(element("li", item) for item in items))


def table(caption: str, header: Sequence[str], rows: Sequence[Sequence[Child]], numeric: Sequence[int] = ()) -> Html:
    """A table in a box of its own; ``numeric`` names the columns that are set flush right."""
    head = element("tr", *(_cell("th", text, i in numeric, scope="col") for i, text in enumerate(header)))
    body = (element("tr", *(_cell("td", child, i in numeric) for i, child in enumerate(row))) for row in rows)
    return element(
        "div",
        element("table", element("caption", caption), element("thead", head), element("tbody", *body)),
        cls="wide",
    )


def _cell(name: str, child: Child, numeric: bool, **attributes: str) -> Html:
    if numeric:
        attributes["cls"] = "number"
    return element(name, child, **attributes)


def figure(picture: str, caption: str) -> Html:
    """A picture (SVG text) with a caption."""
    return element("figure", Html(picture), element("figcaption", caption))


def unit_text(unit: str) -> str:
    """A unit as people set it: ``m/s^2`` becomes m/s², ``kg*m`` becomes kg·m; the unit 1 is left out."""
    if unit.strip() in ("", "1"):
        return ""
    raised = re.sub(r"\^(-?\d+)", lambda match: match[1].translate(_RAISED), unit.strip())
    return raised.replace("*", "·")


def quantity(value: float | Fraction, unit: str = "", count: int = 4, rounding: str = "nearest") -> str:
    """A number with its unit, at most ``count`` digits, a true minus sign and no line break between the two."""
    shown = digits(value, count, rounding).replace("-", "−")
    word = unit_text(unit)
    return f"{shown}{NO_BREAK}{word}" if word else shown


def upper(value: float | Fraction, unit: str = "", count: int = 4) -> str:
    """An upper bound: rounded up."""
    return quantity(value, unit, count, "up")


def lower(value: float | Fraction, unit: str = "", count: int = 4) -> str:
    """A lower bound: rounded down."""
    return quantity(value, unit, count, "down")


def enclosure(low: float, high: float, unit: str = "") -> str:
    """An interval with outward rounded ends; one number where both ends are equal; open where it has no upper end."""
    if low == high:
        return quantity(low, unit)
    if high == float("inf"):
        return f"at least {lower(low, unit)}"
    return f"{lower(low)} to {upper(high, unit)}"


def exactly(value: Fraction, unit: str = "") -> str:
    """A declared number as it was declared where that is short, else to ten digits behind a sign for about."""
    text = exact_text(value)
    shown = text if len(text) <= 16 else "≈" + digits(value, 10)
    word = unit_text(unit)
    shown = shown.replace("-", "−")
    return f"{shown}{NO_BREAK}{word}" if word else shown
