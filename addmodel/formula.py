"""Formulas: text in, an outcome and a sum of terms out. Nothing here sees data.

formulaic works out the Wilkinson–Rogers algebra; what stands between its operators is read here.
"""

from __future__ import annotations

import ast
import math
import re
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal, NamedTuple

from formulaic.errors import FormulaicError
from formulaic.parser import DefaultFormulaParser
from formulaic.parser.types import ASTNode

from .errors import FormulaError, nearest
from .expression import DEEPEST, NAME, Expression, SourceText, span_of

Option = float | int | str
Kind = Literal["plain", "levels", "curve", "cycle", "place", "globe", "group"]

_MOST_TERMS, _MOST_FACTORS = 1_000, 20
_BRACES = "Arithmetic stands in braces, as in {}."
_INTERCEPT = "The intercept always stays in the model: leave out 0 and - 1."


class _Rule(NamedTuple):
    words: str
    holds: Callable[[Option], bool]  # of finite numbers and texts
    convert: Callable[[Any], Option] = float  # of numbers


def _above(bound: float, *texts: str) -> Callable[[Option], bool]:
    return lambda v: v in texts if isinstance(v, str) else v > bound


_DETAIL = _Rule(
    'a whole number of at least 1, or "all"',
    lambda v: v == "all" if isinstance(v, str) else 1 <= v == int(v),
    int,
)
_SMOOTHING = _Rule("a positive number", _above(0))
_PERIOD = _Rule(
    'a positive number, in the units of the column, or "year", "month", "week" or "day"',
    _above(0, "year", "month", "week", "day"),
)
_BASE = _Rule('a level, or "largest"', lambda v: True, lambda v: v)
_ORDER = _Rule("1, 2 or 3: the derivative whose square is penalised", lambda v: v in (1, 2, 3), int)
_DF = _Rule("a number above 1", _above(1))
_TUNING = {"detail": _DETAIL, "smoothing": _SMOOTHING}


class _Call(NamedTuple):
    kind: Kind
    arguments: str  # what it takes, in words
    fewest: int
    most: int
    rules: dict[str, _Rule]


_ONE = "one column or expression"
_CALLS: dict[str, _Call] = {
    "curve": _Call("curve", _ONE, 1, 1, {"order": _ORDER, **_TUNING, "df": _DF}),
    "cycle": _Call("cycle", _ONE, 1, 1, {"period": _PERIOD, **_TUNING, "df": _SMOOTHING}),
    "place": _Call("place", "two coordinates of one unit", 2, 2, {**_TUNING, "df": _DF}),
    "globe": _Call(
        "globe", "latitude and longitude in degrees", 2, 2, {**_TUNING, "df": _SMOOTHING}
    ),
    "group": _Call("group", "one column or more", 1, 8, {"smoothing": _SMOOTHING}),
    "C": _Call("levels", _ONE, 1, 1, {"base": _BASE}),
}
# These change what a term means, not only how closely it is fitted: they are part of its name.
_NAMING = ("period", "base", "order")


