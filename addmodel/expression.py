"""Expressions: a column, or arithmetic of columns, read from text and computed on data.

Python's `ast` reads the text, against a list of what is allowed, and a walk over the checked tree
computes it. No text is ever run as code.
"""

from __future__ import annotations

import ast
import keyword
import math
import re
import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from .errors import DataError, FormulaError, nearest

DEEPEST = 50  # nested brackets or operations, far below Python's recursion limit
_LONGEST = 10_000  # characters

# \w leaves out the marks that go with letters of many scripts; what else comes in, Python refuses
NAME = r"[^\W\d](?:\w|[^\x00-\x7f\s])*"
_STRING = r"'(?:\\.|[^'\\])*'|\"(?:\\.|[^\"\\])*\""
_OPAQUE = re.compile(rf"{_STRING}|`[^`]*`|\s|#|[(\[{{]|[)\]}}]")

_TERMS = (
    "curve",
    "cycle",
    "place",
    "globe",
    "group",
    "C",
)  # calls that a formula reads as terms; no expression holds one
_FUNCTIONS: dict[str, np.ufunc] = {
    **{"log": np.log, "log2": np.log2, "log10": np.log10, "log1p": np.log1p, "sqrt": np.sqrt},
    **{"exp": np.exp, "expm1": np.expm1, "abs": np.absolute, "sin": np.sin, "cos": np.cos},
    **{"tan": np.tan, "minimum": np.minimum, "maximum": np.maximum},
}
_OPERATORS: dict[type[ast.AST], np.ufunc] = {
    **{ast.Add: np.add, ast.Sub: np.subtract, ast.Mult: np.multiply, ast.Div: np.divide},
    **{ast.Pow: np.power, ast.FloorDiv: np.floor_divide, ast.Mod: np.mod},
    **{ast.USub: np.negative, ast.UAdd: np.positive},
    **{ast.Lt: np.less, ast.LtE: np.less_equal, ast.Gt: np.greater, ast.GtE: np.greater_equal},
    **{ast.Eq: np.equal, ast.NotEq: np.not_equal},
}
_ALLOWED = (
    "An expression is made of columns, numbers, + - * / ** // %, comparisons and the functions "
    + ", ".join(f"{name}()" for name in _FUNCTIONS)
    + "."
)
_NO_CALL = (
    "{}() is not something a formula can call. A term is one of curve(x), "
    f"cycle(x, period=...), place(u, v), globe(lat, lon), group(g) and C(x). {_ALLOWED}"
)
_NUMBERS = ("integer", "floating", "mixed-integer-float", "decimal", "boolean")  # in objects


@dataclass(frozen=True)
class Expression:
    """One covariate, outcome or weight as written.

    Attributes
    ----------
    text : str
        Normalised source, such as ``"log(dose)"``; for a lone column its name, without backticks.
    names : tuple of str
        The columns it reads, in order of first appearance.
    span : tuple of int
        Its place in the text it came from: first character, and one after the last.
    """

    text: str
    names: tuple[str, ...]
    span: tuple[int, int] = field(compare=False)
    _tree: ast.expr = field(compare=False, repr=False)

    def evaluate(self, columns: Mapping[str, pd.Series]) -> pd.Series:
        """Compute the expression from columns of the data.

        Parameters
        ----------
        columns : mapping of str to Series, each of shape (n,)

        Returns
        -------
        Series, shape (n,)
            A lone column as it is, whatever its type; otherwise float64, or bool for a comparison
            (pandas' ``boolean`` where a compared value is missing). Values out of a function's
            domain are NaN or infinite and are not reported here.

        Raises
        ------
        DataError
            If a column does not exist, or arithmetic meets one that is not of numbers.
        """
        for name in self.names:
            if name not in columns:
                raise DataError(f"There is no column '{name}'. {nearest(name, columns)}")
        if isinstance(self._tree, ast.Name):
            return columns[self.names[0]]
        numbers = {name: self._numbers(name, columns[name]) for name in self.names}
        with np.errstate(all="ignore"):
            values = _compute(self._tree, numbers)
        result = pd.Series(values, index=columns[self.names[0]].index, name=self.text)
        if not isinstance(self._tree, ast.Compare):
            return result
        missing = result.isna()
        truth = result == 1.0
        return truth.astype("boolean").mask(missing) if missing.any() else truth

    def _numbers(self, name: str, column: pd.Series) -> np.ndarray[Any, Any]:
        types = pd.api.types
        if column.dtype == object and types.infer_dtype(column) in _NUMBERS:
            column = column.astype("Float64")
        if types.is_numeric_dtype(column.dtype) and not types.is_complex_dtype(column.dtype):
            return column.to_numpy(dtype=np.float64, na_value=np.nan)
        what = f"of type {column.dtype}"
        if types.is_datetime64_any_dtype(column.dtype):
            what = "a date"
        elif types.is_string_dtype(column.dtype) or column.dtype == object:
            what = "text"
        raise DataError(
            f"{self.text}: {name} is {what}, and arithmetic needs numbers. "
            "Make the column numeric first, or use it by itself."
        )


