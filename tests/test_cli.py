"""The command: what it writes, what it says, and that its errors are words and not tracebacks."""

import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner, Result

import addmodel as am
from addmodel.cli import DEMO_FORMULA, app

FORMULA = "y ~ curve(x) + cycle(hour, period=24) + z + site"
STEMS = {
    "curve(x)": "effect-curve-x",
    "cycle(hour, period=24)": "effect-cycle-hour-period-24",
    "z": "effect-z",
    "site": "effect-site",
}
COVARIATES = {"curve(x)": "x", "cycle(hour, period=24)": "hour", "z": "z", "site": "site"}


def run(*arguments: object) -> Result:
    return CliRunner().invoke(app, [str(a) for a in arguments], env={"COLUMNS": "200"})


def files(folder: Path) -> list[str]:
    return sorted(str(p.relative_to(folder)) for p in folder.rglob("*") if p.is_file())


def table() -> pd.DataFrame:
    rng = np.random.default_rng(77)
    n = 120
    d = pd.DataFrame(
        {
            "x": rng.uniform(0, 10, n),
            "hour": rng.integers(0, 24, n).astype(float),
            "z": rng.normal(size=n),
            "site": rng.choice(["north", "south", "west"], n),
            "w": rng.uniform(0.5, 2, n),
            "k": rng.integers(1, 4, n),
            "o": rng.normal(size=n),
        }
    )
    d["y"] = np.sin(d.x) + np.cos(d.hour / 4) + 0.3 * d.z + rng.normal(size=n) / 3
    return d


