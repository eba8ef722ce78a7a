"""The verb `fit`, and the fitted model: its methods are the contents of what can be asked."""

from __future__ import annotations

import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pandas as pd

from addmodel import comparison, figures, store
from addmodel.averages import average, simulate
from addmodel.comparison import leave_one_out
from addmodel.contrasts import Contrast, contrast, slope, turning_points
from addmodel.data import read
from addmodel.effects import Effect, effect, effect_to_draw, partial_residuals
from addmodel.errors import Caution, ModelError, nearest
from addmodel.estimate import Estimate, Progress, estimate
from addmodel.formula import parse
from addmodel.inference import (
    DEFAULT_SEED,
    coefficients_table,
    components_table,
    corrected_df,
    posterior_draws,
)
from addmodel.outcomes import outcome_for
from addmodel.prediction import components_named, model_columns, predict
from addmodel.relativities import relativities
from addmodel.sentences import sentence
from addmodel.significance import Questions
from addmodel.solve.criteria import CRITERIA
from addmodel.spaces.base import FloatArray
from addmodel.summary import Summary, deviance_reduction, summarise

if TYPE_CHECKING:
    from matplotlib.figure import Figure


def fit(
    formula: str,
    data: object,
    *,
    outcome: object = "gaussian",
    weights: object = None,
    counts: object = None,
    offset: object = None,
    exposure: object = None,
    trials: object = None,
    event: object = None,
    scale: Literal["known", "estimated"] | None = None,
    criterion: str = "reml",
    missing: Literal["drop", "error"] = "drop",
    exact: bool = False,
    progress: Progress | None = None,
) -> Fit:
    """Fit an additive model whose smoothness is chosen by the data.

    Parameters
    ----------
    formula : str
        For example ``"y ~ curve(x) + cycle(hour, period=24) + site"``. A number stands for a
        straight line, text and categories for levels, ``C(x)`` makes levels of a number,
        ``curve(x)`` is a cubic smoothing spline and ``cycle(x, period=)`` a periodic one,
        ``place(u, v)`` a map in plane coordinates, ``globe(lat, lon)`` one in degrees,
        ``group(g)`` exchangeable levels. Products: ``a:b``, ``a*b``. Options: ``detail=`` (most
        functions, or "all"), ``smoothing=`` (fixes the smoothing parameter), ``df=`` (fixes the
        effective degrees of freedom), the last two for a term that is no product; of curve also
        ``order=`` (1 to 3: the derivative that is penalised).
    data : table, mapping or path
        A pandas, polars or arrow table, a mapping of names to arrays of equal length, or the path
        of a CSV or Parquet file.
    outcome : str or statsmodels family
        What is assumed of the outcome: "gaussian", "binomial", "poisson", "negative binomial" (its
        dispersion is estimated), "gamma", "inverse gaussian" or "tweedie" (these three with log
        link), or an instance of a statsmodels family with its link.
    weights : str or array (n,), optional
        Precision weights: a row's variance is σ²/weight. A column, an expression, or values.
    counts : str or array (n,), optional
        A row stands for that many equal rows.
    offset : str or array (n,), optional
        A known part of the linear predictor.
    exposure : str or array (n,), optional
        What a count is counted over (persons, hours): its logarithm is added to the offset.
    trials : str or array (n,), optional
        Trials of each binomial row; the outcome is then events (whole numbers) or proportions.
    event : optional
        The level of a yes/no outcome that is counted; by default the last, True, or 1.
    scale : {"known", "estimated"}, optional
        For counts and yes/no: whether the variance is what the distribution says (the default), or
        that times an estimated scale (quasi-likelihood, Wedderburn 1974).
    criterion : {"reml", "gcv", "ubre"}
        How smoothness is chosen: restricted maximum likelihood (outside the Gaussian case
        Laplace's approximation to it), generalised cross-validation, or, for a known scale, the
        unbiased risk estimate.
    missing : {"drop", "error"}
        What to do with rows that lack a used value. Dropped rows are counted in the summary.
    exact : bool
        Beyond 20,000 rows each number is rounded to one of some 1,000 cells, narrow where the data
        are dense, so that a million rows take seconds; the summary says by how much. With True
        nothing is rounded (and memory and time grow with rows times columns).
    progress : callable, optional
        Called with a short text as the work goes on.

    Returns
    -------
    Fit
        The fitted model.

    Raises
    ------
    AddmodelError
        FormulaError, DataError or ModelError; the message says what, where, and what to do.

    Warns
    -----
    Caution
        If the choice of smoothness did not settle.
    """
    if not isinstance(criterion, str) or criterion not in CRITERIA:
        raise ModelError(f"criterion={criterion!r} is not known. {nearest(criterion, CRITERIA)}")
    assumed = outcome_for(outcome, scale)
    if criterion == "ubre" and not assumed.scale_known:
        raise ModelError(
            f"criterion='ubre' needs a known scale, and that of a {assumed.name} outcome is "
            "estimated. Write criterion='gcv' or 'reml'."
        )
    if criterion != "reml" and assumed.dispersion_free:
        raise ModelError(
            "The dispersion of a negative binomial outcome is estimated by likelihood: leave "
            f"criterion={criterion!r} out, or pass families.NegativeBinomial(alpha=...)."
        )
    model = parse(formula)
    if criterion != "reml" and any(f.kind == "group" for t in model.terms for f in t.factors):
        raise ModelError(
            "Groups are exchangeable levels, whose variance is a matter of likelihood: leave "
            f"criterion={criterion!r} out."
        )
    rows = {
        "weights": weights,
        "counts": counts,
        "offset": offset,
        "exposure": exposure,
        "trials": trials,
    }
    table = read(
        data, model, **rows, event=event, binary=assumed.kind == "Binomial", missing=missing
    )
    given = {"outcome": outcome, **rows, "event": event, "scale": scale}
    arguments = {
        name: str(value) if isinstance(value, str) else f"<{name}>"
        for name, value in given.items()
        if value is not None and not (name == "outcome" and value == "gaussian")
    }
    found = estimate(
        model,
        table,
        assumed,
        CRITERIA[criterion],
        arguments,
        progress or (lambda text: None),
        exact,
    )
    if not found.settled:
        unsettled = next(c for c in found.cautions if "did not settle" in c)
        warnings.warn(unsettled, Caution, stacklevel=2)
    return Fit(found)


