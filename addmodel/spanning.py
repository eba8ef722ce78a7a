"""Exact linear dependence among unpenalised columns: kept once, or an error that names them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from addmodel.errors import ModelError
from addmodel.spaces.base import FloatArray

DEPENDENT = 1e-9
"""A standardised column closer than this to the span of others counts as spanned."""


def spanned(parts: Sequence[FloatArray]) -> dict[tuple[int, int], int]:
    """Columns that another part spans: (part, column) -> the part that has them.

    Each part is one component's columns (n, p). Of two parts that span the same, the earlier keeps
    its columns.
    """
    parts = [_standardised(part) for part in parts]
    gone: dict[tuple[int, int], int] = {}

    def remaining(j: int) -> FloatArray:
        return parts[j][:, [k for k in range(parts[j].shape[1]) if (j, k) not in gone]]

    for j, part in enumerate(parts):
        for k in range(part.shape[1]):
            for i in [i for i in range(len(parts)) if i != j]:
                other = remaining(i)
                if not _spans(other, part[:, k]):
                    continue
                mutual = all(_spans(remaining(j), other[:, c]) for c in range(other.shape[1]))
                if mutual and i > j:
                    continue
                gone[j, k] = i
                break
    return gone


def check_rank(columns: FloatArray, names: Sequence[str]) -> None:
    """Refuse exact linear dependence among standardised columns (n, p).

    Raises
    ------
    ModelError
        Naming the columns that depend on each other.
    """
    n, p = columns.shape
    if p + 1 >= n:
        raise ModelError(
            f"The model has {p + 1} unpenalised coefficients and the data only {n} rows. "
            f"Leave out terms, or merge levels."
        )
    if p == 0:
        return
    diagonal = np.abs(np.diag(np.linalg.qr(columns / np.sqrt(n))[1]))
    for k in range(p):
        if diagonal[k] < DEPENDENT:
            solution = np.linalg.lstsq(columns[:, :k], columns[:, k], rcond=None)[0]
            with_it = [names[i] for i in range(k) if abs(solution[i]) > 1e-6]
            raise ModelError(
                f"'{names[k]}' is a linear combination of {', '.join(repr(w) for w in with_it)}: "
                f"the data cannot tell them apart. Leave one of them out of the formula."
            )


def _standardised(columns: FloatArray) -> FloatArray:
    centred = columns - columns.mean(axis=0)
    lengths = np.maximum(np.linalg.norm(centred, axis=0), np.finfo(float).tiny)
    standardised: FloatArray = centred / lengths
    return standardised


def _spans(others: FloatArray, column: FloatArray) -> bool:
    """Whether a standardised column lies in the span of others (standardised, centred)."""
    if others.shape[1] == 0:
        return False
    if others.shape[1] == 1 and abs(abs(float(others[:, 0] @ column)) - 1) > 1e-6:
        return False  # the usual case, cheaply
    solution = np.linalg.lstsq(others, column, rcond=None)[0]
    return bool(np.linalg.norm(column - others @ solution) < DEPENDENT)
