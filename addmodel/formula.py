"""Formulas: text in, an outcome and a sum of terms out. Nothing here sees data until `evaluate`.

formulaic works out the Wilkinson–Rogers algebra. What stands between its operators is read here:
by Python's `ast`, against a list of what is allowed, and computed by a walk over the checked tree.
No text is ever run as code.
"""

from __future__ import annotations

import ast
import keyword
import math
import re
import warnings
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal, NamedTuple

import numpy as np
import pandas as pd
from formulaic.errors import FormulaicError
from formulaic.parser import DefaultFormulaParser
from formulaic.parser.types import ASTNode

from .errors import DataError, FormulaError, nearest

Option = float | int | str
Kind = Literal["plain", "levels", "curve", "cycle"]

_LONGEST = 10_000  # characters
_DEEPEST = 50  # nested brackets or operations, far below Python's recursion limit
_MOST_TERMS, _MOST_FACTORS = 1_000, 20

class _Rule(NamedTuple):
    holds: Callable[[Option], bool]
    words: str
    convert: Callable[[Any], Option] = float


def _above(bound: float) -> Callable[[Option], bool]:
    return lambda value: not isinstance(value, str) and bound < value < math.inf


_DETAIL = _Rule(
    lambda v: v == "all" or (not isinstance(v, str) and 1 <= v < math.inf and v == int(v)),
    'a whole number of at least 1, or "all"',
    lambda v: v if isinstance(v, str) else int(v),
)
_SMOOTHING = _Rule(_above(0), "a positive number")
_PERIODS = ("year", "month", "week", "day")
_PERIOD = _Rule(
    lambda v: v in _PERIODS if isinstance(v, str) else 0 < v < math.inf,
    'a positive number, in the units of the column, or "year", "month", "week" or "day"',
    lambda v: v if isinstance(v, str) else float(v),
)
_BASE = _Rule(
    lambda v: isinstance(v, str) or math.isfinite(v), 'a level, or "largest"', lambda v: v
)

_CALLS: dict[str, tuple[Kind, dict[str, _Rule]]] = {
    "curve": (
        "curve",
        {"detail": _DETAIL, "smoothing": _SMOOTHING, "df": _Rule(_above(1), "a number above 1")},
    ),
    "cycle": (
        "cycle",
        {
            **{"period": _PERIOD, "detail": _DETAIL, "smoothing": _SMOOTHING},
            "df": _Rule(_above(0), "a positive number"),
        },
    ),
    "C": ("levels", {"base": _BASE}),
}
# These change what a term means, not only how closely it is fitted: they are part of its name.
_NAMING = ("period", "base")


@dataclass(frozen=True)
class Factor:
    """One factor of a term.

    Attributes
    ----------
    kind : {"plain", "levels", "curve", "cycle"}
        ``plain`` is a straight line or levels, as the data decide.
    arguments : tuple of Expression
    settings : tuple of (str, value)
        The options given, sorted by name; `options` is the same as a read-only mapping.
    name : str
        Normalised text without the options that only tune the fit (detail, smoothing, df). It can
        stand in a formula: odd column names keep their backticks, bare arithmetic its braces.
    span : tuple of int
    """

    kind: Kind
    arguments: tuple[Expression, ...]
    settings: tuple[tuple[str, Option], ...]
    name: str
    span: tuple[int, int] = field(compare=False)

    @property
    def options(self) -> Mapping[str, Option]:
        """The options given, by name."""
        return MappingProxyType(dict(self.settings))


@dataclass(frozen=True)
class Term:
    """A product of factors; its name joins theirs with colons."""

    factors: tuple[Factor, ...]
    name: str
    span: tuple[int, int] = field(compare=False)


@dataclass(frozen=True)
class Model:
    """A formula that has been read: an outcome, and terms in the order written."""

    text: str
    outcome: Expression
    terms: tuple[Term, ...]


