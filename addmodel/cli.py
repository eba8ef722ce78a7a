"""The command `addmodel`: fit, predict, demo. Heavy imports wait until a command runs."""

from __future__ import annotations

import re
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

if TYPE_CHECKING:
    import pandas as pd

    from addmodel.fitting import Fit

app = typer.Typer(
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Additive models by smoothing splines: curves, cycles, lines and levels from one formula, "
    "their smoothness chosen by the data.",
)

Formula = Annotated[
    str,
    typer.Argument(
        help="Such as 'y ~ curve(x) + cycle(hour, period=24) + site'.", show_default=False
    ),
]
Column = Annotated[str | None, typer.Option(help="A column, or an expression of columns.")]
DEMO_FORMULA = (
    "no2 ~ curve(wind) + curve(temperature) + curve(time)"
    ' + cycle(time, period="day") + cycle(time, period="week") + station'
)


@app.command()
def fit(
    data: Annotated[Path, typer.Argument(help="A CSV or Parquet file.", show_default=False)],
    formula: Formula,
    out: Annotated[Path, typer.Option(help="Folder for tables, figures and the saved fit.")],
    outcome: Annotated[str, typer.Option(help="What is assumed of the outcome.")] = "gaussian",
    weights: Column = None,
    counts: Column = None,
    offset: Column = None,
    exposure: Column = None,
    trials: Column = None,
    event: Annotated[str | None, typer.Option(help="The yes/no level that is counted.")] = None,
    scale: Annotated[
        Literal["known", "estimated"] | None, typer.Option(help="For counts and yes/no.")
    ] = None,
    criterion: Annotated[
        Literal["reml", "gcv", "ubre"], typer.Option(help="Chooses smoothness.")
    ] = "reml",
    missing: Annotated[
        Literal["drop", "error"], typer.Option(help="Rows that lack a value.")
    ] = "drop",
) -> None:
    """Fit a model; write its tables (CSV) and figures (PNG, PDF), and print the summary."""
    with _told():
        import addmodel

        with _progress() as progress:
            found = addmodel.fit(
                formula,
                data,
                outcome=outcome,
                weights=weights,
                counts=counts,
                offset=offset,
                exposure=exposure,
                trials=trials,
                event=event,
                scale=scale,
                criterion=criterion,
                missing=missing,
                progress=progress,
            )
            progress("drawing figures")
            written = _write(found, out)
        typer.echo(str(found.summary()))
        typer.echo(f"\nWritten to {out}: {', '.join(written)}")


@app.command()
def predict(
    model: Annotated[
        Path, typer.Argument(metavar="FIT", help="A saved fit (.addmodel).", show_default=False)
    ],
    data: Annotated[
        Path, typer.Argument(help="New rows: a CSV or Parquet file.", show_default=False)
    ],
    out: Annotated[Path, typer.Option(help="CSV or Parquet file for the predictions.")],
    interval: Annotated[float, typer.Option(help="Level of the interval, between 0 and 1.")] = 0.95,
    new_observation: Annotated[
        bool, typer.Option("--new-observation", help="Interval for a new observation.")
    ] = False,
    per: Annotated[float | None, typer.Option(help="Per so much exposure.")] = None,
    scale: Annotated[Literal["outcome", "link"], typer.Option(help="Scale of the result.")] = (
        "outcome"
    ),
    groups: Annotated[
        Literal["own", "zero", "average"],
        typer.Option(help="Each row's own group, the middle of the groups, or their average."),
    ] = "own",
    unseen: Annotated[
        Literal["error", "base", "average"], typer.Option(help="What an unseen level stands for.")
    ] = "error",
    missing: Annotated[
        Literal["keep", "error"], typer.Option(help="Rows that lack a covariate.")
    ] = "keep",
) -> None:
    """Predict new rows from a saved fit: prediction, std_error, lower, upper, outside."""
    with _told():
        import pandas as pd

        import addmodel
        from addmodel.inference import check_level

        check_level(interval)
        _check_table_name(out)
        table = addmodel.load(model).predict(
            data,
            scale=scale,
            interval=interval,
            new_observation=new_observation,
            per=per,
            unseen=unseen,
            groups=groups,
            missing=missing,
        )
        assert isinstance(table, pd.DataFrame)
        _write_table(table, out, index=False)
        kind = "a new observation" if new_observation else "the mean"
        beyond = int(table["outside"].sum())
        typer.echo(
            f"{len(table):,} predictions written to {out}, with {100 * interval:g} % intervals for "
            f"{kind}" + ("." if new_observation else " (--new-observation: for a single value).")
        )
        if beyond:
            typer.echo(f"{beyond:,} of them lie outside the data of the fit: column 'outside'.")


