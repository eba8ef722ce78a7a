"""Which parts of a product each term of the formula brings, once its margins have theirs.

A term is a product of factors; each may stand for itself or for its constant, so a term could bring
a *piece* for every subset of its factors. It brings those that no other term of the formula brings:
`curve(x)*curve(z)` leaves the interaction alone to its last term, while `curve(x):curve(z)` by
itself brings the main effects too. A plain number and a group stand only for themselves: `x:site`
without `x` is a slope for each site, `group(g):x` slopes about zero (the rule of Wilkinson & Rogers
1973, Appl. Stat. 22, for products without their margins).
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from addmodel.formula import Term

Nature = Literal["number", "two", "levels", "smooth", "group"]
"""What a factor is on the data; "two" is a number with two distinct values."""


@dataclass(frozen=True)
class Piece:
    """Part of a term: a product of some of its factors, by position in the term.

    Levels in `full` keep their constant: they enter by all their levels and not by contrasts.
    """

    factors: tuple[int, ...]
    full: frozenset[int]


def pieces(term: Term, terms: Sequence[Term], natures: Mapping[str, Nature]) -> tuple[Piece, ...]:
    """The pieces of one of the model's terms; natures are by the factors' names."""
    names = [f.name for f in term.factors]
    loyal = {name for name in names if _loyal(natures[name], is_penalised(term, natures))}
    optional = [i for i, name in enumerate(names) if name not in loyal]
    owned = []
    for size in range(len(optional) + 1):
        for chosen in itertools.combinations(optional, size):
            piece = loyal | {names[i] for i in chosen}
            if piece and not _elsewhere(piece, term, terms, natures):
                owned.append(tuple(i for i, name in enumerate(names) if name in piece))
    return _merged(owned, [natures[name] in ("levels", "two") for name in names], loyal, names)


def is_penalised(term: Term, natures: Mapping[str, Nature]) -> bool:
    """Whether a factor of the term has a penalty."""
    return any(natures[f.name] in ("smooth", "group") for f in term.factors)


def has_margin(term: Term, without: int, terms: Sequence[Term]) -> bool:
    """Whether the term without one of its factors is in the formula too."""
    rest = {f.name for i, f in enumerate(term.factors) if i != without}
    return any({f.name for f in other.factors} == rest for other in terms)


def _loyal(nature: Nature, penalised: bool) -> bool:
    """Whether a factor has no constant to stand for it. In a penalised product, 0/1 is levels."""
    return nature in ("number", "group") or (nature == "two" and not penalised)


def _elsewhere(
    piece: set[str], term: Term, terms: Sequence[Term], natures: Mapping[str, Nature]
) -> bool:
    """Whether another term brings the piece: a margin of this one, or one that comes before it."""
    for other in terms:
        theirs = {f.name for f in other.factors}
        penalised = is_penalised(other, natures)
        fixed = {name for name in theirs if _loyal(natures[name], penalised)}
        # It could bring the piece; of several that could, the first in a fixed order does.
        if other is not term and fixed <= piece <= theirs and _place(other) < _place(term):
            return True
    return False


def _place(term: Term) -> tuple[int, tuple[str, ...]]:
    """Order of terms that does not depend on how the formula was written."""
    return len(term.factors), tuple(sorted(f.name for f in term.factors))


def _merged(
    owned: list[tuple[int, ...]], levelled: list[bool], loyal: set[str], names: list[str]
) -> tuple[Piece, ...]:
    """Two pieces that differ by levels alone are one, in which those keep their constant."""
    found = {factors: frozenset[int]() for factors in owned}
    for i, is_levels in enumerate(levelled):
        if not is_levels or names[i] in loyal:
            continue
        for factors in [f for f in found if i in f]:
            rest = tuple(j for j in factors if j != i)
            if rest in found and found[rest] == found[factors]:
                del found[rest]
                found[factors] |= {i}
    return tuple(Piece(factors, full) for factors, full in found.items())