def parse_expression(text: str, role: str) -> Expression:
    """Read one expression that stands outside the formula, such as ``weights="1/se**2"``.

    Parameters
    ----------
    text : str
    role : str
        What it is for; heads the messages.

    Returns
    -------
    Expression

    Raises
    ------
    FormulaError
        If it is not an expression of columns; the message marks the place in `text`.
    """
    source = SourceText.of(text, role)
    return source.expression(source.tree(0, len(text)))


# Reading ---------------------------------------------------------------------------------------


@dataclass(frozen=True)
class SourceText:
    """A text being read, and what it is for."""

    text: str
    role: str

    @classmethod
    def of(cls, text: object, role: str) -> SourceText:
        if not isinstance(text, str):
            raise FormulaError(f"{role}: text is expected, not {type(text).__name__}.")
        source = cls(text, role)
        if len(text) > _LONGEST:
            raise FormulaError(f"{role}: {len(text):,} characters are too many ({_LONGEST:,}).")
        if odd := re.search("[\x00-\x08\x0e-\x1f\x7f\ud800-\udfff]", text):
            raise FormulaError(f"{role}: character {odd.start() + 1} cannot be printed.")
        if not text.strip():
            raise FormulaError(f"{role}: nothing is written.")
        return source

    def cut(self, span: tuple[int, int]) -> str:
        return self.text[slice(*span)]

    def error(self, message: str, span: tuple[int, int] | None) -> FormulaError:
        lead = "" if self.role == "formula" else f"{self.role}: "
        return FormulaError(lead + message, self.text, span)

    def closing(self, start: int) -> int:
        """One after the bracket that closes the one at `start`."""
        depth = 0
        for match in _OPAQUE.finditer(self.text, start):
            depth += (match[0] in "([{") - (match[0] in ")]}")
            if depth == 0:
                return match.end()
        raise self.error("This bracket is never closed.", (start, start + 1))

    def tree(self, start: int, stop: int) -> ast.expr:
        """Python's tree of a piece.

        Offsets count characters of the whole text. Names are as written there (Python would turn µ
        into another letter), in backticks where they need them.
        """
        piece = self.text[start:stop]
        start += len(piece) - len(piece.lstrip())
        piece = piece.strip()
        span = (start, start + len(piece)) if piece else (start - 1, stop + 1)
        depth = 0

        def plain(match: re.Match[str]) -> str:
            nonlocal depth
            text = match[0]
            depth += (text in "([{") - (text in ")]}")
            if text == "#" or depth > DEEPEST:
                what = "# has no meaning here." if text == "#" else "The brackets nest too deep."
                raise self.error(what, (start + match.start(), start + match.end()))
            return "_" * len(text) if text[0] == "`" else " " if text.isspace() else text

        code = _OPAQUE.sub(plain, piece)
        if piece.isidentifier():  # Python's own words too: a column may well be called class
            tree: ast.expr = ast.Name("_", col_offset=0, end_col_offset=len(code.encode()))
        else:
            try:
                with warnings.catch_warnings():
                    warnings.simplefilter("ignore")  # about code that will be refused below
                    tree = ast.parse(code, mode="eval").body
            except (SyntaxError, RecursionError, MemoryError) as error:
                words = [w for w in re.findall(r"\w+", code) if keyword.iskeyword(w)]
                hint = "".join(
                    f" A column called {w} stands in backticks: `{w}`." for w in words[:1]
                )
                reason = getattr(error, "msg", None) or "too deep, or not text Python can read"
                raise self.error(f"This cannot be read: {reason}.{hint}", span) from error
        encoded = code.encode()
        for node in ast.walk(tree):
            if isinstance(node, ast.expr | ast.keyword):
                first, last = (start + len(encoded[:at].decode()) for at in span_of(node))
                node.col_offset, node.end_col_offset = first, last
            if isinstance(node, ast.Name):
                name = self.cut(span_of(node))
                if not re.fullmatch("`[^`]+`|[^`]+", name):
                    raise self.error("A name in backticks is empty or misplaced.", span_of(node))
                if name.startswith("__"):
                    raise self.error(f"{name} is not a name that a formula can use.", span_of(node))
                node.id = _quoted(name.strip("`"))
        return tree

    def expression(self, node: ast.expr) -> Expression:
        """A tree, or a part of one, found to be an expression."""
        names = tuple(dict.fromkeys(_check(self, node, 0)))
        if not names:
            raise self.error("No column is named here.", span_of(node))
        text = names[0] if isinstance(node, ast.Name) else ast.unparse(node)
        return Expression(text, names, span_of(node), node)


