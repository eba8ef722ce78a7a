"""The summary: what was fitted, how it went, and what to mind. Data first, text after."""

from __future__ import annotations

import html
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from addmodel.columns import bare_name
from addmodel.estimate import Estimate
from addmodel.files import replacing
from addmodel.inference import coefficients_table, components_table, p_text
from addmodel.sentences import overlap_cautions, sentence
from addmodel.spaces.base import Space
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.globe import Globe
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.place import Place

WIDTH = 88


@dataclass(frozen=True)
class Summary:
    """A fit's summary, part by part in the order it is read.

    Attributes
    ----------
    how : str
        How the fit went.
    words : str
        The model in words.
    components, coefficients : pandas.DataFrame
        The two tables.
    sentences : tuple of str
        For each component one sentence, made from its numbers.
    cautions : tuple of str
        What the reader should know before using the numbers.
    recipe : str
        A call that refits the model.
    """

    how: str
    words: str
    components: pd.DataFrame
    coefficients: pd.DataFrame
    sentences: tuple[str, ...]
    cautions: tuple[str, ...]
    recipe: str

    def __str__(self) -> str:
        parts = [
            ("How the fit went", _wrapped(self.how)),
            ("The model in words", _wrapped(self.words)),
        ]
        if len(self.components):
            told = "\n".join(_wrapped(s, first="- ") for s in self.sentences)
            parts.append(("Components", f"{_components_text(self.components)}\n\n{told}"))
        parts.append(("Coefficients", _coefficients_text(self.coefficients)))
        cautions = "\n".join(_wrapped(c, first="- ") for c in self.cautions)
        if cautions:
            parts.append(("Cautions", cautions))
        parts.append(("To refit this model", textwrap.indent(self.recipe, "  ")))
        return "\n\n".join(f"{title}\n{body}" for title, body in parts)

    __repr__ = __str__

    def _tables(self) -> list[tuple[str, pd.DataFrame]]:
        tables = [("Components", components_shown(self.components))] if len(self.components) else []
        return [*tables, ("Coefficients", coefficients_shown(self.coefficients))]

    def markdown(self) -> str:
        """The summary as Markdown."""
        parts = [f"## How the fit went\n\n{self.how}", f"## The model in words\n\n{self.words}"]
        for title, table in self._tables():
            rows = [["", *table.columns], ["---"] * (1 + table.shape[1])]
            rows += [[str(i), *map(str, r)] for i, r in zip(table.index, table.values, strict=True)]
            safe = [[cell.replace("|", "\\|") for cell in row] for row in rows]
            lines = "\n".join("| " + " | ".join(row) + " |" for row in safe)
            told = _bullets(self.sentences) if title == "Components" else ""
            parts.append(f"## {title}\n\n{lines}{told}")
        if self.cautions:
            parts.append("## Cautions" + _bullets(self.cautions))
        parts.append(f"## To refit this model\n\n    {self.recipe}")
        return "\n\n".join(parts) + "\n"

    def html(self) -> str:
        """The summary as a piece of HTML."""
        say = html.escape
        parts = [f"<h3>How the fit went</h3><p>{say(self.how)}</p>"]
        parts.append(f"<h3>The model in words</h3><p>{say(self.words)}</p>")
        for title, table in self._tables():
            body = table.to_html(border=0, escape=True)
            told = "".join(f"<li>{say(s)}</li>" for s in self.sentences)
            told = f"<ul>{told}</ul>" if title == "Components" else ""
            parts.append(f"<h3>{title}</h3>{body}{told}")
        if self.cautions:
            listed = "".join(f"<li>{say(c)}</li>" for c in self.cautions)
            parts.append(f"<h3>Cautions</h3><ul>{listed}</ul>")
        parts.append(f"<h3>To refit this model</h3><pre>{say(self.recipe)}</pre>")
        return "\n".join(parts)

    def _repr_html_(self) -> str:
        return self.html()

    def latex(self) -> str:
        """Both tables for LaTeX with booktabs."""
        found = []
        for title, table in self._tables():
            head = " & ".join(["", *(_tex(c) for c in table.columns)]) + r" \\"
            rows = [
                " & ".join(_tex(str(v)) for v in [i, *r]) + r" \\"
                for i, r in zip(table.index, table.values, strict=True)
            ]
            columns = "l" + "r" * table.shape[1]
            body = "\n".join(rows)
            found.append(
                f"% {title}\n\\begin{{tabular}}{{{columns}}}\n\\toprule\n{head}\n\\midrule\n"
                f"{body}\n\\bottomrule\n\\end{{tabular}}\n"
            )
        return "\n".join(found)

    def csv(self, folder: str | Path) -> None:
        """Write components.csv and coefficients.csv, with all digits, to a folder."""
        target = Path(folder)
        target.mkdir(parents=True, exist_ok=True)
        for name, table in (("components", self.components), ("coefficients", self.coefficients)):
            with replacing(target / f"{name}.csv") as temporary:
                table.to_csv(temporary)