@dataclass(frozen=True)
class Factor:
    """One factor of a term.

    Attributes
    ----------
    kind : {"plain", "levels", "curve", "cycle", "place", "globe", "group"}
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
    source = SourceText.of(text, "formula")
    pieces = _scan(source)
    tildes = [i for i, piece in enumerate(pieces) if piece.text == "~"]
    if len(tildes) != 1:
        raise source.error(
            "A formula has one ~, between the outcome and the terms, as in y ~ x + curve(z).",
            pieces[tildes[1]].span if tildes else None,
        )
    left, tilde, right = pieces[: tildes[0]], pieces[tildes[0]], pieces[tildes[0] + 1 :]
    if not left or not right:
        what = "terms after the ~. For a model of the intercept alone write y ~ 1."
        what = what if left else "outcome before the ~."
        raise source.error(f"Nothing stands for the {what}", tilde.span)
    whole = (left[0].span[0], left[-1].span[1])
    if len(left) > 1 or left[0].kind not in _OPERANDS:
        message = (
            f"The outcome is one column or one expression. {_BRACES.format('{cases / people} ~ x')}"
        )
        raise source.error(message, whole)
    outcome = _factor(source, left[0], strict=True)
    if outcome.kind != "plain":
        raise source.error("The outcome is a column or an expression, not a term.", whole)
    terms = _terms(source, right, strict=True)
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
    typed, known = _lone_term(text), [(name, _lone_term(name)) for name in names]
    fits: list[str] = []
    for leniency in range(3):
        fits = fits or [n for n, term in known if typed and term and _fits(typed, term, leniency)]
    if len(fits) == 1:
        return fits[0]
    if fits:
        raise FormulaError(f"'{text}' may be any of {', '.join(fits)}. Write one of them in full.")
    raise FormulaError(f"The model has no term '{text}'. {nearest(str(text), names)}")


def find_sum(text: str, names: Sequence[str]) -> list[str]:
    """Resolve the name of a term, or of a sum of terms such as "curve(x)*curve(z)".

    Parameters
    ----------
    text : str
    names : sequence of str

    Returns
    -------
    list of str
        Each once, in the order of `names`.

    Raises
    ------
    FormulaError
        If one of them fits none of the names, or several.
    """
    if text in names:
        return [text]
    try:
        source = SourceText.of(text, "term")
        terms = _terms(source, _scan(source), strict=False)
    except FormulaError:
        terms = ()
    if len(terms) < 2:
        return [find(text, names)]
    found = {find(term.name, names) for term in terms}
    return [name for name in names if name in found]


def _lone_term(text: str) -> Term | None:
    try:
        source = SourceText.of(text, "term")
        pieces = _scan(source)
        terms = () if any(p.text == "~" for p in pieces) else _terms(source, pieces, strict=False)
    except FormulaError:
        # a lone column with a space in its name, typed without the backticks
        bare = isinstance(text, str) and re.fullmatch(r"[\w .]+", text)
        return _lone_term(f"`{text}`") if bare else None
    return terms[0] if len(terms) == 1 else None


def _fits(typed: Term, known: Term, leniency: int) -> bool:
    """Whether the names agree; or (1) all but naming options left out; or (2) the call too."""

    def fits(t: Factor, k: Factor) -> bool:
        alike = t.arguments == k.arguments and t.options.keys().isdisjoint(_NAMING)
        kinds = (k.kind, "plain")[:leniency]
        return t.name == k.name or (alike and t.kind in kinds)

    return len(typed.factors) == len(known.factors) and all(
        any(fits(t, k) for k in known.factors) for t in typed.factors
    )


# Reading ---------------------------------------------------------------------------------------


class _Piece(NamedTuple):
    kind: str  # a group of _PIECE
    text: str
    span: tuple[int, int]


_OPERANDS = ("quoted", "brace", "name")
_PIECE = re.compile(
    rf"(?P<quoted>`[^`]+`)|(?P<brace>\{{)|(?P<name>{NAME})"
    r"|(?P<number>\.?\d[\w.]*)|(?P<operator>\*\*|[-+*/:~()])"
)
_TRAILER = re.compile(r"\s*[(\[]|\.\w+")
_DOT = "The dot for 'all other columns' is not available. Name the columns."
_NO_MEANING = (
    "has no meaning here. Terms are joined by + - : * / ** and parentheses; arithmetic and "
    "comparisons stand in braces, as in {x / 2}, and a column with an odd name in backticks, "
    "as in `body mass`."
)


def _scan(source: SourceText) -> list[_Piece]:
    """Cut a formula into what stands between the operators, and the operators."""
    text, at, depth = source.text, 0, 0
    pieces = [_Piece("operator", "~", (0, 0))]  # as if one stood before, for the first to follow
    while at < len(text):
        if text[at].isspace():
            at += 1
            continue
        match = _PIECE.match(text, at)
        if match is None:
            message = _DOT if text[at] == "." else f"{text[at]} {_NO_MEANING}"
            raise source.error(message, (at, at + 1))
        kind, stop = str(match.lastgroup), match.end()
        if kind == "brace":
            stop = source.closing(at)
        while kind == "name" and (more := _TRAILER.match(text, stop)):
            stop = more.end() if more[0][-1] not in "([" else source.closing(more.end() - 1)
        piece = _Piece(kind, text[at:stop], (at, stop))
        depth += (piece.text == "(") - (piece.text == ")")
        if depth > DEEPEST:
            raise source.error(f"More than {DEEPEST} brackets stand in each other.", piece.span)
        _check_pair(source, pieces[-1], piece)
        pieces.append(piece)
        at = stop
    return pieces[1:]


def _check_pair(source: SourceText, last: _Piece, here: _Piece) -> None:
    """A missing operator, and what the algebra would silently take for other than arithmetic."""
    message, span = "", here.span
    both = (last.span[0], here.span[1])
    starts, ends = here.kind != "operator" or here.text == "(", last.kind != "operator"
    if starts and (ends or last.text == ")"):
        message = f"An operator such as + is missing between {last.text} and {here.text}."
        span = both
    elif last.text == "**":
        if not re.fullmatch(r"[1-9]\d?", here.text):
            message = "The power of a sum of terms is a whole number from 1 to 99."
    elif here.text == "**" and last.kind in _OPERANDS:
        power = _BRACES.format(f"{{{last.text.strip('{}')} ** 2}}")
        message, span = f"A term to a power is the term itself. {power}", both
    elif here.text == "0" or (here.text == "1" and last.text == "-"):
        message = _INTERCEPT
    elif here.kind == "number" and (here.text != "1" or last.text in (":", "*", "/")):
        message = f"{here.text} cannot be a term or part of a product. {_BRACES.format('{x / 2}')}"
    elif last.text == "1" and here.text in (":", "*", "/", "**"):
        message = f"1 is the intercept, not part of a product. {_BRACES.format('{x / 2}')}"
        span = last.span
    if message:
        raise source.error(message, span)


def _terms(source: SourceText, pieces: Sequence[_Piece], strict: bool) -> tuple[Term, ...]:
    """The terms that formulaic's algebra makes of the pieces."""
    # formulaic sees one character for each distinct factor, at the place where the factor stands.
    # So it has no code to look into, its places are those of the text, and what differs for us
    # (the column `log(x)` and the logarithm of x) differs for it.
    letters = [" "] * len(source.text)
    symbols: dict[Factor, str] = {}
    factors: dict[int, Factor] = {}
    for piece in pieces:
        start, stop = piece.span
        if piece.kind in _OPERANDS:
            factor = factors[start] = _factor(source, piece, strict)
            letters[start] = symbols.setdefault(factor, chr(0x4E00 + len(symbols)))
        else:
            letters[start:stop] = piece.text
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


