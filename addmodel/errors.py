"""What addmodel raises and warns with. Every message says what, where, and what to do."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class AddmodelError(ValueError):
    """Base of every error that addmodel raises on purpose."""


class FormulaError(AddmodelError):
    """The formula cannot be read, or asks for something that does not exist.

    Attributes
    ----------
    formula : str
        The formula as written.
    span : tuple of int or None
        First character of the offending place and the one after its last.
    """

    def __init__(self, message: str, formula: str = "", span: tuple[int, int] | None = None):
        self.formula = formula
        self.span = span
        super().__init__(message + _marked(formula, span))


class DataError(AddmodelError):
    """The data cannot be used as they are: columns, types, values, missing rows."""


class ModelError(AddmodelError):
    """The model cannot be laid on these data, or an option has no meaning for it."""


class Caution(UserWarning):
    """The result stands, but the reader should know something about it."""


def _marked(formula: str, span: tuple[int, int] | None) -> str:
    """The formula on a line of its own, the place between >> and <<."""
    if not formula:
        return ""
    if span is None:
        return f"\n    {formula}"
    start, stop = span
    return f"\n    {formula[:start]}>>{formula[start:stop]}<<{formula[stop:]}"


def nearest(name: str, known: Iterable[str]) -> str:
    """A hint naming the known names closest to a misspelt one, or what there is."""
    known = [str(k) for k in known]
    folded = {k.casefold(): k for k in known}
    close = difflib.get_close_matches(str(name).casefold(), folded, n=2, cutoff=0.6)
    close = [folded[c] for c in close]
    if close:
        return "Did you mean " + " or ".join(f"'{c}'" for c in close) + "?"
    shown = ", ".join(f"'{k}'" for k in known[:12])
    return f"There are: {shown}{', ...' if len(known) > 12 else ''}."
