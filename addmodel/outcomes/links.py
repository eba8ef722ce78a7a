"""Inverse links with three derivatives, and variance functions with two.

statsmodels' links stop at the second derivative of the inverse; the exact gradient of Laplace's
criterion needs the third. Each is written out in a form that keeps its digits far from the centre
(McCullagh & Nelder 1989, ch. 4, for the links); a link that is not known is differenced.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.special
from statsmodels.genmod.families import links

from addmodel.spaces.base import FloatArray

Derivatives = tuple[FloatArray, FloatArray, FloatArray, FloatArray]
"""h, h', h'', h''' of the inverse link h at η, each (n,)."""
FARTHEST = 200.0
"""On the log scale; the cube of exp overflows a little beyond."""


def _identity(eta: FloatArray) -> Derivatives:
    zero = np.zeros_like(eta)
    return eta, zero + 1, zero, zero


def _log(eta: FloatArray) -> Derivatives:
    e = np.exp(np.clip(eta, -FARTHEST, FARTHEST))
    return e, e, e, e


def _logit(eta: FloatArray) -> Derivatives:
    mean = scipy.special.expit(eta)
    first = mean * scipy.special.expit(-eta)
    return mean, first, first * (1 - 2 * mean), first * (1 - 6 * first)


def _probit(eta: FloatArray) -> Derivatives:
    density = np.exp(-(eta**2) / 2) / np.sqrt(2 * np.pi)
    return scipy.special.ndtr(eta), density, -eta * density, (eta**2 - 1) * density


def _cloglog(eta: FloatArray) -> Derivatives:
    e = np.exp(np.clip(eta, -FARTHEST, 5.0))  # beyond, the mean is 1 to the last digit
    first = e * np.exp(-e)
    return -np.expm1(-e), first, first * (1 - e), first * (1 - 3 * e + e**2)


def _loglog(eta: FloatArray) -> Derivatives:
    e = np.exp(-np.clip(eta, -5.0, FARTHEST))
    mean = np.exp(-e)
    first = e * mean
    return mean, first, first * (e - 1), first * (1 - 3 * e + e**2)


def _cauchy(eta: FloatArray) -> Derivatives:
    s = 1 + eta**2
    mean = 0.5 + np.arctan(eta) / np.pi
    return mean, 1 / (np.pi * s), -2 * eta / (np.pi * s**2), (6 * eta**2 - 2) / (np.pi * s**3)


def _power(power: float) -> Callable[[FloatArray], Derivatives]:
    a = 1 / power

    def derivatives(eta: FloatArray) -> Derivatives:
        # Off the link's range the mean would be complex; the solver's step-halving leads back.
        inside = np.maximum(eta, 1e-10)
        return (
            inside**a,
            a * inside ** (a - 1),
            a * (a - 1) * inside ** (a - 2),
            a * (a - 1) * (a - 2) * inside ** (a - 3),
        )

    return derivatives


def _differenced(link: Any) -> Callable[[FloatArray], Derivatives]:
    def derivatives(eta: FloatArray) -> Derivatives:
        h = 1e-4 * np.maximum(1.0, np.abs(eta))
        second = link.inverse_deriv2
        third = (8 * (second(eta + h) - second(eta - h)) - second(eta + 2 * h)) / (12 * h)
        third += second(eta - 2 * h) / (12 * h)
        return link.inverse(eta), link.inverse_deriv(eta), second(eta), third

    return derivatives


WRITTEN: dict[type[Any], Callable[[FloatArray], Derivatives]] = {
    links.Identity: _identity,
    links.Log: _log,
    links.Logit: _logit,
    links.Probit: _probit,
    links.CLogLog: _cloglog,
    links.LogLog: _loglog,
    links.Cauchy: _cauchy,
}


def inverse_link(link: Any) -> Callable[[FloatArray], Derivatives]:
    """The inverse of a statsmodels link, with its derivatives."""
    if type(link) in WRITTEN:
        return WRITTEN[type(link)]
    power = getattr(link, "power", None)
    if isinstance(link, links.Power) and power:
        return _power(float(power))
    return _differenced(link)


def variance(family: Any, mean: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """V(μ), V'(μ), V''(μ) of a statsmodels family, each (n,)."""
    kind = type(family).__name__
    if kind == "Binomial":
        inside = np.clip(mean, 1e-14, 1 - 1e-14)
        return inside * (1 - inside), 1 - 2 * inside, np.full_like(mean, -2.0)
    if kind == "NegativeBinomial":
        alpha = float(family.alpha)
        inside = np.clip(mean, 1e-100, 1e50)
        return inside + alpha * inside**2, 1 + 2 * alpha * inside, np.full_like(mean, 2 * alpha)
    powers = {"Gaussian": 0.0, "Poisson": 1.0, "Gamma": 2.0, "InverseGaussian": 3.0}
    k = powers[kind] if kind in powers else float(family.var_power)
    farthest = 10.0 ** (100 / max(k, 1.0))  # the cube of the variance is still a number
    inside = np.clip(mean, 1 / farthest, farthest)
    return inside**k, k * inside ** (k - 1), k * (k - 1) * inside ** (k - 2)