@pytest.fixture(scope="module")
def data(tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("data") / "rows.csv"
    table().to_csv(path, index=False)
    return path


@pytest.fixture(scope="module")
def fitted(data: Path, tmp_path_factory) -> tuple[Path, Result]:
    out = tmp_path_factory.mktemp("fit") / "deeper" / "out"
    return out, run("fit", data, FORMULA, "--out", out)


@pytest.fixture(scope="module")
def here(data: Path) -> am.Fit:
    return am.fit(FORMULA, data)


# fit --------------------------------------------------------------------------------------------


def test_fit_writes_the_named_files_and_no_others(fitted):
    out, result = fitted
    assert result.exit_code == 0
    assert result.stderr == ""
    every = ["summary.txt", "components.csv", "coefficients.csv", "fit.addmodel"]
    every += [f"effects.{kind}" for kind in ("png", "pdf")]
    every += [f"{stem}.{kind}" for stem in STEMS.values() for kind in ("csv", "png", "pdf")]
    assert files(out) == sorted(every)
    for name in every[:6]:
        assert name in result.stdout
    assert f"Written to {out}:" in result.stdout
    for path in out.iterdir():
        head = path.read_bytes()[:5]
        if path.suffix == ".png":
            assert head == b"\x89PNG\r"
        if path.suffix == ".pdf":
            assert head == b"%PDF-"


def test_fit_prints_and_writes_the_summary(fitted, here):
    out, result = fitted
    assert (out / "summary.txt").read_text(encoding="utf-8") == f"{here.summary()}\n"
    assert result.stdout.startswith(str(here.summary()))


def test_fit_writes_the_tables_that_python_gives(fitted, here):
    out, _ = fitted
    for name in ("components", "coefficients"):
        read = pd.read_csv(out / f"{name}.csv", index_col=0)
        pd.testing.assert_frame_equal(read, getattr(here, name), check_exact=False, rtol=1e-12)
    for name, stem in STEMS.items():
        read = pd.read_csv(out / f"{stem}.csv")
        assert list(read.columns) == [
            COVARIATES[name],
            "effect",
            "std_error",
            "lower",
            "upper",
            "lower_whole",
            "upper_whole",
        ]
        expected = here.effect(name).table
        if name == "site":
            assert list(read["site"]) == ["north", "south", "west"]
            expected = expected.assign(site=expected["site"].astype(object))
            read = read.assign(site=read["site"].astype(object))
        pd.testing.assert_frame_equal(read, expected, rtol=1e-12)


def test_the_saved_fit_predicts_as_python_does(fitted, here, data):
    out, _ = fitted
    loaded = am.load(out / "fit.addmodel")
    assert np.array_equal(loaded.predict(data), here.predict(data))
    np.testing.assert_allclose(loaded.predict(data), here.fitted, rtol=1e-10, atol=1e-12)


def test_fit_passes_its_options_on(data, tmp_path):
    d = table()
    d.loc[[3, 8], "x"] = np.nan
    gaps = tmp_path / "gaps.csv"
    d.to_csv(gaps, index=False)
    out = tmp_path / "out"
    options = ["--weights", "1 / w", "--counts", "k", "--offset", "o", "--criterion", "gcv"]
    result = run("fit", gaps, "y ~ curve(x)", "--out", out, *options)
    assert result.exit_code == 0
    expected = am.fit(
        "y ~ curve(x)", gaps, weights="1 / w", counts="k", offset="o", criterion="gcv"
    )
    assert (out / "summary.txt").read_text(encoding="utf-8") == f"{expected.summary()}\n"
    assert "118 of 120 rows used (2 with missing values left out)" in re.sub(
        r"\s+", " ", result.stdout
    )
    refused = run("fit", gaps, "y ~ curve(x)", "--out", tmp_path / "no", "--missing", "error")
    assert refused.exit_code == 2
    assert "2 of 120 rows have missing values, in x (2): rows 3, 8" in refused.stderr


def test_fit_of_a_constant_and_again_into_the_same_folder(data, tmp_path):
    (tmp_path / "summary.txt").write_text("an earlier one")
    result = run("fit", data, "y ~ 1", "--out", tmp_path)
    assert result.exit_code == 0
    assert files(tmp_path) == ["coefficients.csv", "components.csv", "fit.addmodel", "summary.txt"]
    assert "an earlier one" not in (tmp_path / "summary.txt").read_text(encoding="utf-8")
    assert pd.read_csv(tmp_path / "coefficients.csv")["coefficient"].tolist() == ["intercept"]


def test_two_components_never_share_a_file(tmp_path):
    d = table().assign(**{"x y": lambda d: d.x, "x-y": lambda d: d.z, "X y": lambda d: d.o})
    path = tmp_path / "rows.csv"
    d.to_csv(path, index=False)
    out = tmp_path / "out"
    result = run("fit", path, "y ~ `x y` + `x-y` + `X y`", "--out", out)
    assert result.exit_code == 0
    tables = sorted(out.glob("effect-*.csv"))
    assert len({p.name.lower() for p in tables}) == 3
    columns = [pd.read_csv(p).columns[0].strip("`") for p in tables]
    assert sorted(columns) == ["X y", "x y", "x-y"]


# predict ----------------------------------------------------------------------------------------


COLUMNS = ["prediction", "std_error", "lower", "upper", "outside"]


def test_predict_to_csv(fitted, here, data, tmp_path):
    out, _ = fitted
    target = tmp_path / "deeper" / "p.csv"
    result = run("predict", out / "fit.addmodel", data, "--out", target)
    assert result.exit_code == 0
    assert result.stdout == (
        f"120 predictions written to {target}, with 95 % intervals for the mean "
        "(--new-observation: for a single value).\n"
    )
    read = pd.read_csv(target)
    assert list(read.columns) == COLUMNS
    pd.testing.assert_frame_equal(read, here.predict(data, interval=0.95), rtol=1e-12)
    assert files(tmp_path) == ["deeper/p.csv"]


def test_predict_to_parquet_with_every_option(fitted, here, tmp_path):
    out, _ = fitted
    new = table().head(5).assign(site=["north", "east", "south", "west", "east"])
    new.loc[2, "z"] = np.nan
    new.loc[3, "x"] = 40.0
    new.to_parquet(tmp_path / "new.parquet")
    target = tmp_path / "p.parquet"
    result = run(
        *("predict", out / "fit.addmodel", tmp_path / "new.parquet", "--out", target),
        *("--interval", 0.5, "--new-observation", "--scale", "link", "--unseen", "average"),
    )
    assert result.exit_code == 0
    assert "Caution: 1 of 5 rows lack a covariate" in result.stderr
    assert "Caution: 2 rows have a level of site that the fit has not seen" in result.stderr
    with (
        pytest.warns(am.Caution, match="1 of 5 rows lack a covariate"),
        pytest.warns(am.Caution, match="2 rows have a level of site"),
    ):
        expected = here.predict(
            new, interval=0.5, new_observation=True, scale="link", unseen="average"
        )
    read = pd.read_parquet(target)
    pd.testing.assert_frame_equal(read, expected.reset_index(drop=True), check_exact=True)
    assert read["prediction"].isna().tolist() == [False, False, True, False, False]
    assert read["outside"].tolist() == [False, False, False, True, False]
    refused = run(
        *("predict", out / "fit.addmodel", tmp_path / "new.parquet"),
        *("--out", tmp_path / "q.csv", "--unseen", "base", "--missing", "error"),
    )
    assert refused.exit_code == 2
    assert "1 of 5 rows have missing values, in z (1): row 2" in refused.stderr
    assert not (tmp_path / "q.csv").exists()


# Errors -----------------------------------------------------------------------------------------


def refused(result: Result, words: str) -> None:
    """Status 2, the words on standard error alone, and no traceback."""
    assert result.exit_code == 2
    assert re.search(words, result.stderr), result.stderr
    assert result.stdout == ""
    assert "Traceback" not in result.output
    assert isinstance(result.exception, SystemExit)


FIT_ERRORS = {
    "unknown column": (
        ["y ~ curve(hours)"],
        "^Error: .*rows.csv.*no column 'hours'. Did.*'hour'",
    ),
    "formula": (["y ~ curve(x"], r"Error: This bracket is never closed.\n    y ~ curve>>\(<<x"),
    "outcome": (["y ~ x", "--outcome", "gausian"], "outcome='gausian' is not known.*'gaussian'"),
    "few values": (["y ~ curve(k)"], r"curve\(k\) has 3 distinct values and needs at least 4"),
    "unknown weight": (["y ~ x", "--weights", "ww"], "has no column 'ww'. Did you mean 'w'"),
    "fractions": (["y ~ x", "--counts", "w"], "must be whole numbers"),
    "criterion": (["y ~ x", "--criterion", "aic"], "(?s)Invalid value for '--criterion'.*'reml'"),
    "missing": (["y ~ x", "--missing", "skip"], "(?s)Invalid value for '--missing'.*'drop'"),
    "unknown option": (["y ~ x", "--wights", "w"], "No such option.*--wights.*--weights"),
}


@pytest.mark.parametrize("name", FIT_ERRORS)
def test_fit_errors(name, data, tmp_path):
    arguments, words = FIT_ERRORS[name]
    out = tmp_path / "out"
    refused(run("fit", data, *arguments, "--out", out), words)
    assert not out.exists()


def test_fit_needs_its_arguments(data):
    refused(run("fit", data), "(?i)Missing argument 'FORMULA'")
    refused(run("fit", data, "y ~ x"), "Missing option '--out'")


@pytest.mark.parametrize("name", ["nothing.csv", "rows.xls", "empty.csv", "broken.parquet"])
def test_data_that_cannot_be_read(name, tmp_path):
    path = tmp_path / name
    if name != "nothing.csv":
        path.write_bytes(b"" if name == "empty.csv" else b"no table at all")
    refused(run("fit", path, "y ~ x", "--out", tmp_path / "out"), f"(?s)^Error: .*{name}")
    refused(run("fit", tmp_path, "y ~ x", "--out", tmp_path / "out"), "is a folder")
    assert not (tmp_path / "out").exists()


def test_a_folder_that_cannot_be(data, tmp_path):
    taken = tmp_path / "taken"
    taken.write_text("a file of somebody's")
    refused(run("fit", data, "y ~ x", "--out", taken), f"^Error: .*{taken}")
    refused(run("fit", data, "y ~ x", "--out", taken / "below"), f"^Error: .*{taken}")
    assert taken.read_text() == "a file of somebody's"
    assert files(tmp_path) == ["taken"]


def test_a_file_whose_place_is_taken_leaves_nothing_unfinished(data, fitted, tmp_path):
    (tmp_path / "fit.addmodel").mkdir()
    result = run("fit", data, "y ~ x", "--out", tmp_path)
    assert result.exit_code == 2
    assert result.stderr.startswith("Error: ")
    assert "fit.addmodel" in result.stderr
    assert not [name for name in files(tmp_path) if "unfinished" in name]
    (tmp_path / "p.csv").mkdir()
    out, _ = fitted
    refused(run("predict", out / "fit.addmodel", data, "--out", tmp_path / "p.csv"), r"p\.csv")
    assert not [name for name in files(tmp_path) if "unfinished" in name]


def test_an_interrupted_write_keeps_the_old_file(data, fitted, tmp_path, monkeypatch):
    target = tmp_path / "p.csv"
    target.write_text("old")

    def full(self, path, *args, **kwargs):
        Path(path).write_text("half")
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr(pd.DataFrame, "to_csv", full)
    out, _ = fitted
    refused(
        run("predict", out / "fit.addmodel", data, "--out", target),
        "^Error: No space left on device",
    )
    assert target.read_text() == "old"
    assert files(tmp_path) == ["p.csv"]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--interval", "95"], "A level is a number between 0 and 1, such as 0.95; got 95.0"),
        (["--interval", "0"], "A level is a number between 0 and 1"),
        (["--interval", "nan"], "A level is a number between 0 and 1"),
        (["--interval", "wide"], "Invalid value for '--interval'.*valid (number|float)"),
        (["--scale", "log"], "(?s)Invalid value for '--scale'"),
        (["--unseen", "zero"], "(?s)Invalid value for '--unseen'"),
    ],
)
def test_predict_options_that_cannot_be(arguments, words, fitted, data, tmp_path):
    out, _ = fitted
    target = tmp_path / "p.csv"
    refused(run("predict", out / "fit.addmodel", data, "--out", target, *arguments), words)
    assert files(tmp_path) == []