def parse(text: str) -> Model:
    """Read a formula.

    Parameters
    ----------
    text : str
        Such as ``"log(y) ~ age + C(site) + curve(dose) + cycle(hour, period=24)"``.

    Returns
    -------
    Model

    Raises
    ------
    FormulaError
        Whenever the formula cannot be read; the message marks the place.
    """
    source = _Source.of(text, "formula")
    pieces = _scan(source)
    tildes = [i for i, piece in enumerate(pieces) if source.cut(piece) == "~"]
    if len(tildes) != 1:
        place = pieces[tildes[1]][1:] if tildes else None
        raise source.error(
            "A formula has one ~, between the outcome and the terms, as in y ~ x + curve(z).", place
        )
    left, right = pieces[: tildes[0]], pieces[tildes[0] + 1 :]
    if not left or not right:
        what = "the outcome before" if not left else "the terms after"
        none = "" if not left else " For a model of the intercept alone write y ~ 1."
        raise source.error(f"Nothing stands for {what} the ~.{none}", pieces[tildes[0]][1:])
    whole = (left[0][1], left[-1][2])
    if len(left) > 1 or left[0][0] not in _OPERANDS:
        raise source.error(
            "The outcome is one column or one expression. Arithmetic stands in braces, "
            "as in {cases / people} ~ x.",
            whole,
        )
    outcome = _factor(source, left[0], strict=True)
    if outcome.kind != "plain":
        raise source.error("The outcome is a column or an expression, not a term.", whole)
    terms = _terms(source, right, strict=True)
    for term in terms:
        if len(term.factors) > 1:
            raise source.error(
                f"{term.name}: products of terms are not available yet in this version.", term.span
            )
    return Model(text, outcome.arguments[0], terms)


def find(text: str, names: Sequence[str]) -> str:
    """Resolve the name of a term as somebody typed it.

    Spaces and tuning options do not matter. ``period=`` and ``base=``, or the call around a
    column, may be left out when the rest fits one name only.

    Parameters
    ----------
    text : str
    names : sequence of str
        Names of terms, and perhaps others such as that of the intercept.

    Returns
    -------
    str
        One of `names`.

    Raises
    ------
    FormulaError
        If none fits, or several.
    """
    if text in names:
        return text
    typed = _lone_term(text)
    known = {name: term for name in names if (term := _lone_term(name)) is not None}
    fits: list[str] = []
    for leniency in range(3):
        if typed is not None and not fits:
            fits = [name for name, term in known.items() if _fits(typed, term, leniency)]
    if len(fits) == 1:
        return fits[0]
    if fits:
        raise FormulaError(f"'{text}' may be any of {', '.join(fits)}. Write one of them in full.")
    raise FormulaError(f"The model has no term '{text}'. {nearest(str(text), names)}")


def _lone_term(text: str) -> Term | None:
    try:
        source = _Source.of(text, "term")
        pieces = _scan(source)
        if any(source.cut(piece) == "~" for piece in pieces):
            return None
        terms = _terms(source, pieces, strict=False)
    except FormulaError:
        # a lone column with a space in its name, typed without the backticks
        quoted = isinstance(text, str) and re.fullmatch(r"[\w .]+", text) and f"`{text}`"
        return _lone_term(quoted) if quoted else None
    return terms[0] if len(terms) == 1 else None


def _fits(typed: Term, known: Term, leniency: int) -> bool:
    """Whether the names agree; or (1) all but naming options left out; or (2) the call too."""

    def fits(t: Factor, k: Factor) -> bool:
        alike = t.arguments == k.arguments and not any(key in _NAMING for key in t.options)
        like = alike and leniency >= 1 and t.kind == k.kind
        return t.name == k.name or like or (alike and leniency == 2 and t.kind == "plain")

    return len(typed.factors) == len(known.factors) and all(
        any(fits(t, k) for k in known.factors) for t in typed.factors
    )


# Reading ---------------------------------------------------------------------------------------

_Piece = tuple[str, int, int]  # kind, first character, one after the last
_OPERANDS = ("quoted", "brace", "name")
_STRING = r"'(?:\\.|[^'\\])*'|\"(?:\\.|[^\"\\])*\""
# \w leaves out the marks that go with letters of many scripts; what else comes in, Python refuses
_NAME = r"[^\W\d](?:\w|[^\x00-\x7f\s])*"
_OPAQUE = re.compile(rf"{_STRING}|`[^`]*`|\s|#|[(\[{{]|[)\]}}]")
_PIECE = re.compile(
    rf"(?P<quoted>`[^`]+`)|(?P<brace>\{{)|(?P<name>{_NAME})"
    r"|(?P<number>\.?\d[\w.]*)|(?P<operator>\*\*|[-+*/:~()])"
)
_TRAILER = re.compile(r"\s*[(\[]|\.\w+")