def _check_size(source: SourceText, tree: Any) -> None:
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
            most = f"{_MOST_TERMS:,} terms, or for products of more than {_MOST_FACTORS} factors"
            raise source.error(f"The formula asks for more than {most}.", None)
        sizes[id(node)] = (n, d)


def _check_factors(source: SourceText, terms: Sequence[Term], written: Sequence[Factor]) -> None:
    used: dict[str, Factor] = {}
    for term in terms:
        for factor in term.factors:
            first = used.setdefault(factor.name, factor)
            if first != factor:
                two = f"{source.cut(first.span)} and {source.cut(factor.span)}"
                message = f"{two} are the same term with different options. Keep one of them."
                raise source.error(message, factor.span)
    counts = Counter(written)
    for factor in written:
        if factor.name not in used and counts[factor] == 1:
            message = f"{factor.name} is taken away, but no term has it. {_BRACES.format('{-x}')}"
            raise source.error(message, factor.span)


def _factor(source: SourceText, piece: _Piece, strict: bool) -> Factor:
    """Read one factor; unless `strict`, options that must be given may be left out."""
    span, braces = piece.span, piece.kind == "brace"
    node = source.tree(span[0] + braces, span[1] - braces)
    call = node.func.id if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) else ""
    if not isinstance(node, ast.Call) or call not in _CALLS:
        expression = source.expression(node)  # first: it bounds the depth of what is unparsed
        name = ast.unparse(node)
        name = name if isinstance(node, ast.Name | ast.Call) else f"{{{name}}}"
        return Factor("plain", (expression,), (), name, span)
    space, taken, fewest, most, rules = _CALLS[call]
    if not fewest <= len(node.args) <= most:
        known = ", ".join(f"{key}=" for key in rules)
        raise source.error(f"{call}() takes {taken}, then options by name: {known}.", span)
    arguments = tuple(source.expression(argument) for argument in node.args)
    written = ", ".join(ast.unparse(argument) for argument in node.args)
    if len(set(arguments)) < len(arguments):
        raise source.error(f"{call}() names one column twice.", span)
    options: dict[str, Option] = {}
    for item in node.keywords:
        key, value = _option(source, call, item)
        if key in options:
            raise source.error(f"{key}= is given twice.", span_of(item))
        options[key] = value
    if "smoothing" in options and "df" in options:
        raise source.error("smoothing= and df= both fix the smoothness. Give one of them.", span)
    if strict and "period" in rules and "period" not in options:
        message = f"{call}() needs its period: {call}({written}, period=...), {_PERIOD.words}."
        raise source.error(message, span)
    if options.get("order") == 2:
        del options["order"]  # what a curve has anyway
    named = [f"{k}={repr(v).removesuffix('.0')}" for k, v in options.items() if k in _NAMING]
    name = f"{call}({', '.join([written, *named])})"
    return Factor(space, arguments, tuple(sorted(options.items())), name, span)


def _option(source: SourceText, call: str, item: ast.keyword) -> tuple[str, Option]:
    rules, span = _CALLS[call].rules, span_of(item)
    if item.arg not in rules:
        message = f"{call}() has no option '{item.arg or '**'}'. {nearest(item.arg or '', rules)}"
        raise source.error(message, span)
    rule, node, sign = rules[item.arg], item.value, 1
    if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
        node, sign = node.operand, -1
    value: Any = node.value if isinstance(node, ast.Constant) else None
    number = type(value) is float and value < math.inf
    number = number or (type(value) is int and value <= 2**62)  # none has use for a larger one
    value = sign * value if number else value
    if not (number or (type(value) is str and sign == 1)) or not rule.holds(value):
        raise source.error(f"{item.arg}= is {rule.words}.", span)
    return item.arg, value if isinstance(value, str) else rule.convert(value)
