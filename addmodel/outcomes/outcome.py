"""An outcome wraps a statsmodels family: derivatives, deviance, likelihood, and what y may be."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np
import scipy.special
from statsmodels.genmod import families
from statsmodels.genmod.families import links

from addmodel.data import Table
from addmodel.errors import DataError, ModelError, nearest
from addmodel.frames import BoolArray
from addmodel.outcomes.links import inverse_link, variance
from addmodel.spaces.base import FloatArray

NAMES = (
    "gaussian",
    "binomial",
    "poisson",
    "negative binomial",
    "gamma",
    "inverse gaussian",
    "tweedie",
)
FAMILIES = (
    families.Gaussian,
    families.Binomial,
    families.Poisson,
    families.NegativeBinomial,
    families.Gamma,
    families.InverseGaussian,
    families.Tweedie,
)
LINKS = (
    links.Identity,
    links.Log,
    links.Logit,
    links.Probit,
    links.CLogLog,
    links.LogLog,
    links.Cauchy,
    links.Power,
    links.Sqrt,
    links.InversePower,
    links.InverseSquared,
    links.NegativeBinomial,
    links.LogC,
)
KNOWN_SCALE = ("Binomial", "Poisson", "NegativeBinomial")
LEAST_WEIGHT = 1e-8
"""Working weight per prior weight of a count or yes/no row that is all but decided: under
separation coefficients run off until their rows weigh so little, and stop there."""

MANY = 1e15
"""numpy draws Poisson counts up to about 1e18."""


class Curvature(NamedTuple):
    """Derivatives of the log-likelihood in η, times φ, each (n,)."""

    slope: FloatArray  # φ ∂ℓ/∂η
    observed: FloatArray  # W = −φ ∂²ℓ/∂η²
    fisher: FloatArray  # its expectation


@dataclass(frozen=True)
class Outcome:
    """A distribution with its link.

    With μ = h(η), variance function V and a = h'/V(μ), for one row of prior weight w:
    φ∂ℓ/∂η = w(y − μ)a, W = w[h'a − (y − μ)a'], Fisher weight w h'a
    (McCullagh & Nelder 1989, Generalized Linear Models, ch. 2).
    """

    name: str
    family: Any
    scale_known: bool
    quasi: bool = False
    """The scale is estimated although the distribution fixes it (Wedderburn 1974)."""
    dispersion_free: bool = False
    """A negative binomial whose dispersion α is estimated."""

    @property
    def kind(self) -> str:
        """The family's class: Gaussian, Binomial, Poisson, ..."""
        return type(self.family).__name__

    @property
    def plain(self) -> bool:
        """Gaussian with identity link: the deviance is a quadratic in η."""
        return self.kind == "Gaussian" and type(self.family.link).__name__ == "Identity"

    @property
    def canonical(self) -> bool:
        """Whether observed and Fisher weights are the same."""
        pairs = {"Gaussian": "Identity", "Binomial": "Logit", "Poisson": "Log"}
        return pairs.get(self.kind) == type(self.family.link).__name__

    def mean(self, linear_predictor: FloatArray) -> FloatArray:
        """The outcome's mean μ at the linear predictor η, same shape."""
        return np.asarray(inverse_link(self.family.link)(linear_predictor)[0], dtype=np.float64)

    def deviance(self, y: FloatArray, mean: FloatArray, weights: FloatArray) -> float:
        """Weighted deviance: 2φ(ℓ at μ = y, less ℓ at μ)."""
        return float(weights @ self.deviances(y, mean))

    def deviances(self, y: FloatArray, mean: FloatArray) -> FloatArray:
        """Deviance of each row at weight one, (n,)."""
        if self.kind == "Gaussian":
            return (y - mean) ** 2
        xlogy = scipy.special.xlogy
        if self.kind == "Poisson":
            mu = np.maximum(mean, 1e-300)
            return np.asarray(2 * (xlogy(y, y / mu) - (y - mu)), dtype=np.float64)
        if self.kind == "Binomial":
            mu = np.clip(mean, 1e-300, 1 - 1e-16)
            parts = xlogy(y, y / mu) + xlogy(1 - y, (1 - y) / (1 - mu))
            return np.asarray(2 * parts, dtype=np.float64)
        return np.asarray(self.family._resid_dev(y, mean), dtype=np.float64)

    def curvature(self, y: FloatArray, eta: FloatArray, weights: FloatArray) -> Curvature:
        """Slope, observed and Fisher weight at η."""
        mean, h1, h2, _ = inverse_link(self.family.link)(eta)
        least = self._least(weights)
        if self.canonical:
            fisher = np.maximum(weights * h1, least)
            left = self._left(y, mean, fisher > least)
            return Curvature(weights * left, fisher, fisher)
        v, v1, _ = variance(self.family, mean)
        a, r = h1 / v, v1 / v
        a1 = h2 / v - h1 * a * r
        fisher = np.maximum(weights * h1 * a, least)
        left = self._left(y, mean, fisher > least)
        observed = fisher - weights * left * a1
        return Curvature(weights * left * a, observed, fisher)

    def _left(self, y: FloatArray, mean: FloatArray, undecided: BoolArray) -> FloatArray:
        """y − μ, (n,); nothing for a row that is decided, and rightly: there a mode may rest."""
        left = y - mean
        return np.where(undecided | (np.abs(left) > 10 * LEAST_WEIGHT), left, 0.0)

    def _least(self, weights: FloatArray) -> FloatArray:
        """The smallest Fisher weight a row may have, (n,): none but for counts and yes/no."""
        decided = self.kind in KNOWN_SCALE or self.kind == "Tweedie"
        return LEAST_WEIGHT * weights if decided else np.full_like(weights, -np.inf)

    def weight_slopes(
        self, y: FloatArray, eta: FloatArray, weights: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Derivatives in η of the observed and of the Fisher weight, each (n,)."""
        mean, h1, h2, h3 = inverse_link(self.family.link)(eta)
        if self.canonical:
            slope = np.where(weights * h1 > self._least(weights), weights * h2, 0.0)
            return slope, slope
        v, v1, v2 = variance(self.family, mean)
        a, r = h1 / v, v1 / v  # by ratios: powers of a huge variance would overflow
        a1 = h2 / v - h1 * a * r
        a2 = h3 / v - 3 * h2 * a * r - h1**2 * a * (v2 / v - 2 * r**2)
        fisher = weights * (h2 * a + h1 * a1)
        fisher = np.where(weights * h1 * a > self._least(weights), fisher, 0.0)
        return fisher + weights * (h1 * a1 - (y - mean) * a2), fisher

    def pearson(self, y: FloatArray, mean: FloatArray, weights: FloatArray) -> float:
        """Pearson's X² = Σ w (y − μ)²/V(μ)."""
        return float(weights @ ((y - mean) ** 2 / self.variance(mean)))

    def variance(self, mean: FloatArray) -> FloatArray:
        """V(μ): the variance of a row of weight one and scale one, (n,)."""
        return variance(self.family, mean)[0]

    def mean_slope(self, linear_predictor: FloatArray) -> FloatArray:
        """dμ/dη, (n,)."""
        return np.asarray(inverse_link(self.family.link)(linear_predictor)[1], dtype=np.float64)

    def draw(self, mean: FloatArray, scale: float, rng: np.random.Generator) -> FloatArray:
        """One outcome about each mean: a row of weight one, a binomial one of one trial.

        A quasi-likelihood has no distribution: counts are then drawn as a negative binomial and
        proportions as they are, with the variance that the scale says as near as that can come.
        """
        kind = self.kind
        if kind == "Gaussian":
            return np.asarray(rng.normal(mean, np.sqrt(scale)), dtype=np.float64)
        if kind == "Binomial":
            return (rng.uniform(size=mean.shape) < mean).astype(np.float64)
        if kind == "Gamma":
            return rng.gamma(1 / scale, mean * scale)
        if kind == "InverseGaussian":
            return rng.wald(mean, 1 / scale)
        if kind == "Tweedie":
            p = float(self.family.var_power)
            events = _poisson(rng, mean ** (2 - p) / (scale * (2 - p)))
            shape = (2 - p) / (p - 1)
            size = scale * (p - 1) * mean ** (p - 1)
            drawn = rng.gamma(np.maximum(events * shape, 1e-12), size)
            return np.where(events > 0, drawn, 0.0)
        if kind == "NegativeBinomial":
            alpha = float(self.family.alpha)
            return _poisson(rng, rng.gamma(1 / alpha, alpha * mean))
        spread = scale - 1
        return _poisson(rng, rng.gamma(mean / spread, spread) if spread > 1e-9 else mean)

    def with_dispersion(self, alpha: float) -> Outcome:
        """The negative binomial with another dispersion."""
        link = self.family.link
        return replace(self, family=families.NegativeBinomial(link=link, alpha=alpha))

    def described(self) -> dict[str, Any]:
        """Plain values from which `outcome_described` makes the outcome again."""
        parts = {name: getattr(self.family, name, None) for name in ("alpha", "var_power")}
        link = self.family.link
        return {
            "name": self.name,
            "kind": self.kind,
            "link": type(link).__name__,
            "power": getattr(link, "power", None),
            **parts,
            "scale_known": self.scale_known,
            "quasi": self.quasi,
            "dispersion_free": self.dispersion_free,
        }

    def check(self, table: Table) -> None:
        """Whether the outcome's values are possible.

        Raises
        ------
        DataError
            Naming the first rows that are not.
        """
        y = table.outcome
        rules = {
            "Poisson": (y < 0, "at least 0"),
            "NegativeBinomial": (y < 0, "at least 0"),
            "Gamma": (y <= 0, "above 0"),
            "InverseGaussian": (y <= 0, "above 0"),
            "Tweedie": (y < 0, "at least 0"),
            "Binomial": ((y < 0) | (y > 1), "between 0 and 1"),
        }
        if self.kind not in rules:
            return
        wrong, words = rules[self.kind]
        if wrong.any():
            rows = ", ".join(str(r) for r in table.rows[wrong][:5])
            raise DataError(
                f"{table.outcome_name} must be {words} for a {self.name} outcome; it is not in "
                f"{int(wrong.sum())} rows, first in {rows} (rows are counted from 0)."
            )
        if self.kind in ("Poisson", "NegativeBinomial") and (y != np.floor(y)).any():
            rows = ", ".join(str(r) for r in table.rows[y != np.floor(y)][:5])
            raise DataError(
                f"{table.outcome_name} must be whole for a {self.name} outcome; it is not in rows "
                f"{rows} (counted from 0). For rates, give the count and exposure=."
            )


def _poisson(rng: np.random.Generator, rate: FloatArray) -> FloatArray:
    """Poisson counts (n,); beyond what numpy can draw, normal ones, by then the same."""
    small = rng.poisson(np.minimum(rate, MANY)).astype(np.float64)
    if rate.max(initial=0.0) <= MANY:
        return small
    large = np.round(rng.normal(rate, np.sqrt(rate)))
    return np.where(rate > MANY, large, small)


def outcome_for(wanted: object, scale: str | None = None) -> Outcome:
    """The outcome of a name, or around a statsmodels family instance.

    Parameters
    ----------
    wanted : str or statsmodels family
        One of NAMES, or an instance of a family with its link.
    scale : {None, "known", "estimated"}
        Whether φ is known (counts and yes/no: 1) or estimated; None: as the distribution has it.

    Raises
    ------
    ModelError
        If there is no such outcome, or its scale cannot be as asked for.
    """
    if scale not in (None, "known", "estimated"):
        raise ModelError(f"scale={scale!r} is not known; it is 'known' or 'estimated'.")
    log = families.links.Log
    made = {
        "gaussian": families.Gaussian,
        "binomial": families.Binomial,
        "poisson": families.Poisson,
        "negative binomial": lambda: families.NegativeBinomial(alpha=1.0),
        "gamma": lambda: families.Gamma(link=log()),
        "inverse gaussian": lambda: families.InverseGaussian(link=log()),
        "tweedie": lambda: families.Tweedie(link=log(), var_power=1.5, eql=False),
    }
    if isinstance(wanted, families.Family):
        family, name = wanted, type(wanted).__name__.lower()
    elif isinstance(wanted, str) and wanted in made:
        family, name = made[wanted](), wanted
    elif isinstance(wanted, str):
        raise ModelError(f"outcome='{wanted}' is not known. {nearest(wanted, NAMES)}")
    else:
        raise ModelError(
            "outcome= is a name such as 'poisson', or a statsmodels family instance such as "
            f"families.Gamma(); got {wanted!r}."
        )
    known = type(family).__name__ in KNOWN_SCALE
    if scale == "known" and not known:
        raise ModelError(
            f"The scale of a {name} outcome is not known: it is estimated. Leave scale= out."
        )
    return Outcome(
        name=name,
        family=family,
        scale_known=known and scale != "estimated",
        quasi=known and scale == "estimated",
        dispersion_free=wanted == "negative binomial",
    )


def outcome_described(parts: Any) -> Outcome:
    """The outcome that `Outcome.described` describes.

    Raises
    ------
    ValueError
        If it names a family or link that is not statsmodels'.
    """
    kinds = {k.__name__: k for k in FAMILIES}
    known = {k.__name__: k for k in LINKS}
    if parts["kind"] not in kinds or parts["link"] not in known:
        raise ValueError(f"unknown family or link: {parts['kind']}, {parts['link']}")
    made = known[parts["link"]]
    link = made(power=parts["power"]) if made is links.Power else made()
    options = {
        "NegativeBinomial": {"alpha": parts["alpha"]},
        "Tweedie": {"var_power": parts["var_power"], "eql": False},
    }
    family = kinds[parts["kind"]](link=link, **options.get(parts["kind"], {}))
    flags = {name: bool(parts[name]) for name in ("scale_known", "quasi", "dispersion_free")}
    return Outcome(name=str(parts["name"]), family=family, **flags)