def _scan(source: _Source) -> list[_Piece]:
    """Cut a formula into what stands between the operators, and the operators."""
    text, at, depth = source.text, 0, 0
    pieces: list[_Piece] = []
    while at < len(text):
        if text[at].isspace():
            at += 1
            continue
        match = _PIECE.match(text, at)
        if match is None or match.lastgroup is None:
            raise source.error(_no_meaning(text[at]), (at, at + 1))
        kind, stop = match.lastgroup, match.end()
        if kind == "brace":
            stop = _close(source, at)
        while kind == "name" and (more := _TRAILER.match(text, stop)):
            stop = more.end() if more[0][-1] not in "([" else _close(source, more.end() - 1)
        piece = (kind, at, stop)
        before = source.cut(pieces[-1]) if pieces else "~"
        if kind == "operator":
            depth += (text[at] == "(") - (text[at] == ")")
            if depth > _DEEPEST:
                raise source.error(f"More than {_DEEPEST} brackets stand in each other.", piece[1:])
        if (kind != "operator" or text[at] == "(") and (
            before == ")" or (pieces and pieces[-1][0] != "operator")
        ):
            raise source.error(
                f"An operator such as + is missing between {before} and {source.cut(piece)}.",
                (pieces[-1][1], stop),
            )
        _check_operand(source, pieces, piece)
        pieces.append(piece)
        at = stop
    return pieces


def _no_meaning(character: str) -> str:
    if character == ".":
        return "The dot for 'all other columns' is not available. Name the columns."
    return (
        f"{character} has no meaning here. Terms are joined by + - : * / ** and parentheses; "
        "arithmetic and comparisons stand in braces, as in {x / 2}, and a column with an odd name "
        "in backticks, as in `body mass`."
    )


def _check_operand(source: _Source, pieces: Sequence[_Piece], piece: _Piece) -> None:
    """Numbers, and what the algebra would take silently in another sense than arithmetic."""
    here, span = source.cut(piece), piece[1:]
    before = source.cut(pieces[-1]) if pieces else ""
    braces = "Arithmetic stands in braces, as in {x / 2}."
    if before == "**":
        if piece[0] != "number" or not re.fullmatch(r"[1-9]\d?", here):
            raise source.error("The power of a sum of terms is a whole number from 1 to 99.", span)
    elif here == "**" and pieces and pieces[-1][0] in _OPERANDS:
        bare = before.strip("{}")
        raise source.error(
            f"A term to a power is the term itself. {braces[:-9]}{{{bare} ** 2}}.",
            (pieces[-1][1], piece[2]),
        )
    elif here == "0" or (here == "1" and before == "-"):
        raise source.error(_INTERCEPT, span)
    elif piece[0] == "number" and (here != "1" or before in (":", "*", "/")):
        raise source.error(f"{here} cannot be a term or part of a product. {braces}", span)
    elif before == "1" and here in (":", "*", "/", "**"):
        raise source.error(f"1 is the intercept, not part of a product. {braces}", pieces[-1][1:])


_INTERCEPT = "The intercept always stays in the model: leave out 0 and - 1."


def _terms(source: _Source, pieces: Sequence[_Piece], strict: bool) -> tuple[Term, ...]:
    """The terms that formulaic's algebra makes of the pieces."""
    # formulaic sees one character for each distinct factor, at the place where the factor stands.
    # So it has no code to look into, its places are those of the text, and what differs for us
    # (the column `log(x)` and the logarithm of x) differs for it.
    letters = [" "] * len(source.text)
    symbols: dict[Factor, str] = {}
    factors: dict[int, Factor] = {}
    for piece in pieces:
        kind, start, stop = piece
        if kind in _OPERANDS:
            factor = factors[start] = _factor(source, piece, strict)
            letters[start] = symbols.setdefault(factor, chr(0x4E00 + len(symbols)))
        else:
            letters[start:stop] = source.text[start:stop]
    parser = DefaultFormulaParser()
    try:
        tree = parser.get_ast("".join(letters))
        _check_size(source, tree)
        found = list(parser.get_terms_from_ast(tree, context={}).root)
    except FormulaicError as error:
        context = re.sub("\x1b\\[[0-9;]*m", "", str(error)).partition("\n\n")[2]
        place = (context.index("⧛"), context.index("⧚") - 1) if "⧛" in context else None
        raise source.error("An operator or a bracket is misplaced here.", place) from error
    if not any(term == "1" for term in found):
        raise source.error(_INTERCEPT, None)
    terms: list[Term] = []
    for term in found:
        parts = tuple(factors[f.token.source_start] for f in term.factors if f.expr != "1")
        if parts and len(parts) < len(term.factors):
            raise source.error("The intercept 1 has no part in a product.", parts[0].span)
        if parts:
            span = (min(p.span[0] for p in parts), max(p.span[1] for p in parts))
            terms.append(Term(parts, ":".join(p.name for p in parts), span))
    _check_factors(source, terms, list(factors.values()))
    return tuple(terms)