def summarise(estimate: Estimate) -> Summary:
    """The summary of what was estimated, its components' tests answered."""
    return Summary(
        how=_how(estimate),
        words=_words(estimate),
        components=components_table(estimate),
        coefficients=coefficients_table(estimate),
        sentences=tuple(sentence(estimate, j) for j in range(estimate.design.count)),
        cautions=(*estimate.cautions, *overlap_cautions(estimate)),
        recipe=_recipe(estimate),
    )


def _how(estimate: Estimate) -> str:
    rows = estimate.reading
    went = "Settled" if estimate.settled else "NOT SETTLED"
    left_out = [
        f"{count:,} with {reason} left out"
        for count, reason in ((rows.missing, "missing values"), (rows.weightless, "zero weight"))
        if count
    ]
    note = f" ({', '.join(left_out)})" if left_out else ""
    counted = f", which stand for {estimate.n:,.0f}" if estimate.n != rows.used else ""
    by = {"reml": "REML", "gcv": "GCV", "ubre": "UBRE"}[estimate.criterion]
    value = f"{by} = {estimate.criterion_value:,.3f}"
    steps = "step" if estimate.steps == 1 else "steps"
    cells = ""
    if estimate.cells:
        most = max(estimate.rounding.values())
        cells = (
            f" Numbers were rounded to at most {max(estimate.cells.values()):,} cells, by at most "
            f"{most:.2g} standard deviations (exact=True leaves them as they are)."
        )
    return (
        f"{went} in {estimate.steps} {steps}; {rows.used:,} of {rows.read:,} rows used{note}"
        f"{counted}; smoothness by {by} ({value}).{cells}"
    )


def _words(estimate: Estimate) -> str:
    name = estimate.model.outcome.text
    sentences = [outcome_words(estimate)]
    terms = [_term_words(estimate, j) for j in range(len(estimate.design.components))]
    if terms:
        listed = terms[0] if len(terms) == 1 else ", ".join(terms[:-1]) + " and " + terms[-1]
        sentences.append(f"{predictor_words(estimate)} is an intercept plus {listed}.")
    else:
        sentences.append(f"{predictor_words(estimate)} is one constant.")
    reduction = deviance_reduction(estimate)
    taken = f"the variance of {name}" if estimate.outcome.plain else "the null deviance"
    sentences.append(
        f"The model has {1 + sum_df(estimate):.1f} effective degrees of freedom and takes away "
        f"{_percent(reduction)} of {taken}."
    )
    design = estimate.design
    bending = [j for j, c in enumerate(design.components) if any(block.bends for block in c.blocks)]
    if bending:
        unsure = [design.components[j].name for j in bending if not estimate.detail_confirmed[j]]
        sentences.append(
            "The detail was confirmed: more functions would change nothing."
            if not unsure
            else f"The detail of {', '.join(unsure)} is bound: more functions might be used."
        )
    grouped = {j for j, block in design.owned_blocks if block.grouped}
    gone = [j for j in range(design.count) if estimate.at_infinity(j)]
    straight = [design.components[j].name for j in gone if j not in grouped]
    if straight:
        verb = "has" if len(straight) == 1 else "have"
        sentences.append(
            f"{', '.join(straight)} {verb} no bend left: the smoothing parameter ran to infinity, "
            "and only the unpenalised part remains."
        )
    alike = [design.components[j].name for j in gone if j in grouped]
    if alike:
        sentences.append(
            f"No variation is left between the groups of {', '.join(alike)}: the smoothing "
            "parameter ran to infinity."
        )
    sentences += _variances(estimate)
    return " ".join(sentences)


def outcome_words(estimate: Estimate) -> str:
    """What is assumed of the outcome, and how widely it varies."""
    name, outcome = estimate.model.outcome.text, estimate.outcome
    if outcome.plain:
        spread = np.sqrt(estimate.scale)
        return f"{name} is taken as Gaussian about its mean, with standard deviation {spread:.4g}."
    event = f" (counted: {estimate.reading.event})" if estimate.reading.event else ""
    about = f"{name}{event} is taken as {outcome.name.capitalize()} about its mean"
    if outcome.dispersion_free:
        alpha = float(outcome.family.alpha)
        return f"{about}, with variance μ + {alpha:.3g} μ²."
    pearson = f"Pearson's dispersion is {estimate.dispersion:.2f}"
    if outcome.scale_known:
        return f"{about}. {pearson}; the scale is taken as 1."
    return f"{about}, with scale {estimate.scale:.4g}. {pearson}."


LINK_WORDS = {
    "Identity": "The mean",
    "Log": "The log of the mean",
    "Logit": "The log odds",
    "Probit": "The probit of the mean",
    "CLogLog": "The complementary log-log of the mean",
}


def predictor_words(estimate: Estimate) -> str:
    """What the sum of the components is, by the link."""
    link = type(estimate.outcome.family.link).__name__
    return LINK_WORDS.get(link, f"The linear predictor (link {link})")


