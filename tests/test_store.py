"""Saved fits: the same answers bit for bit, no rows inside, and every damaged file refused."""

import io
import json
import pickle
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import addmodel as am
from addmodel.store import DIGEST, digest

FORMULA = 'y ~ curve(x) + cycle(hour, period=24) + z + C(site, base="largest") + curve(when, df=3)'


@pytest.fixture(scope="module")
def data() -> pd.DataFrame:
    rng = np.random.default_rng(811)
    n = 150
    d = pd.DataFrame(
        {
            "x": rng.uniform(0, 10, n),
            "hour": rng.uniform(0, 24, n),
            "z": rng.normal(size=n),
            "site": rng.choice(["north", "south", "west"], n),
            "when": pd.Timestamp("2021-03-01") + pd.to_timedelta(rng.uniform(0, 400, n), unit="D"),
        }
    )
    d["y"] = np.sin(d.x) + np.cos(d.hour / 4) + 0.3 * d.z + rng.normal(size=n) / 3
    return d


@pytest.fixture(scope="module")
def fitted(data: pd.DataFrame) -> am.Fit:
    return am.fit(FORMULA, data, weights=np.linspace(0.5, 2, len(data)))


@pytest.fixture
def saved(fitted: am.Fit, tmp_path: Path) -> Path:
    path = tmp_path / "a.addmodel"
    fitted.save(path)
    return path


def test_a_loaded_fit_answers_bit_for_bit(data, fitted, saved):
    loaded = am.load(saved)
    new = data.iloc[::3].assign(x=lambda d: 1.4 * d.x - 1)  # some rows outside the data
    pd.testing.assert_frame_equal(
        loaded.predict(new, interval=0.9), fitted.predict(new, interval=0.9), check_exact=True
    )
    assert fitted.predict(new, interval=0.9)["outside"].any()
    assert np.array_equal(loaded.predict(data), fitted.predict(data))
    assert list(loaded.components.index) == list(fitted.components.index)
    for name in fitted.components.index:
        ours, theirs = fitted.effect(name), loaded.effect(name)
        pd.testing.assert_frame_equal(ours.table, theirs.table, check_exact=True)
    assert str(loaded.summary()) == str(fitted.summary())
    pd.testing.assert_frame_equal(loaded.columns(new), fitted.columns(new), check_exact=True)
    assert np.array_equal(loaded.draws(5, seed=3), fitted.draws(5, seed=3))
    for number in ("scale", "deviance", "log_likelihood", "criterion_value", "effective_df"):
        assert getattr(loaded, number) == getattr(fitted, number)
    assert loaded.formula == FORMULA
    assert loaded.smoothing.equals(fitted.smoothing)


def test_an_infinite_smoothing_parameter_survives(tmp_path):
    x = np.linspace(0, 1, 40)
    noise = np.tile([1.0, -1.0, -1.0, 1.0], 10)
    fit = am.fit("y ~ curve(x)", {"x": x, "y": 3 * x + noise})
    assert np.isinf(fit.smoothing.iloc[0])
    fit.save(tmp_path / "line.addmodel")
    loaded = am.load(tmp_path / "line.addmodel")
    assert np.isinf(loaded.smoothing.iloc[0])
    assert str(loaded) == str(fit)


@pytest.mark.parametrize("formula", ["y ~ 1", "log(`body mass`) ~ curve(sqrt(x)) + {z > 0}"])
def test_other_formulas_survive(formula, data, tmp_path):
    named = data.assign(**{"body mass": np.exp(data.y)})
    fit = am.fit(formula, named)
    fit.save(tmp_path / "b.addmodel")
    loaded = am.load(tmp_path / "b.addmodel")
    assert str(loaded.summary()) == str(fit.summary())
    one, other = (f.columns(named).to_numpy() @ f.draws(2, seed=1).T for f in (fit, loaded))
    assert np.array_equal(one, other)


def test_saving_twice_gives_the_same_bytes(fitted, saved, tmp_path):
    again = tmp_path / "deeper" / "again.addmodel"  # the folder is made
    fitted.save(again)
    assert again.read_bytes() == saved.read_bytes()
    am.load(saved).save(again)
    assert again.read_bytes() == saved.read_bytes()
    assert sorted(p.name for p in tmp_path.rglob("*")) == [
        "a.addmodel",
        "again.addmodel",
        "deeper",
    ]