def span_of(node: ast.expr | ast.keyword) -> tuple[int, int]:
    """The place of a node in the text it was read from."""
    return node.col_offset, node.end_col_offset or node.col_offset


def _quoted(name: str) -> str:
    plain = name.isidentifier() and re.fullmatch(NAME, name) and not name.startswith("__")
    return name if plain and not keyword.iskeyword(name) else f"`{name}`"


def _check(source: SourceText, node: ast.expr, depth: int) -> list[str]:
    """Refuse everything that is not on the list; return the columns in order."""
    if depth > DEEPEST:
        raise source.error("The expression nests too deep.", span_of(node))
    parts: list[ast.expr] = []
    match node:
        case ast.Name():
            return [node.id.strip("`")]
        case ast.Constant(value=value) if type(value) in (int, float):
            return []
        case ast.BinOp() if type(node.op) in _OPERATORS:
            parts = [node.left, node.right]
        case ast.UnaryOp() if type(node.op) in _OPERATORS:
            parts = [node.operand]
        case ast.Compare() if all(type(op) in _OPERATORS for op in node.ops):
            parts = [node.left, *node.comparators]
        case ast.Call(func=ast.Name(id=name)):
            _check_call(source, node, name)
            parts = node.args
        case ast.Call(func=ast.Attribute() as called):
            raise source.error(_NO_CALL.format(source.cut(span_of(called))), span_of(node))
        case ast.Attribute():
            raise source.error(
                f"A dot has no meaning here. A column with a dot in its name stands in "
                f"backticks, as in `a.b`. {_ALLOWED}",
                span_of(node),
            )
        case _:
            raise source.error(f"This is not allowed in an expression. {_ALLOWED}", span_of(node))
    return [name for part in parts for name in _check(source, part, depth + 1)]


def _check_call(source: SourceText, node: ast.Call, name: str) -> None:
    if name in _TERMS:
        message = f"{name}() is a term and cannot be part of an expression."
        raise source.error(message, span_of(node))
    if name not in _FUNCTIONS:
        raise source.error(_NO_CALL.format(name), span_of(node))
    wanted = _FUNCTIONS[name].nin
    if node.keywords or len(node.args) != wanted:
        number = "one value" if wanted == 1 else "two values"
        raise source.error(f"{name}() takes {number} and no options.", span_of(node))


def _compute(node: ast.expr, columns: Mapping[str, np.ndarray[Any, Any]]) -> Any:
    """The value of a checked tree: float64 throughout, comparisons 1, 0, or NaN if unknown."""
    match node:
        case ast.Name():
            return columns[node.id.strip("`")]
        case ast.BinOp():
            sides = (_compute(side, columns) for side in (node.left, node.right))
            return _OPERATORS[type(node.op)](*sides)
        case ast.UnaryOp():
            return _OPERATORS[type(node.op)](_compute(node.operand, columns))
        case ast.Call(func=ast.Name(id=name)):
            return _FUNCTIONS[name](*(_compute(part, columns) for part in node.args))
        case ast.Compare():
            values = [_compute(part, columns) for part in (node.left, *node.comparators)]
            truth: Any = 1.0
            for op, a, b in zip(node.ops, values[:-1], values[1:], strict=True):
                known = ~(np.isnan(a) | np.isnan(b))
                truth = truth * np.where(known, _OPERATORS[type(op)](a, b), np.nan)
            return truth
        case ast.Constant(value=int() | float() as value):
            # float64, never Python's integers: 9 ** 9 ** 9 is then infinite at once
            return np.float64(value) if abs(value) < 2**1023 else np.float64(math.inf)
    raise AssertionError(f"{type(node).__name__} passed the check")