def test_predict_errors(fitted, data, tmp_path):
    out, _ = fitted
    saved, target = out / "fit.addmodel", tmp_path / "p.csv"
    refused(
        run("predict", tmp_path / "no.addmodel", data, "--out", target), r"no file .*no\.addmodel"
    )
    refused(run("predict", data, data, "--out", target), "rows.csv is not a saved fit")
    refused(run("predict", saved, tmp_path / "no.csv", "--out", target), r"no file .*no\.csv")
    bad = run("predict", saved, data, "--out", tmp_path / "p.xlsx")
    refused(bad, r"Tables are written as \.csv or \.parquet; got 'p\.xlsx'")
    renamed = tmp_path / "new.csv"
    table().rename(columns={"site": "sites"}).to_csv(renamed, index=False)
    refused(
        run("predict", saved, renamed, "--out", target), "no column 'site'. Did you mean 'sites'"
    )
    table().assign(site="sout").to_csv(renamed, index=False)
    refused(
        run("predict", saved, renamed, "--out", target),
        r"(?s)the level 'sout' \(row 0.*Did you mean 'south'",
    )
    assert files(tmp_path) == ["new.csv"]


# demo and help ----------------------------------------------------------------------------------


def test_demo(tmp_path):
    out = tmp_path / "demo"
    result = run("demo", "--out", out)
    assert result.exit_code == 0
    assert result.stderr == ""
    assert result.stdout.startswith("Invented data: nitrogen dioxide")
    assert "An association is not a cause" in result.stdout
    found = am.load(out / "fit.addmodel")
    assert found.formula == DEMO_FORMULA
    assert str(found.summary()) in result.stdout
    assert len(found.components) == 6
    assert len(list(out.glob("effect-*.csv"))) == 6
    station = pd.read_csv(out / "effect-station.csv")
    assert station["effect"].max() > station["effect"].min() + 5  # made so: a street and a park
    for name in ("effects.png", "effects.pdf", "summary.txt", "components.csv", "coefficients.csv"):
        assert (out / name).stat().st_size > 0