def _check_size(source: _Source, tree: Any) -> None:
    """Refuse an algebra that would never finish, from upper bounds before it is worked out."""
    order, ahead = [], [tree]
    while ahead:
        order.append(node := ahead.pop())
        ahead.extend(node.args if isinstance(node, ASTNode) else ())
    sizes: dict[int, tuple[int, int]] = {}  # terms, and factors in the longest of them
    for node in reversed(order):
        n, d = 1, 1
        if isinstance(node, ASTNode):
            (n, d), (m, e) = sizes[id(node.args[0])], sizes[id(node.args[-1])]
            match node.operator.symbol:
                case "+" if len(node.args) == 2:
                    n, d = n + m, max(d, e)
                case ":":
                    n, d = n * m, d + e
                case "*":
                    n, d = n + m + n * m, d + e
                case "/":
                    n, d = n + m, n * d + e
                case "**":
                    power = int(node.args[1].token)  # _scan has seen to it that it is a number
                    n, d = n**power, d * power
        if n > _MOST_TERMS or d > _MOST_FACTORS:
            raise source.error(
                f"The formula asks for more than {_MOST_TERMS:,} terms, or for products of more "
                f"than {_MOST_FACTORS} factors.",
                None,
            )
        sizes[id(node)] = (n, d)


def _check_factors(source: _Source, terms: Sequence[Term], written: Sequence[Factor]) -> None:
    used: dict[str, Factor] = {}
    for term in terms:
        for factor in term.factors:
            first = used.setdefault(factor.name, factor)
            if first != factor:
                raise source.error(
                    f"{source.text[slice(*first.span)]} and {source.text[slice(*factor.span)]} "
                    "are the same term with different options. Keep one of them.",
                    factor.span,
                )
    counts = Counter(written)
    for factor in written:
        if factor.name not in used and counts[factor] == 1:
            raise source.error(
                f"{factor.name} is taken away, but no term has it. Arithmetic stands in braces, "
                "as in {-x}.",
                factor.span,
            )


def _factor(source: _Source, piece: _Piece, strict: bool) -> Factor:
    """Read one factor; unless `strict`, options that must be given may be left out."""
    kind, start, stop = piece
    braces = kind == "brace"
    node = _tree(source, start + braces, stop - braces)
    span = (start, stop)
    if not (isinstance(node, ast.Call) and isinstance(node.func, ast.Name)) or (
        node.func.id not in _CALLS
    ):
        expression = _expression(source, node)  # first: it bounds the depth of what is unparsed
        name = ast.unparse(node)
        if not isinstance(node, ast.Name | ast.Call):
            name = f"{{{name}}}"
        return Factor("plain", (expression,), (), name, span)
    call = node.func.id
    space, rules = _CALLS[call]
    if len(node.args) != 1:
        raise source.error(
            f"{call}() takes one column or expression, then options by name: "
            f"{', '.join(f'{key}=' for key in rules)}.",
            span,
        )
    argument = _expression(source, node.args[0])
    options: dict[str, Option] = {}
    for item in node.keywords:
        key, value = _option(source, call, item)
        if key in options:
            raise source.error(f"{key}= is given twice.", _span(item))
        options[key] = value
    if "smoothing" in options and "df" in options:
        raise source.error("smoothing= and df= both fix the smoothness. Give one of them.", span)
    if strict and "period" in rules and "period" not in options:
        raise source.error(
            f"{call}() needs its period: {call}({ast.unparse(node.args[0])}, period=...), "
            f"{_PERIOD.words}.",
            span,
        )
    named = [f"{k}={repr(v).removesuffix('.0')}" for k, v in options.items() if k in _NAMING]
    name = f"{call}({', '.join([ast.unparse(node.args[0]), *named])})"
    return Factor(space, (argument,), tuple(sorted(options.items())), name, span)


def _option(source: _Source, call: str, item: ast.keyword) -> tuple[str, Option]:
    rules, span = _CALLS[call][1], _span(item)
    if item.arg not in rules:
        raise source.error(
            f"{call}() has no option '{item.arg or '**'}'. {nearest(item.arg or '', rules)}", span
        )
    rule, node, sign = rules[item.arg], item.value, 1
    if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
        node, sign = node.operand, -1
    value = node.value if isinstance(node, ast.Constant) else None
    known = type(value) in (int, float) or (type(value) is str and sign == 1)
    if isinstance(value, int) and abs(value) > 2**62:
        value = math.inf  # no option has use for it, and float() of it might fail
    if not known or not rule.holds(value if sign == 1 else -value):  # type: ignore[arg-type, operator]
        raise source.error(f"{item.arg}= is {rule.words}.", span)
    return item.arg, rule.convert(value if sign == 1 else -value)  # type: ignore[operator]


