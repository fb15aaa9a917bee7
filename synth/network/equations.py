"""Linear expressions with units, read through a whitelist over Python's ``ast`` and never evaluated by it.

An expression is a sum of signals times constants. Constants are numbers and parameters joined by ``+ - * / **``,
parentheses and ``sqrt abs min max sin cos exp``; arithmetic is exact except for irrational function values, which are
rounded to 40 digits. Everything is held in SI units; ``coefficients_in`` converts to the declared units exactly.

Law: the dimension of every term of a sum is the same, and equals the one asked for; a zero fits every dimension.
"""

from __future__ import annotations

import ast
import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import NONE, Dimension, Unit, UnitError, dimension_text, parse_number
from synth.network.constants import FUNCTIONS, LARGEST_BITS, PI_CONSTANT

LONGEST = 2000
DEEPEST = 60

_ACCEPTED = "accepted are names, numbers, + - * / **, parentheses and sqrt, abs, min, max, sin, cos, exp of constants"


class Refused(Exception):
    """An expression is not accepted: one sentence (without full stop) and the character at which the reason stands.

    An empty sentence means that the reason has been told already (a name whose declaration has a problem).
    """

    def __init__(self, sentence: str, offset: int) -> None:
        """Keep the sentence and the character, counted from 0."""
        super().__init__(sentence)
        self.sentence = sentence
        self.offset = offset


@dataclass(frozen=True)
class Linear:
    """``sum parts[name] * name + constant`` in SI units; ``dimension`` None is a plain zero, which fits everywhere."""

    parts: Mapping[str, Fraction]
    constant: Fraction
    dimension: Dimension | None

    def times(self, factor: Fraction, dimension: Dimension | None) -> Linear:
        """The same expression times a number, with the dimension of the product."""
        return Linear({name: c * factor for name, c in self.parts.items()}, self.constant * factor, dimension)


@dataclass(frozen=True)
class Scope:
    """The names an expression may use: parameters (SI value, dimension) and signals with their declared unit.

    ``groups`` says for each signal what it is ('state', 'input', ...); ``allowed`` which of these may occur, and
    ``why_not`` ends the sentence that refuses one of the others.
    """

    parameters: Mapping[str, tuple[Fraction, Dimension]]
    signals: Mapping[str, Unit]
    groups: Mapping[str, str] = field(default_factory=dict)
    allowed: tuple[str, ...] = ("state", "input", "take", "disturbance")
    why_not: str = ""
    broken: frozenset[str] = frozenset()  # names whose declaration has a problem of its own


def parse_expression(text: str, scope: Scope) -> ast.expr:
    """The syntax tree of ``text``; Refused if it is no expression."""
    if len(text) > LONGEST:
        raise Refused(f"an expression of {len(text)} characters is too long; at most {LONGEST}", 0)
    stripped = text.replace("\n", " ").replace("\r", " ").replace("\t", " ")
    lead = len(stripped) - len(stripped.lstrip())
    if "#" in text:
        raise Refused("'#' is not accepted in an expression", text.index("#"))
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return ast.parse(stripped[lead:], mode="eval").body
    except SyntaxError as error:
        offset = min(max((error.offset or 1) - 1 + lead, 0), max(len(text) - 1, 0))
        raise Refused(f"this is not an expression{_hint(text, scope)}; {_ACCEPTED}", offset) from None
    except (ValueError, RecursionError, MemoryError):
        raise Refused(f"this expression cannot be read; {_ACCEPTED}", 0) from None


def _hint(text: str, scope: Scope) -> str:
    if "'" in text:
        return " (a derivative stands only on the left, as the key; use the right-hand side of its equation here)"
    if any(c.isdigit() for c in text):
        return (
            " (a number carries no unit here; give it a name under 'parameters', such as {lag: 0.5 s}; "
            "products need a *)"
        )
    return ""