@pytest.mark.parametrize("name", ["fit.zip", "fit", "fit.addmodel.txt"])
def test_the_suffix_is_addmodel(fitted, tmp_path, name):
    with pytest.raises(am.ModelError, match=rf"ends in \.addmodel; got '{name}'"):
        fitted.save(tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_no_row_is_inside(data, saved):
    with zipfile.ZipFile(saved) as archive:
        contents = {name: archive.read(name) for name in archive.namelist()}
    assert "fit.json" in contents
    # Support points of a curve are kept, and the range of a line; no outcome, nothing by rows.
    outcome = data.y.to_numpy()
    for name, content in contents.items():
        if not name.endswith(".npy"):
            assert not any(repr(v).encode() in content for v in outcome)
            assert not any(float(v).hex().encode() in content for v in outcome)
            continue
        array = np.load(io.BytesIO(content), allow_pickle=False)
        assert not np.isin(outcome, array).any(), name
        if array.shape == (len(data),):  # support points, and so in their own order, not the rows'
            assert (np.diff(array) > 0).all(), name
    # A plain line keeps its range alone.
    inner = np.sort(data.z.to_numpy())[1:-1]
    for name, content in contents.items():
        if name.endswith(".npy"):
            found = np.isin(inner, np.load(io.BytesIO(content), allow_pickle=False))
            assert found.mean() < 0.05, name


def test_a_loaded_fit_says_that_it_has_no_rows(saved):
    loaded = am.load(saved)
    for ask in (
        lambda: loaded.fitted,
        lambda: loaded.linear_predictor,
        lambda: loaded.rows,
        loaded.residuals,
    ):
        with pytest.raises(am.ModelError, match="loaded from a file, which holds no rows: predict"):
            ask()


# Damage -----------------------------------------------------------------------------------------


class Bomb:
    """What a pickle would run if it were ever opened."""

    def __reduce__(self) -> tuple[Callable[..., Any], tuple[Any, ...]]:
        return Path.touch, (Path(BOMB),)


BOMB = "exploded"


def rewritten(path: Path, edit: Callable[[dict[str, bytes]], None], sealed: bool) -> Path:
    """The same archive with its members edited; `sealed`: and its digest made to fit."""
    with zipfile.ZipFile(path) as archive:
        members = {name: archive.read(name) for name in archive.namelist()}
    edit(members)
    if sealed:
        del members[DIGEST]
        members[DIGEST] = digest(members).encode()
    target = path.with_name("edited.addmodel")
    with zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members.items():
            archive.writestr(name, content)
    return target


def json_edit(change: Callable[[dict[str, Any]], None]) -> Callable[[dict[str, bytes]], None]:
    def edit(members: dict[str, bytes]) -> None:
        body = json.loads(members["fit.json"])
        change(body)
        members["fit.json"] = json.dumps(body).encode()

    return edit


def array_replaced(content: bytes) -> Callable[[dict[str, bytes]], None]:
    def edit(members: dict[str, bytes]) -> None:
        members["arrays/0.npy"] = content

    return edit


def pickled_array() -> bytes:
    buffer = io.BytesIO()
    np.lib.format.write_array(buffer, np.array([Bomb()], dtype=object), allow_pickle=True)
    return buffer.getvalue()


def fields(body: dict[str, Any]) -> dict[str, Any]:
    return body["estimate"]["fields"]


DAMAGED = "is not a saved fit, or it is damaged"
EDITS = {
    "another format": (json_edit(lambda b: b.update(format="x")), "is not a saved fit"),
    "no format": (json_edit(lambda b: b.pop("format")), "is not a saved fit"),
    "version 99": (
        json_edit(lambda b: b.update(version=99)),
        "has format version 99; this addmodel reads version 2",
    ),
    "no version": (json_edit(lambda b: b.pop("version")), "has format version None"),
    "no estimate": (json_edit(lambda b: b.pop("estimate")), DAMAGED),
    "a list": (lambda m: m.update({"fit.json": b"[1, 2]"}), "is not a saved fit"),
    "not JSON": (lambda m: m.update({"fit.json": b"{"}), DAMAGED),
    "not text": (lambda m: m.update({"fit.json": b"\xff\xfe\x00"}), DAMAGED),
    "deep": (lambda m: m.update({"fit.json": b"[" * 100_000}), DAMAGED),
    "no JSON": (lambda m: m.pop("fit.json"), DAMAGED),
    "unknown kind": (json_edit(lambda b: b["estimate"].update(kind="Popen")), DAMAGED),
    "other kind": (json_edit(lambda b: b["estimate"].update(kind="Line")), DAMAGED),
    "field missing": (json_edit(lambda b: fields(b).pop("scale")), DAMAGED),
    "field unknown": (json_edit(lambda b: fields(b).update(more=1)), DAMAGED),
    "formula edited": (
        json_edit(lambda b: fields(b).update(model={"formula": "y ~ __import__('os')"})),
        DAMAGED,
    ),
    "outcome edited": (json_edit(lambda b: fields(b).update(outcome={"outcome": "x"})), DAMAGED),
    "number edited": (json_edit(lambda b: fields(b).update(scale={"float": "zero"})), DAMAGED),
    "array missing": (lambda m: m.pop("arrays/0.npy"), DAMAGED),
    "array outside": (
        json_edit(lambda b: fields(b).update(coefficients={"array": "../../etc/passwd"})),
        DAMAGED,
    ),
    "array empty": (array_replaced(b""), DAMAGED),
    "array cut": (array_replaced(b"\x93NUMPY\x01\x00"), DAMAGED),
    "array pickled": (array_replaced(pickled_array()), DAMAGED),
    "bare pickle": (array_replaced(pickle.dumps(Bomb())), DAMAGED),
}


@pytest.mark.parametrize("sealed", [False, True])
@pytest.mark.parametrize("name", EDITS)
def test_an_edited_file_is_refused_and_runs_nothing(name, sealed, saved, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    edit, words = EDITS[name]
    path = rewritten(saved, edit, sealed)
    with pytest.raises(am.DataError, match=words) as caught:
        am.load(path)
    assert str(path) in str(caught.value)
    assert not Path(BOMB).exists()


def test_a_number_changed_by_hand_is_found(saved):
    def edit(members: dict[str, bytes]) -> None:
        body = json.loads(members["fit.json"])
        fields(body)["scale"] = {"float": (1.5).hex()}
        members["fit.json"] = json.dumps(body, indent=1).encode()

    with pytest.raises(am.DataError, match=DAMAGED):
        am.load(rewritten(saved, edit, sealed=False))
    assert am.load(rewritten(saved, edit, sealed=True)).scale == 1.5  # so the digest found it
    assert am.load(rewritten(saved, lambda members: None, sealed=False)).formula == FORMULA


def test_the_bomb_would_go_off(tmp_path, monkeypatch):
    """So that the tests above can fail."""
    monkeypatch.chdir(tmp_path)
    np.lib.format.read_array(io.BytesIO(pickled_array()), allow_pickle=True)
    assert Path(BOMB).exists()


def test_missing_file_and_folder(tmp_path):
    with pytest.raises(am.DataError, match=r"There is no file .*nothing\.addmodel"):
        am.load(tmp_path / "nothing.addmodel")
    with pytest.raises(am.DataError, match="There is no file"):
        am.load(tmp_path)


@pytest.mark.parametrize("content", [b"", b"PK", b"formula,y\n1,2\n", pickle.dumps([1])])
def test_another_kind_of_file(content, tmp_path):
    path = tmp_path / "other.addmodel"
    path.write_bytes(content)
    with pytest.raises(am.DataError, match=DAMAGED):
        am.load(path)


@pytest.mark.parametrize("part", [0.1, 0.5, 0.9, 0.999])
def test_a_truncated_file(part, saved):
    content = saved.read_bytes()
    saved.write_bytes(content[: int(part * len(content))])
    with pytest.raises(am.DataError, match=DAMAGED):
        am.load(saved)


def test_flipped_bytes_are_refused_or_change_nothing(data, fitted, saved):
    content = saved.read_bytes()
    expected = fitted.predict(data)
    rng = np.random.default_rng(5)
    refused = 0
    for at in rng.integers(0, len(content), 120):
        changed = bytearray(content)
        changed[at] ^= 1 << int(rng.integers(8))
        saved.write_bytes(bytes(changed))
        try:
            loaded = am.load(saved)
        except am.DataError:
            refused += 1
        else:  # a byte that no reader looks at, such as a date
            assert np.array_equal(loaded.predict(data), expected)
    assert refused > 100


@pytest.mark.parametrize("name", ["fit.json", "arrays/0.npy"])
def test_flipped_bytes_in_a_members_content(name, saved):
    """Whatever the bytes say once decompressed, the checksum does not fit them."""
    with zipfile.ZipFile(saved) as archive:
        start = archive.getinfo(name).header_offset + 30 + len(name)
    content = bytearray(saved.read_bytes())
    for shift in range(6):
        changed = bytearray(content)
        changed[start + shift] ^= 0xFF
        saved.write_bytes(bytes(changed))
        with pytest.raises(am.DataError, match=DAMAGED):
            am.load(saved)