@dataclass(frozen=True, repr=False)
class Fit:
    """A fitted model. Everything it answers is derived from `estimate`, which never changes."""

    estimate: Estimate

    def __repr__(self) -> str:
        return str(self.summary())

    @cached_property
    def _sure(self) -> Estimate:
        """The estimate with the uncertainty of smoothing parameters at infinity, once asked for."""
        if self.estimate.beyond is not None:
            return self.estimate
        return replace(self.estimate, beyond=Questions(self.estimate).beyond())

    @cached_property
    def _answered(self) -> Estimate:
        """The estimate with every component's tests and overlap, once asked for."""
        return self._sure if self._sure.answers is not None else Questions(self._sure).answered()

    def summary(self) -> Summary:
        """How the fit went, the model in words, components, coefficients, cautions, the recipe."""
        return summarise(self._answered)

    @property
    def formula(self) -> str:
        """The formula as written."""
        return self.estimate.model.text

    @property
    def components(self) -> pd.DataFrame:
        """One row a component: effective_df, p_none, p_straight, share, overlap, smoothing.

        ``p_none`` asks whether the component is nothing at all, ``p_straight`` whether it is no
        more than its unpenalised part (a straight line, a tilted plane); blank where there is no
        such part. ``share`` is its part of the fitted values' variation, ``overlap`` how much of it
        the other components could do (0 to 1), ``smoothing`` λ with x scaled to [0, 1].
        """
        return components_table(self._answered)

    @property
    def coefficients(self) -> pd.DataFrame:
        """One row an unpenalised coefficient: estimate, std_error, lower, upper, p.

        The intercept is the mean at numbers 0, first levels and curves at their average.
        """
        return coefficients_table(self._sure)

    @property
    def cautions(self) -> tuple[str, ...]:
        """What the reader should know before using the numbers."""
        return self.estimate.cautions

    @property
    def linear_predictor(self) -> FloatArray:
        """Linear predictor of the rows used, offset included, shape (n,)."""
        if self.estimate.linear_predictor is None:
            raise ModelError(_ROWLESS)
        return self.estimate.linear_predictor

    @property
    def fitted(self) -> FloatArray:
        """Fitted means of the rows used, shape (n,)."""
        return self.estimate.outcome.mean(self.linear_predictor)

    @property
    def rows(self) -> np.ndarray[Any, np.dtype[np.int64]]:
        """Positions, in the data as read, of the rows used, shape (n,)."""
        if self.estimate.table is None:
            raise ModelError(_ROWLESS)
        return self.estimate.table.rows

    def residuals(self, kind: Literal["response", "scaled", "deviance"] = "scaled") -> FloatArray:
        """Residuals of the rows used, shape (n,).

        Parameters
        ----------
        kind : {"scaled", "response", "deviance"}
            "response": outcome − fitted. "scaled" (Pearson's): that over its standard deviation,
            so that its variance is about 1. "deviance": the signed root of the row's deviance,
            over √φ.
        """
        table = self.estimate.table
        if table is None:
            raise ModelError(_ROWLESS)
        kinds = ("scaled", "response", "deviance")
        if kind not in kinds:
            raise ModelError(f"kind={kind!r} is not known. {nearest(str(kind), kinds)}")
        mean, outcome = self.fitted, self.estimate.outcome
        plain = table.outcome - mean
        if kind == "response":
            return plain
        weight = np.sqrt(table.weights * table.trials / self.estimate.scale)
        if kind == "deviance":
            own = np.sqrt(np.maximum(outcome.deviances(table.outcome, mean), 0.0))
            return np.asarray(np.sign(plain) * own * weight, dtype=np.float64)
        return plain * weight / np.sqrt(outcome.variance(mean))

    @property
    def effective_df(self) -> float:
        """Effective degrees of freedom of the whole model, the intercept included."""
        return float(self.estimate.column_df.sum())

    @property
    def scale(self) -> float:
        """The scale φ: for a Gaussian outcome the variance of a row of weight one."""
        return self.estimate.scale

    @property
    def dispersion(self) -> float:
        """Pearson's X²/(n − τ): far above 1 the outcome varies more than it is assumed to."""
        return self.estimate.dispersion

    @property
    def aic(self) -> float:
        """−2 log-likelihood + 2 (effective degrees of freedom, and 1 for an estimated scale)."""
        return self._aic(self.effective_df)

    @property
    def aic_corrected(self) -> float:
        """AIC that also counts the smoothing parameters' uncertainty (Wood, Pya & Säfken 2016,

        J. Am. Stat. Assoc. 111).
        """
        return self._aic(corrected_df(self.estimate))

    def _aic(self, df: float) -> float:
        outcome = self.estimate.outcome
        extra = float(not outcome.scale_known) + float(outcome.dispersion_free)
        return 2 * (df + extra) - 2 * self.estimate.log_likelihood

    @property
    def deviance(self) -> float:
        """The deviance; for a Gaussian outcome the weighted residual sum of squares."""
        return self.estimate.deviance

    @property
    def deviance_reduction(self) -> float:
        """The part of the null deviance that the model takes away."""
        return deviance_reduction(self.estimate)

    @property
    def log_likelihood(self) -> float:
        """Log-likelihood at the estimated mean (Gaussian: with the variance deviance/n)."""
        return self.estimate.log_likelihood

    @property
    def criterion_value(self) -> float:
        """REML: log restricted likelihood, constants included. GCV, UBRE: the score."""
        return self.estimate.criterion_value

    @property
    def smoothing(self) -> pd.Series[float]:
        """Smoothing parameter of each penalised block; infinite where it ran there."""
        design = self.estimate.design
        names = [design.components[j].name for j in design.block_owners]
        return pd.Series(self.estimate.smoothing, index=pd.Index(names, name="component"))

    def predict(
        self,
        new: object,
        scale: Literal["outcome", "link"] = "outcome",
        interval: float | None = None,
        new_observation: bool = False,
        only: str | Sequence[str] | None = None,
        without: str | Sequence[str] | None = None,
        per: float | None = None,
        unseen: Literal["error", "base", "average"] = "error",
        groups: Literal["own", "zero", "average"] = "own",
        missing: Literal["keep", "error"] = "keep",
    ) -> FloatArray | pd.DataFrame:
        """Predict the mean at new rows.

        Parameters
        ----------
        new : table, mapping or path
            New rows, with the covariates' columns.
        scale : {"outcome", "link"}
            The mean itself, or the linear predictor.
        interval : float, optional
            Level of an interval, such as 0.95.
        new_observation : bool
            The interval is for a new observation (of weight one, of one trial), not for the mean;
            std_error is then its standard deviation.
        only, without : str or sequence of str, optional
            Only these components (without the intercept), or all but these.
        unseen : {"error", "base", "average"}
            What a level stands for that the fit has not seen: an error, the base level, or the
            average over the data (its interval is then as wide as levels differ).
        groups : {"own", "zero", "average"}
            Each row's own group (one that the fit has not seen stands at the middle of the groups),
            the middle for all, or the mean over the groups' distribution: on a log link the middle
            is a median, too low for a mean by exp(variance/2).
        per : float, optional
            For a fit with exposure: predict per so much of it; otherwise the new rows must have
            the column.
        missing : {"keep", "error"}
            A row that lacks a covariate gets a missing prediction and a caution, or is an error.

        Returns
        -------
        ndarray (n,) or DataFrame
            Without `interval` an array; with it a frame with prediction, std_error, lower, upper
            and outside (the row lies outside the data fitted). Row i answers row i. An offset and
            the exposure given as columns are looked up in the new rows; a binomial prediction is
            a probability.
        """
        return predict(
            self.estimate if interval is None else self._sure,
            new,
            scale=scale,
            interval=interval,
            new_observation=new_observation,
            only=only,
            without=without,
            per=per,
            unseen=unseen,
            groups=groups,
            missing=missing,
        )

    def effect(
        self,
        component: str,
        at: object = None,
        level: float = 0.95,
        units: Mapping[str, str] | None = None,
    ) -> Effect:
        """A component's partial effect with its pointwise and its simultaneous band.

        Parameters
        ----------
        component : str
            Its name, as in `components`; "cycle(hour)" finds "cycle(hour, period=24)". Or a sum of
            components: "curve(x)*curve(z)" is the joint surface.
        at : sequence or mapping, optional
            Values of the covariate, or of several by their names; by default evenly over the data,
            or every level. Of more than two numbers the others are held at their median, of a
            straight line beside a curve at its 10, 50 and 90 % points.
        level : float
            Level of the bands.
        units : mapping, optional
            Units of covariates by their names, for the figure's axes.
        """
        return effect(self._sure, component, at=at, level=level, units=units or {})

    def contrast(
        self,
        component: str,
        reference: object = "median",
        at: object = None,
        by: str | None = None,
        per: float | None = None,
        scale: Literal["outcome", "link"] = "outcome",
        level: float = 0.95,
        seed: int = DEFAULT_SEED,
    ) -> Contrast:
        """A component's difference from a reference, with its own band (of no width there).

        Parameters
        ----------
        component : str
            Its name, or a sum of components.
        reference : optional
            A value of the covariate, a mapping of several covariates' values, "median" (of levels
            the most frequent), "minimum" or "maximum" (of the curve; where that is uncertain, the
            band says so).
        at : sequence or mapping, optional
            Where; as for `effect`.
        by : str, optional
            A covariate that keeps each row's own value: one contrast for each of its levels.
        per : float, optional
            Instead of a reference: the difference that so much more of the covariate makes.
        scale : {"outcome", "link"}
            Ratios where the link makes them so (rate ratio, odds ratio), or differences on the
            link's scale.
        level, seed
            Level of the bands; seed of the simultaneous one.
        """
        return contrast(
            self._sure,
            component,
            reference=reference,
            at=at,
            by=by,
            per=per,
            scale=scale,
            level=level,
            seed=seed,
        )

    def slope(
        self, component: str, order: int = 1, at: object = None, level: float = 0.95
    ) -> pd.DataFrame:
        """First (or second) derivative of a curve, on the link's scale.

        The covariate, slope, std_error, lower, upper, lower_whole, upper_whole, and direction:
        rising or falling where the simultaneous band says so, else unclear.
        """
        return slope(self._sure, component, order=order, at=at, level=level)

    def turning_points(
        self, component: str, at: object = None, level: float = 0.95, seed: int = DEFAULT_SEED
    ) -> pd.DataFrame:
        """Where a curve is highest and lowest: point, at, lower, upper, inside.

        The interval is over posterior draws; ``inside`` is the share of them whose extreme is not
        at an end of the data: where it is small, the curve has no turning point to speak of.
        """
        return turning_points(self._sure, component, at=at, level=level, seed=seed)

    def test(self, *names: str) -> pd.Series[float]:
        """Joint test of components, or of all that contain a covariate: p_none and p_straight.

        ``fit.test("age")`` asks for everything with age in it, interactions too; with
        ``fit.test("curve(age)", "age:site")`` for these together.
        """
        design = self.estimate.design
        chosen: list[int] = []
        for name in names:
            held = [
                j
                for j, c in enumerate(design.components)
                if isinstance(name, str) and any(design.columns[k].name == name for k in c.keys)
            ]
            chosen += held or components_named(self.estimate, name)
        if not chosen:
            raise ModelError("Name at least one component or covariate to test.")
        answer = Questions(self.estimate).of(sorted(set(chosen)))
        return pd.Series({"p_none": answer.none, "p_straight": answer.straight})

    def simulate(
        self,
        new: object,
        count: int = 1000,
        seed: int = DEFAULT_SEED,
        what: Literal["mean", "outcome"] = "mean",
        per: float | None = None,
    ) -> FloatArray:
        """Draws of predictions at new rows, shape (count, n), for any total or ratio of them.

        "mean": of the mean, with the coefficients' uncertainty; "outcome": of new outcomes.
        """
        return simulate(self._sure, new, count, seed=seed, what=what, per=per)

    def average(
        self,
        settings: Mapping[str, object],
        over: object,
        weights: object = None,
        level: float = 0.95,
        seed: int = DEFAULT_SEED,
        per: float | None = None,
    ) -> pd.DataFrame:
        """Standardised averages, and their differences and ratios (Lane & Nelder 1982,
        Biometrics 38).

        Parameters
        ----------
        settings : mapping
            Covariates and the values that all rows are given, such as ``{"arm": ["a", "b"]}``; all
            combinations, the first being the one that the others are compared with.
        over : table, mapping or path
            The rows over which predictions are averaged.
        weights : array (n,), optional
            Of the rows.

        Returns
        -------
        DataFrame
            A row a setting: average, difference and ratio, each with lower and upper.
        """
        return average(self._sure, settings, over, weights=weights, level=level, seed=seed, per=per)

    def relativities(self, folder: str | Path) -> list[Path]:
        """Write a log-link model as tables of factors: one CSV a component, and the base.

        Columns: the covariate, relativity (against the base level, or the median), lower, upper,
        exposure, and actual over expected (of a number: of the tenth of the data that it lies in).
        The base times one relativity of each table is the prediction for one unit of exposure;
        between a number's 401 points interpolate their logarithms.
        """
        return relativities(self._sure, folder)

    def leave_one_out(self) -> FloatArray:
        """Each row's deviance when it is left out, from leverages, λ held, shape (n,).

        Exact for a Gaussian outcome, else to one Newton step.
        """
        return leave_one_out(self.estimate)

    def plot(
        self,
        units: Mapping[str, str] | None = None,
        residuals: bool = False,
        sentences: bool = True,
        width: float = 180.0,
    ) -> Figure:
        """A sheet of all components' effects, on one scale.

        Parameters
        ----------
        units : mapping, optional
            Units of covariates by their names, such as ``{"temp": "°C"}``.
        residuals : bool
            Whether partial residuals are drawn behind the curves.
        sentences : bool
            Whether each component's sentence, with its p, is printed below it.
        width : float
            Millimetres.
        """
        design = self.estimate.design
        if not design.count:
            raise ModelError("The model has no components to draw.")
        if units is not None and not isinstance(units, Mapping):
            raise ModelError("units= is a mapping of covariates' names, such as {'temp': '°C'}.")
        if not 40.0 <= width <= 1000.0:
            raise ModelError(f"width= is in millimetres, from 40 to 1000; got {width!r}.")
        panels = []
        for j in range(design.count):
            panel = effect_to_draw(self._sure, j, units or {}).panel
            if isinstance(panel, figures.Panel) and residuals:
                panel = replace(panel, points=partial_residuals(self.estimate, j))
            if sentences:
                told = sentence(self._answered, j)
                held = panel.caption.removeprefix(design.components[j].name).lstrip(", ")
                panel = replace(panel, caption=f"{told} {held}".strip())
            panels.append(panel)
        return figures.sheet(panels, width)

    def columns(self, new: object) -> pd.DataFrame:
        """The model's columns at new rows, (n, P); columns @ coefficients = linear predictor.

        Their order is that of the coefficients in `draws`: the intercept, unpenalised columns,
        then each component's penalised functions.
        """
        return model_columns(self.estimate, new)

    def draws(self, count: int = 1000, seed: int = DEFAULT_SEED) -> FloatArray:
        """Posterior draws of all coefficients, shape (count, P), in the order of `columns`."""
        return posterior_draws(self._sure, count, seed)

    def save(self, path: str | Path) -> None:
        """Write the fit, without its rows, to a file; its name ends in .addmodel."""
        target = Path(path)
        if target.suffix != ".addmodel":
            raise ModelError(f"A saved fit ends in .addmodel; got '{target.name}'.")
        store.save(self._answered, target)


def load(path: str | Path) -> Fit:
    """Read a fit that `Fit.save` wrote; it gives the same predictions, bit for bit.

    Raises
    ------
    DataError
        If the file is missing, not a saved fit, damaged, or newer. No code in it is run.
    """
    return Fit(store.load(Path(path)))


_ROWLESS = (
    "This fit was loaded from a file, which holds no rows: predict(data) gives fitted values anew."
)


def compare(*fits: Fit, **named: Fit) -> pd.DataFrame:
    """Models side by side: effective_df, aic (corrected), the criterion, what is left out.

    ``am.compare(a, b)`` or with names ``am.compare(small=a, large=b)``. All fitted to the same
    rows. ``left_out_deviance`` is the sum of every row's deviance when it is left out (from
    leverages), with its standard error: smaller is better, as with ``aic``.

    Raises
    ------
    ModelError
        If the fits are of different rows or outcomes.
    """
    if not all(isinstance(fit, Fit) for fit in (*fits, *named.values())):
        raise ModelError(
            "compare() takes fits, such as compare(a, b) or compare(small=a, large=b)."
        )
    every = {f"{k + 1}: {fit.formula}": fit for k, fit in enumerate(fits)} | named
    return comparison.compare({name: fit.estimate for name, fit in every.items()})
