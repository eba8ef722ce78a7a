"""What several tests share: data, published test terms, problems from the package's own parts."""

from pathlib import Path

import numpy as np

from addmodel.assembly import assemble
from addmodel.data import read
from addmodel.formula import parse
from addmodel.laid import Laid
from addmodel.outcomes import outcome_for
from addmodel.solve.criteria import CRITERIA
from addmodel.solve.quadratic import Quadratic

DATA = Path(__file__).parent / "data"


def gw_terms(x: np.ndarray) -> np.ndarray:
    """Terms of Gu & Wahba (1991, SIAM J. Sci. Stat. Comput. 12), columns x1, x2, x3 (n, 3)."""
    a, b, c = x.T
    third = 0.2 * c**11 * (10 * (1 - c)) ** 6 + 10 * (10 * c) ** 3 * (1 - c) ** 10
    return np.column_stack([2 * np.sin(np.pi * a), np.exp(2 * b), third])


def laid_for(formula: str, data: object, outcome: str = "gaussian") -> Laid:
    """A model laid on data, before any smoothing parameter is chosen."""
    model = parse(formula)
    table = read(data, model, binary=outcome == "binomial")
    design = assemble(model, table)
    return Laid.on(design, table, outcome_for(outcome), CRITERIA["reml"], 1.0)


def problem_for(formula: str, data: object) -> Quadratic:
    """The reduced penalised quadratic of a Gaussian model on data, summed about its start."""
    laid = laid_for(formula, data)
    return laid.modes.quadratic(laid.start, fisher=True)
