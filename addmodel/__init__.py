"""Additive models by smoothing splines: many predictors, smoothness chosen by the data."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from addmodel.errors import AddmodelError, Caution, DataError, FormulaError, ModelError

if TYPE_CHECKING:
    from addmodel.contrasts import Contrast
    from addmodel.effects import Effect
    from addmodel.fitting import Fit, compare, fit, load
    from addmodel.summary import Summary

__all__ = [
    "AddmodelError",
    "Caution",
    "Contrast",
    "DataError",
    "Effect",
    "Fit",
    "FormulaError",
    "ModelError",
    "Summary",
    "compare",
    "fit",
    "load",
]

# Where a public name lives; loaded when it is first asked for, so that `addmodel --help` is quick.
_HOMES = {
    "Contrast": "addmodel.contrasts",
    "Effect": "addmodel.effects",
    "Fit": "addmodel.fitting",
    "Summary": "addmodel.summary",
    "compare": "addmodel.fitting",
    "fit": "addmodel.fitting",
    "load": "addmodel.fitting",
}


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        from importlib import import_module

        value = getattr(import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'addmodel' has no attribute '{name}'")