def _variances(estimate: Estimate) -> list[str]:
    """How much groups differ: the standard deviation √(φ/λ) of their effects."""
    design = estimate.design
    found = []
    for j, component in enumerate(design.components):
        blocks = [k for k in design.blocks_of(j) if design.blocks[k].grouped]
        plain = [k for k in blocks if not design.blocks[k].bends]
        if len(plain) == 1 and np.isfinite(estimate.smoothing[plain[0]]):
            spread = np.sqrt(estimate.scale / estimate.smoothing[plain[0]])
            found.append(f"{spread:.4g} ({component.name})")
    if not found:
        return []
    return [f"The standard deviation between groups is {', '.join(found)}."]


def _term_words(estimate: Estimate, j: int) -> str:
    component = estimate.design.components[j]
    if len(component.spaces) > 1:
        return "the product of " + " and ".join(
            space_words(estimate, space) for space in component.spaces
        )
    words = space_words(estimate, component.spaces[0])
    bends = not isinstance(component.spaces[0], Cycle | Globe | Group)
    flat = "which came out straight" if bends else "which came out flat"
    return f"{words}, {flat}" if estimate.at_infinity(j) else words


def space_words(estimate: Estimate, space: Space) -> str:
    """A space in words."""
    if isinstance(space, Line):
        return f"a straight line in {space.key}"
    if isinstance(space, Levels):
        return f"the {len(space.labels)} levels of {space.key} (base: {space.labels[space.base]})"
    if isinstance(space, Cycle):
        length = space.period if isinstance(space.period, str) else f"{space.period:g}"
        days = " days" if estimate.design.columns[space.key].kind == "date" else ""
        return f"a cycle of {space.key} (period {length}{days if length[0].isdigit() else ''})"
    if isinstance(space, Group):
        bare = ", ".join(bare_name(key) for key in space.keys)
        return f"{space.size:,} exchangeable groups of {bare}"
    if isinstance(space, Globe):
        return f"a map on the globe of {space.key}"
    if isinstance(space, Place):
        return f"a map of {space.key}"
    order = {1: "a broken line", 3: "a quintic curve"}.get(getattr(space, "order", 2), "a curve")
    return f"{order} of {space.key}"


def deviance_reduction(estimate: Estimate) -> float:
    """The part of the null deviance that the model takes away."""
    return 1 - estimate.deviance / estimate.null_deviance


def sum_df(estimate: Estimate) -> float:
    """Effective degrees of freedom of all components (the intercept's 1 not counted)."""
    return float(estimate.column_df[1:].sum())


def _recipe(estimate: Estimate) -> str:
    arguments = [repr(estimate.model.text), "data"]
    if estimate.criterion != "reml":
        arguments.append(f'criterion="{estimate.criterion}"')
    arguments += [f"{name}={_quoted(value)}" for name, value in estimate.arguments.items()]
    return f"addmodel.fit({', '.join(arguments)})"


def _wrapped(text: str, first: str = "") -> str:
    return textwrap.fill(
        text, WIDTH, initial_indent="  " + first, subsequent_indent="  " + " " * len(first)
    )


def components_shown(table: pd.DataFrame) -> pd.DataFrame:
    """The table of components as it is printed."""
    return pd.DataFrame(
        {
            "effective df": [f"{v:.2f}" for v in table["effective_df"]],
            "p: none": [p_text(v) for v in table["p_none"]],
            "p: straight": [p_text(v) for v in table["p_straight"]],
            "share": [_percent(v) for v in table["share"]],
            "overlap": ["" if np.isnan(v) else f"{v:.2f}" for v in table["overlap"]],
            "smoothing": [_smoothing_text(v) for v in table["smoothing"]],
        },
        index=list(table.index),
    )


def _components_text(table: pd.DataFrame) -> str:
    return textwrap.indent(components_shown(table).to_string(), "  ")


def _bullets(lines: Sequence[str]) -> str:
    return "\n\n" + "\n".join(f"- {line}" for line in lines) if lines else ""


def _tex(text: str) -> str:
    for plain, written in (("\\", r"\textbackslash "), *((c, "\\" + c) for c in "&%$#_{}")):
        text = text.replace(plain, written)
    return text.replace("<", "$<$").replace("~", r"\textasciitilde ").replace("^", r"\^{}")


def _quoted(value: str) -> str:
    """Text in quotes; what was given by values stands between angle brackets as it is."""
    return value if value.startswith("<") else f'"{value}"'


def _percent(part: float) -> str:
    return f"{100 * part + 0.0:.1f} %".replace("-0.0 %", "0.0 %") if np.isfinite(part) else ""


def _smoothing_text(value: float) -> str:
    if np.isnan(value):
        return ""
    return "infinite" if np.isinf(value) else f"{value:.3g}"


def coefficients_shown(table: pd.DataFrame) -> pd.DataFrame:
    """The table of coefficients as it is printed."""
    return pd.DataFrame(
        {
            "estimate": [f"{v:.5g}" for v in table["estimate"]],
            "std. error": [f"{v:.3g}" for v in table["std_error"]],
            "95 % interval": [
                f"{low:.5g} to {high:.5g}"
                for low, high in zip(table["lower"], table["upper"], strict=True)
            ],
            "p": [p_text(v) for v in table["p"]],
        },
        index=list(table.index),
    )


def _coefficients_text(table: pd.DataFrame) -> str:
    return textwrap.indent(coefficients_shown(table).to_string(), "  ")