@app.command()
def demo(
    out: Annotated[Path, typer.Option(help="Folder for tables, figures and the saved fit.")] = Path(
        "addmodel-demo"
    ),
) -> None:
    """A whole analysis on invented data: nitrogen dioxide at four stations of a town."""
    data = Path(__file__).parent / "demo" / "street_air.csv"
    with _told():
        import addmodel

        typer.echo(
            "Invented data: nitrogen dioxide (µg/m³) at four stations of a town that does not "
            "exist.\nThe question: what do wind, temperature, the hour, the weekday and the "
            "station each add?\n"
        )
        with _progress() as progress:
            found = addmodel.fit(DEMO_FORMULA, data, progress=progress)
            progress("drawing figures")
            written = _write(found, out)
        typer.echo(str(found.summary()))
        typer.echo(
            f"\nWritten to {out}: {', '.join(written)}\n"
            "Look at effects.png first: one panel a component, with the same range of effects.\n"
            "An association is not a cause, a curve says nothing outside its data, and decisions "
            "belong to qualified people and local rules."
        )


def main() -> None:
    """Run the command."""
    app()


@contextmanager
def _told() -> Iterator[None]:
    """Errors and cautions as plain words on standard error; an error ends with status 2."""
    from addmodel.errors import AddmodelError, Caution

    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", Caution)
        try:
            yield
        except AddmodelError as error:
            typer.echo(f"Error: {error}", err=True)
            raise typer.Exit(2) from None
        except OSError as error:
            where = error.filename2 or error.filename  # of two, the second is the one asked for
            typer.echo(f"Error: {error.strerror or error}: {where}", err=True)
            raise typer.Exit(2) from None
        finally:
            for warning in caught:
                if issubclass(warning.category, Caution):
                    typer.echo(f"Caution: {warning.message}", err=True)


class _Progress:
    """Says on a terminal what is being done; silent where nobody watches."""

    def __init__(self, status: object) -> None:
        self.status = status

    def __call__(self, text: str) -> None:
        self.status.update(f"{text} ...")  # type: ignore[attr-defined]


@contextmanager
def _progress() -> Iterator[_Progress]:
    from rich.console import Console

    console = Console(stderr=True, quiet=not sys.stderr.isatty())
    with console.status("reading the data ...") as status:
        yield _Progress(status)


def _write(found: Fit, out: Path) -> list[str]:
    """Tables, figures, summary and the saved fit; returns the file names in the folder."""
    from addmodel import figures
    from addmodel.files import replacing

    out.mkdir(parents=True, exist_ok=True)
    if (out / "fit.addmodel").exists():
        for old in out.glob("effect-*"):  # of the fit before: its components may be others
            old.unlink()
    summary = out / "summary.txt"
    with replacing(summary) as temporary:
        temporary.write_text(f"{found.summary()}\n", encoding="utf-8")
    _write_table(found.components, out / "components.csv")
    _write_table(found.coefficients, out / "coefficients.csv")
    found.save(out / "fit.addmodel")
    written = ["summary.txt", "components.csv", "coefficients.csv", "fit.addmodel"]
    names = list(found.components.index)
    if names:
        figures.save(found.plot(), out / "effects")
        written += ["effects.png", "effects.pdf", "and for each component a table and figures"]
    for name, plain in zip(names, _file_names(names), strict=True):
        effect = found.effect(name)
        stem = out / f"effect-{plain}"
        _write_table(effect.table, stem.with_name(stem.name + ".csv"), index=False)
        figures.save(figures.single(effect.panel), stem)
    return written


def _file_names(names: list[str]) -> list[str]:
    """A plain file name for each component, no two alike even where capitals do not count."""
    found: list[str] = []
    for name in names:
        plain = re.sub(r"[^\w.]+", "-", name).strip("-")[:100]
        taken = {f.lower() for f in found}
        numbered = (plain if k == 1 else f"{plain}-{k}" for k in range(1, len(names) + 1))
        found.append(next(f for f in numbered if f.lower() not in taken))
    return found


def _check_table_name(path: Path) -> None:
    from addmodel.errors import DataError

    if path.suffix not in (".csv", ".parquet"):
        raise DataError(f"Tables are written as .csv or .parquet; got '{path.name}'.")


def _write_table(table: pd.DataFrame, path: Path, index: bool = True) -> None:
    from addmodel.files import replacing

    _check_table_name(path)
    with replacing(path) as temporary:
        if path.suffix == ".csv":
            table.to_csv(temporary, index=index)
        else:
            table.to_parquet(temporary, index=index)


if __name__ == "__main__":
    main()
