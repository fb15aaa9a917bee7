"""Expressions with units, read through a whitelist over Python's ``ast`` and never evaluated by it.

An expression is made of signals, numbers and parameters joined by ``+ - * / **``, parentheses and ``sqrt abs min max
sin cos tanh exp sat deadzone``. It becomes a ``Formula``: exact coefficients of the signals, and nonlinear terms kept
apart. Functions of constants are exact where their value is rational, otherwise rounded to 40 digits. Everything is
held in SI units.

Law: the dimension of every term of a sum is the same, and equals the one asked for; a zero fits every dimension.
"""

from __future__ import annotations

import ast
import keyword
import re
import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import NONE, Dimension, Unit, UnitError, dimension_text, parse_number
from synth.network.constants import FUNCTIONS, LARGEST_BITS, PI_CONSTANT, constant_power
from synth.network.formula import Atom, Factor, Formula, Span, collected, product, whole_power

LONGEST = 2000
DEEPEST = 60

_ACCEPTED = (
    "accepted are names, numbers, + - * / **, parentheses and sqrt, abs, min, max, sin, cos, tanh, exp, sat, deadzone"
)


class Refused(Exception):
    """An expression is not accepted: one sentence (without full stop) and the character at which the reason stands.

    An empty sentence means that the reason has been told already (a name whose declaration has a problem).
    """

    def __init__(self, sentence: str, offset: int, length: int | None = None) -> None:
        """Keep the sentence, the character (counted from 0) and how many characters are meant (None: a word)."""
        super().__init__(sentence)
        self.sentence = sentence
        self.offset = offset
        self.length = length


@dataclass(frozen=True)
class Scope:
    """The names an expression may use: parameters (SI value, dimension) and signals with their declared unit.

    ``uncertain`` names the parameters with a tolerance: they stay in the formula by name. ``groups`` says for each
    signal what it is ('state', 'input', ...); ``allowed`` which of these may occur, and
    ``why_not`` ends the sentence that refuses one of the others.
    """

    parameters: Mapping[str, tuple[Fraction, Dimension]]
    signals: Mapping[str, Unit]
    groups: Mapping[str, str] = field(default_factory=dict)
    allowed: tuple[str, ...] = ("state", "input", "take", "disturbance")
    why_not: str = ""
    uncertain: frozenset[str] = frozenset()
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
        if gap := _gap(stripped):
            raise gap from None
        offset = min(max((error.offset or 1) - 1 + lead, 0), max(len(text) - 1, 0))
        raise Refused(f"this is not an expression{_hint(text, scope)}; {_ACCEPTED}", offset) from None
    except (ValueError, RecursionError, MemoryError):
        raise Refused(f"this expression cannot be read; {_ACCEPTED}", 0) from None