OPTIONS = {
    "fit": "out outcome weights counts offset criterion missing",
    "predict": "out interval new-observation scale unseen missing",
    "demo": "out",
}


@pytest.mark.parametrize("command", OPTIONS)
def test_help_lists_the_options(command):
    result = run(command, "--help")
    assert result.exit_code == 0
    listed = set(re.findall(r"--([a-z-]+)", result.stdout)) - {"no-new-observation"}
    assert listed >= {*OPTIONS[command].split(), "help"}
    assert command in run("--help").stdout


def test_no_argument_gives_help():
    result = run()
    assert "Usage" in result.output
    assert all(command in result.output for command in OPTIONS)


# A process of its own ---------------------------------------------------------------------------

MAIN = "from addmodel.cli import main; main()"


def process(*arguments: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, *map(str, arguments)], capture_output=True, text=True, check=False
    )


def test_the_process_ends_with_status_2_and_words(data, tmp_path):
    done = process("-c", MAIN, "fit", data, "y ~ curve(hours)", "--out", tmp_path / "out")
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.startswith("Error: ")
    assert "Did you mean 'hour'?" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "out").exists()


LOOK = """
import sys
{first}
heavy = {{"pandas", "scipy", "statsmodels", "matplotlib", "formulaic"}} & set(sys.modules)
print("heavy:", sorted(heavy))
"""


@pytest.mark.parametrize(
    "first",
    [
        "import addmodel; addmodel.AddmodelError",
        "import addmodel.cli\n"
        "try: addmodel.cli.app(['--help'])\n"
        "except SystemExit as done: assert not done.code",
        "import addmodel.cli\n"
        "try: addmodel.cli.app(['fit', '--help'])\n"
        "except SystemExit as done: assert not done.code",
    ],
)
def test_heavy_imports_wait(first):
    done = process("-c", LOOK.format(first=first))
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-1] == "heavy: []"


def test_the_look_sees_heavy_imports():
    done = process("-c", LOOK.format(first="import addmodel; addmodel.fit"))
    assert {"pandas", "scipy"} <= set(re.findall(r"\w+", done.stdout.splitlines()[-1]))