class Evaluator:
    """Walks the syntax tree of one expression."""

    def __init__(self, text: str, scope: Scope) -> None:
        """Parse ``text``; Refused if it is no expression."""
        self.text = text
        self.scope = scope
        self.lead = len(text) - len(text.lstrip())
        tree = parse_expression(text, scope)
        self.bytes = text[self.lead :].encode("utf-8")
        self.tree = tree

    def offset(self, node: ast.expr) -> int:
        """The character of the text at which ``node`` starts."""
        return self.character(node.col_offset)

    def character(self, byte: int | None) -> int:
        """The character of the text at a byte offset of the parsed line."""
        return len(self.bytes[:byte].decode("utf-8", "ignore")) + self.lead

    def words(self, node: ast.expr) -> str:
        """The text of ``node``, shortened to what fits into a sentence."""
        words = " ".join(self.text[self.offset(node) : self.character(node.end_col_offset)].split())
        return words if len(words) <= 50 else words[:47] + "..."

    def refuse(self, sentence: str, node: ast.expr) -> Refused:
        """The reason against a node, at its place."""
        return Refused(sentence, self.offset(node))

    def terms(self, node: ast.expr) -> list[tuple[int, ast.expr]]:
        """The terms of a sum with their signs, left to right; a single term counts as a sum of one."""
        found: list[tuple[int, ast.expr]] = []
        pending = [(1, node)]
        while pending:
            sign, part = pending.pop()
            if isinstance(part, ast.BinOp) and isinstance(part.op, (ast.Add, ast.Sub)):
                pending.append((-sign if isinstance(part.op, ast.Sub) else sign, part.right))
                pending.append((sign, part.left))
            else:
                found.append((sign, part))
        return found

    def total(self, node: ast.expr, wanted: Dimension | None, wanted_text: str, depth: int) -> Linear:
        """The value of a sum; every term must have the dimension ``wanted`` (None: that of the first term)."""
        parts: dict[str, Fraction] = {}
        constant = Fraction(0)
        first = ""
        for sign, term in self.terms(node):
            value = self.value(term, depth)
            if value.dimension is not None:
                if wanted is None:
                    wanted, first = value.dimension, self.words(term)
                elif value.dimension != wanted:
                    raise self.refuse(self.mismatch(term, value.dimension, wanted, first, wanted_text), term)
            for name, c in value.parts.items():
                parts[name] = parts.get(name, Fraction(0)) + sign * c
            constant += sign * value.constant
        return Linear(parts, constant, wanted)

    def mismatch(self, term: ast.expr, has: Dimension, wanted: Dimension, first: str, wanted_text: str) -> str:
        """The sentence for a term whose unit does not fit into its sum."""
        needed = dimension_text(wanted)
        because = f" because {first!r} has it" if first else f" ({wanted_text})" if wanted_text != needed else ""
        sentence = (
            f"the term {self.words(term)!r} has the unit {dimension_text(has)}, but {needed} is needed here{because}"
        )
        if any(isinstance(part, ast.Constant) for part in ast.walk(term)):
            sentence += "; a number has no unit in an equation, so give it a name and a unit under 'parameters'"
        return sentence

    def value(self, node: ast.expr, depth: int) -> Linear:
        """The value of one node."""
        if depth > DEEPEST:
            raise self.refuse("this expression is nested too deeply; split it with parameters", node)
        if isinstance(node, ast.Constant):
            return self.number(node)
        if isinstance(node, ast.Name):
            return self.name(node)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, (ast.USub, ast.UAdd)):
            inner = self.value(node.operand, depth + 1)
            return inner.times(Fraction(-1 if isinstance(node.op, ast.USub) else 1), inner.dimension)
        if isinstance(node, ast.Call):
            return self.call(node, depth)
        if isinstance(node, ast.BinOp):
            if isinstance(node.op, (ast.Add, ast.Sub)):
                return self.total(node, None, "", depth + 1)
            if isinstance(node.op, ast.Mult):
                return self.product(node, depth)
            if isinstance(node.op, ast.Div):
                return self.quotient(node, depth)
            if isinstance(node.op, ast.Pow):
                return self.power(node, depth)
            if isinstance(node.op, ast.BitXor):
                raise self.refuse("'^' is not a power in an expression; write **", node)
        raise self.refuse(f"{self.words(node)!r} is not accepted in an expression; {_ACCEPTED}", node)

    def number(self, node: ast.Constant) -> Linear:
        """A decimal number, exactly as written."""
        if isinstance(node.value, bool) or not isinstance(node.value, (int, float)):
            raise self.refuse(f"{self.words(node)!r} is not accepted in an expression; {_ACCEPTED}", node)
        try:
            value = parse_number(self.text[self.offset(node) : self.character(node.end_col_offset)])
        except UnitError as error:
            raise self.refuse(f"{error}; write a decimal number such as 0.5 or 1e-3", node) from None
        return Linear({}, value, NONE if value else None)

    def name(self, node: ast.Name) -> Linear:
        """A parameter, a signal or pi."""
        scope = self.scope
        if node.id in scope.parameters:
            value, dimension = scope.parameters[node.id]
            return Linear({}, value, dimension)
        if node.id in scope.signals:
            group = scope.groups.get(node.id, "state")
            if group not in scope.allowed:
                raise self.refuse(f"the {group} {node.id!r} cannot be used here; {scope.why_not}", node)
            return Linear({node.id: Fraction(1)}, Fraction(0), scope.signals[node.id].dimension)
        if node.id in scope.broken:
            raise Refused("", 0)
        if node.id == "pi":
            return Linear({}, PI_CONSTANT, NONE)
        known = [*scope.parameters, *scope.signals, *FUNCTIONS]
        usable = [n for n in known if scope.groups.get(n, scope.allowed[0]) in scope.allowed and n not in FUNCTIONS]
        raise self.refuse(
            f"unknown name {node.id!r}{nearest(node.id, known)}; known here are {', '.join(usable)}", node
        )

    def product(self, node: ast.BinOp, depth: int) -> Linear:
        """A product, of which at most one factor may hold signals."""
        left, right = self.value(node.left, depth + 1), self.value(node.right, depth + 1)
        if left.parts and right.parts:
            raise self.nonlinear(node)
        dimension = _joined(left.dimension, right.dimension, 1)
        if right.parts:
            left, right = right, left
        self.bounded(right.constant, node)
        return left.times(right.constant, dimension)

    def quotient(self, node: ast.BinOp, depth: int) -> Linear:
        """A quotient by a constant other than zero."""
        left, right = self.value(node.left, depth + 1), self.value(node.right, depth + 1)
        if right.parts:
            raise self.nonlinear(node)
        if right.constant == 0:
            raise self.refuse(f"{self.words(node.right)!r} is zero and cannot divide", node.right)
        self.bounded(right.constant, node)
        return left.times(1 / right.constant, _joined(left.dimension, right.dimension, -1))

    def power(self, node: ast.BinOp, depth: int) -> Linear:
        """A whole power of a constant (or the first power of anything)."""
        base, exponent = self.value(node.left, depth + 1), self.value(node.right, depth + 1)
        if exponent.parts or (base.parts and exponent.constant != 1):
            raise self.nonlinear(node)
        n = exponent.constant
        if n.denominator != 1 or abs(n) > 12 or exponent.dimension not in (None, NONE):
            raise self.refuse("a power must be a whole number from -12 to 12; roots are written sqrt( )", node.right)
        if base.parts:
            return base
        if base.constant == 0 and n <= 0:
            raise self.refuse(f"{self.words(node.left)!r} is zero and cannot have the power {n}", node)
        self.bounded(base.constant, node, 12)
        dimension = None if base.dimension is None else tuple(int(n) * d for d in base.dimension)
        return Linear({}, base.constant ** int(n), dimension)

    def call(self, node: ast.Call, depth: int) -> Linear:
        """A function of constants."""
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        if name not in FUNCTIONS or node.keywords or any(isinstance(a, ast.Starred) for a in node.args):
            raise self.refuse(
                f"{self.words(node.func)!r} is not a function here{nearest(name, FUNCTIONS)}; {_ACCEPTED}", node
            )
        values = [self.value(argument, depth + 1) for argument in node.args]
        if any(value.parts for value in values):
            raise self.nonlinear(node)
        several = name in ("min", "max")
        if (several and len(values) < 2) or (not several and len(values) != 1):
            raise self.refuse(f"{name} takes {'two or more arguments' if several else 'one argument'}", node)
        dimensions = {value.dimension for value in values if value.dimension is not None}
        if len(dimensions) > 1:
            raise self.refuse(f"the arguments of {name} have different units", node)
        dimension = next(iter(dimensions), None)
        function: Callable[..., tuple[Fraction, Dimension | None]] = FUNCTIONS[name]
        for value in values:
            self.bounded(value.constant, node)
        try:
            result, dimension = function(dimension, *(value.constant for value in values))
        except UnitError as error:
            raise self.refuse(str(error), node) from None
        return Linear({}, result, dimension)

    def nonlinear(self, node: ast.expr) -> Refused:
        """The reason against a term that is not linear."""
        return self.refuse(
            f"the term {self.words(node)!r} is not linear in the signals; this version accepts signals times "
            "constants: "
            "linearise it about the operating point",
            node,
        )

    def bounded(self, value: Fraction, node: ast.expr, factor: int = 1) -> None:
        """Refuse constants whose exact form grows without bound."""
        if (value.numerator.bit_length() + value.denominator.bit_length()) * factor > LARGEST_BITS:
            raise self.refuse("this constant is too large or has too many digits to be kept exactly", node)


def _joined(left: Dimension | None, right: Dimension | None, sign: int) -> Dimension | None:
    if left is None or right is None:
        return None
    return tuple(a + sign * b for a, b in zip(left, right, strict=True))


def read_linear(text: str, scope: Scope, wanted: Unit | None = None, wanted_text: str = "") -> Linear:
    """Read ``text`` as a linear expression without constant offset; Refused with a located sentence if it is none.

    Every term must have the dimension of ``wanted``, which is called ``wanted_text`` in messages; without ``wanted``
    the first term decides.
    """
    walker = Evaluator(text, scope)
    result = walker.total(walker.tree, None if wanted is None else wanted.dimension, wanted_text, 0)
    if result.constant != 0:
        raise Refused(
            "this expression has a constant part; the model is about differences from the operating point, "
            "so leave it out, or make it a disturbance with a peak",
            walker.lead,
        )
    return result


def coefficients_in(value: Linear, names: Mapping[str, Unit], result: Unit) -> list[Fraction]:
    """The coefficients of ``names`` when each is counted in its declared unit and the value in ``result``'s unit."""
    return [value.parts.get(name, Fraction(0)) * unit.factor / result.factor for name, unit in names.items()]