def _gap(text: str) -> Refused | None:
    """Two names side by side: a product without its *, or a function without its parentheses."""
    found = re.search(r"(?<![\w.])(?P<left>[A-Za-z_]\w*)\s+(?P<right>[A-Za-z_]\w*)", text, re.ASCII)
    if found is None or keyword.iskeyword(found["left"]) or keyword.iskeyword(found["right"]):
        return None
    left, right = found["left"], found["right"]
    advice = f"write {left}({right})" if left in FUNCTIONS else f"write {left}*{right} for the product"
    return Refused(
        f"nothing stands between {left!r} and {right!r}; {advice}", found.start(), found.end() - found.start()
    )


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
        start = self.offset(node)
        return Refused(sentence, start, self.character(node.end_col_offset) - start)

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

    def span(self, node: ast.expr) -> Span:
        """Where ``node`` stands in the text."""
        start = self.offset(node)
        return start, self.character(node.end_col_offset) - start

    def total(self, node: ast.expr, wanted: Dimension | None, wanted_text: str, depth: int) -> Formula:
        """The value of a sum; every term must have the dimension ``wanted`` (None: that of the first term)."""
        pairs = []
        spans: dict[Atom, Span] = {}
        first = ""
        for sign, term in self.terms(node):
            value = self.value(term, depth)
            if value.dimension is not None:
                if wanted is None:
                    wanted, first = value.dimension, self.words(term)
                elif value.dimension != wanted:
                    raise self.refuse(self.mismatch(term, value.dimension, wanted, first, wanted_text), term)
            pairs += [(atom, sign * c) for atom, c in value.terms]
            spans |= {atom: span for atom, span in value.spans.items() if atom not in spans}
        return collected(pairs, wanted, spans)

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

    def value(self, node: ast.expr, depth: int) -> Formula:
        """The value of one node."""
        if depth > DEEPEST:
            raise self.refuse("this expression is nested too deeply; split it with parameters", node)
        if isinstance(node, ast.Constant):
            return self.number(node)
        if isinstance(node, ast.Name):
            return self.name(node)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, (ast.USub, ast.UAdd)):
            inner = self.value(node.operand, depth + 1)
            return inner.scaled(Fraction(-1 if isinstance(node.op, ast.USub) else 1), inner.dimension)
        if isinstance(node, ast.Call):
            return self.call(node, depth)
        if isinstance(node, ast.BinOp):
            if isinstance(node.op, (ast.Add, ast.Sub)):
                return self.total(node, None, "", depth + 1)
            if isinstance(node.op, (ast.Mult, ast.Div)):
                return self.product(node, depth)
            if isinstance(node.op, ast.Pow):
                return self.power(node, depth)
            if isinstance(node.op, ast.BitXor):
                sign = self.text.find("^", self.character(node.left.end_col_offset))
                raise Refused("'^' is not a power in an expression; write **", sign, 1)
        raise self.refuse(f"{self.words(node)!r} is not accepted in an expression; {_ACCEPTED}", node)

    def number(self, node: ast.Constant) -> Formula:
        """A decimal number, exactly as written."""
        if isinstance(node.value, bool) or not isinstance(node.value, (int, float)):
            raise self.refuse(f"{self.words(node)!r} is not accepted in an expression; {_ACCEPTED}", node)
        try:
            value = parse_number(self.text[self.offset(node) : self.character(node.end_col_offset)])
        except UnitError as error:
            raise self.refuse(f"{error}; write a decimal number such as 0.5 or 1e-3", node) from None
        return Formula.number(value, NONE if value else None)

    def name(self, node: ast.Name) -> Formula:
        """A parameter, a signal or pi."""
        scope, span = self.scope, self.span(node)
        if node.id in scope.parameters:
            value, dimension = scope.parameters[node.id]
            if node.id in scope.uncertain:
                return Formula.factor(Factor("parameter", node.id, dimension=dimension, span=span))
            return Formula.number(value, dimension)
        if node.id in scope.signals:
            group = scope.groups.get(node.id, "state")
            if group not in scope.allowed:
                raise self.refuse(f"the {group} {node.id!r} cannot be used here; {scope.why_not}", node)
            return Formula.factor(Factor("signal", node.id, dimension=scope.signals[node.id].dimension, span=span))
        if node.id in scope.broken:
            raise Refused("", 0)
        if node.id == "pi":
            return Formula.number(PI_CONSTANT)
        known = [*scope.parameters, *scope.signals, *FUNCTIONS]
        usable = [n for n in known if scope.groups.get(n, scope.allowed[0]) in scope.allowed and n not in FUNCTIONS]
        raise self.refuse(
            f"unknown name {node.id!r}{nearest(node.id, known)}; known here are {', '.join(usable)}", node
        )

    def product(self, node: ast.BinOp, depth: int) -> Formula:
        """A product or a quotient."""
        left, right = self.value(node.left, depth + 1), self.value(node.right, depth + 1)
        sign = 1 if isinstance(node.op, ast.Mult) else -1
        if sign < 0 and not right.terms:
            raise self.refuse(f"{self.words(node.right)!r} is zero and cannot divide", node.right)
        for part in (left, right):
            if part.plain is not None:
                self.bounded(part.plain, node)
        return product(left, right, _joined(left.dimension, right.dimension, sign), self.span(node), sign)

    def power(self, node: ast.BinOp, depth: int) -> Formula:
        """A power with a constant exponent; of a signal also one that is not whole (the base must then stay
        positive)."""
        base, exponent = self.value(node.left, depth + 1), self.value(node.right, depth + 1)
        n = exponent.plain
        if n is None or exponent.dimension not in (None, NONE) or abs(n) > 12:
            raise self.refuse("a power must be a number from -12 to 12 without unit and tolerance", node.right)
        if n == 1:
            return base
        raised = None if base.dimension is None else [n * d for d in base.dimension]
        if raised is not None and any(d.denominator != 1 for d in raised):
            raise self.refuse(
                f"the power {self.words(node.right)} of the unit {dimension_text(base.dimension or NONE)} is not whole",
                node.right,
            )
        dimension = None if raised is None else tuple(int(d) for d in raised)
        if base.plain == 0 and n <= 0:
            raise self.refuse(f"{self.words(node.left)!r} is zero and cannot have the power {n}", node)
        if base.plain is not None:
            self.bounded(base.plain, node, 12)
            try:
                return Formula.number(constant_power(base.plain, n), dimension)
            except UnitError as error:
                raise self.refuse(str(error), node) from None
        if n == 0:
            return Formula.number(Fraction(1))
        span = self.span(node)
        if n.denominator == 1:
            return whole_power(base, int(n), dimension, span)
        return Formula.factor(Factor("power", "", (base,), n, dimension or NONE, span))

    def call(self, node: ast.Call, depth: int) -> Formula:
        """A function; exact or rounded to 40 digits where its arguments are constants."""
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        if name not in FUNCTIONS or node.keywords or any(isinstance(a, ast.Starred) for a in node.args):
            raise self.refuse(
                f"{self.words(node.func)!r} is not a function here{nearest(name, FUNCTIONS)}; {_ACCEPTED}", node
            )
        values = [self.value(argument, depth + 1) for argument in node.args]
        least, most, said = {"min": (2, 99, "two or more arguments"), "max": (2, 99, "two or more arguments"),
                             "sat": (2, 2, "a signal and its limit"), "deadzone": (2, 2, "a signal and its width")
                             }.get(name, (1, 1, "one argument"))  # fmt: skip
        if not least <= len(values) <= most:
            raise self.refuse(f"{name} takes {said}", node)
        dimensions = {value.dimension for value in values if value.dimension is not None}
        if len(dimensions) > 1:
            raise self.refuse(f"the arguments of {name} have different units", node)
        for value in values:
            if value.plain is not None:
                self.bounded(value.plain, node)
        if name in ("sat", "deadzone") and (values[1].plain is None or values[1].plain <= 0):
            raise self.refuse(f"the second argument of {name} must be a constant above zero, without tolerance", node)
        try:
            # What is wrong with the unit is found by the constant one or zero in the place of the signals.
            constants = [Fraction(0) if value.plain is None else value.plain for value in values]
            result, dimension = FUNCTIONS[name](next(iter(dimensions), None), *constants)
        except UnitError as error:
            raise self.refuse(str(error), node) from None
        if all(value.plain is not None for value in values):
            return Formula.number(result, dimension)
        factor = Factor(name, "", tuple(values), dimension=self.image(name, dimensions), span=self.span(node))
        return Formula.factor(factor)

    def image(self, name: str, dimensions: set[Dimension]) -> Dimension:
        """The dimension of a function's value."""
        of = next(iter(dimensions), NONE)
        return tuple(d // 2 for d in of) if name == "sqrt" else of

    def bounded(self, value: Fraction, node: ast.expr, factor: int = 1) -> None:
        """Refuse constants whose exact form grows without bound."""
        if (value.numerator.bit_length() + value.denominator.bit_length()) * factor > LARGEST_BITS:
            raise self.refuse("this constant is too large or has too many digits to be kept exactly", node)


def _joined(left: Dimension | None, right: Dimension | None, sign: int) -> Dimension | None:
    if left is None or right is None:
        return None
    return tuple(a + sign * b for a, b in zip(left, right, strict=True))


def read_formula(text: str, scope: Scope, wanted: Unit | None = None, wanted_text: str = "") -> Formula:
    """Read ``text`` as a formula; Refused with a located sentence if it is none.

    Every term must have the dimension of ``wanted``, which is called ``wanted_text`` in messages; without ``wanted``
    the first term decides.
    """
    walker = Evaluator(text, scope)
    return walker.total(walker.tree, None if wanted is None else wanted.dimension, wanted_text, 0)
