"""Saved fits: one zip file of JSON and plain arrays, with a format version. Loading runs no code.

What is saved is what was estimated. The rows are not: a saved fit predicts, tells its tables and
draws its effects. It holds no outcome, and of the covariates only what a component needs: levels,
quantiles, and knots, which are values that occur in the data.
"""

from __future__ import annotations

import dataclasses
import hashlib
import io
import json
import zipfile
import zlib
from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np

from addmodel.columns import Column
from addmodel.component import Block, Component, Strand, View
from addmodel.design import Design, Joint, Spread
from addmodel.errors import DataError
from addmodel.estimate import Estimate, Reading
from addmodel.files import replacing
from addmodel.formula import Model, parse
from addmodel.matrix import Layout
from addmodel.outcomes import Outcome, outcome_described
from addmodel.posterior import Posterior
from addmodel.spaces.curve import Curve
from addmodel.spaces.cycle import Cycle
from addmodel.spaces.globe import Globe
from addmodel.spaces.group import Group
from addmodel.spaces.levels import Levels
from addmodel.spaces.line import Line
from addmodel.spaces.place import Place

VERSION = 2
KINDS: dict[str, type[Any]] = {
    kind.__name__: kind
    for kind in (
        *(Column, Spread, Joint, Design, Component, Strand, Block, View),
        *(Line, Levels, Curve, Cycle, Place, Globe, Group),
        *(Estimate, Reading, Posterior, Layout),
    )
}
DIGEST = "sha256"
DAMAGE = (
    *(zipfile.BadZipFile, zlib.error, EOFError, RuntimeError, MemoryError),  # the archive
    *(ArithmeticError, AttributeError, LookupError, TypeError, ValueError, SyntaxError),  # contents
)
"""What reading and decoding raise on a file that is not as `save` wrote it."""
EPOCH = (1980, 1, 1, 0, 0, 0)  # the same fit gives the same bytes


def save(estimate: Estimate, path: Path) -> None:
    """Write an estimate, without its rows, to `path`."""
    bare = dataclasses.replace(estimate, table=None, linear_predictor=None)
    arrays: list[np.ndarray[Any, Any]] = []
    body = {"format": "addmodel fit", "version": VERSION, "estimate": _encoded(bare, arrays)}
    members = {"fit.json": json.dumps(body, allow_nan=False, indent=1).encode()}
    for number, array in enumerate(arrays):
        buffer = io.BytesIO()
        np.lib.format.write_array(buffer, array, allow_pickle=False)
        members[f"arrays/{number}.npy"] = buffer.getvalue()
    members[DIGEST] = digest(members).encode()
    with replacing(path) as temporary, zipfile.ZipFile(temporary, "w") as archive:
        for name, content in members.items():
            _add(archive, name, content)


def load(path: Path) -> Estimate:
    """Read an estimate that `save` wrote.

    Raises
    ------
    DataError
        If the file is missing, not a saved fit, damaged, or of a newer format.
    """
    if not path.is_file():
        raise DataError(f"There is no file {path}.")
    try:
        with zipfile.ZipFile(path) as archive:
            if any(entry.compress_type != zipfile.ZIP_DEFLATED for entry in archive.infolist()):
                raise zipfile.BadZipFile("a saved fit is deflated")
            members = {name: archive.read(name) for name in archive.namelist()}
        body = json.loads(members["fit.json"])
        if not isinstance(body, dict) or body.get("format") != "addmodel fit":
            raise DataError(f"{path} is not a saved fit.")
        if body.get("version") != VERSION:
            raise DataError(
                f"{path} has format version {body.get('version')}; this addmodel reads version "
                f"{VERSION}. Use the version of addmodel that wrote it, or fit again."
            )
        if members.pop(DIGEST).decode() != digest(members):
            raise ValueError("the contents are not those that were saved")
        found = _decoded(body["estimate"], members)
    except OSError as error:
        raise DataError(f"{path} cannot be read: {error}.") from error
    except DAMAGE as error:
        if isinstance(error, DataError):
            raise
        raise DataError(f"{path} is not a saved fit, or it is damaged. Fit again.") from error
    if not isinstance(found, Estimate):
        raise DataError(f"{path} is not a saved fit, or it is damaged. Fit again.")
    return found


def digest(members: Mapping[str, bytes]) -> str:
    """SHA-256 over the names and contents of a saved fit, in their order, as hexadecimal digits.

    It finds accidents and edits by hand; it is no proof of where a file comes from.
    """
    found = hashlib.sha256()
    for name, content in members.items():
        found.update(f"{name} {len(content)}\n".encode() + content)
    return found.hexdigest()


def _add(archive: zipfile.ZipFile, name: str, content: bytes) -> None:
    entry = zipfile.ZipInfo(name, date_time=EPOCH)
    entry.compress_type = zipfile.ZIP_DEFLATED
    archive.writestr(entry, content)


def _encoded(value: Any, arrays: list[np.ndarray[Any, Any]]) -> Any:
    if isinstance(value, Model):
        return {"formula": value.text}
    if isinstance(value, Outcome):
        return {"outcome": _encoded(value.described(), arrays)}
    if dataclasses.is_dataclass(value):
        fields = {
            f.name: _encoded(getattr(value, f.name), arrays) for f in dataclasses.fields(value)
        }
        return {"kind": type(value).__name__, "fields": fields}
    if isinstance(value, np.ndarray):
        # Components share their spaces: an array is written once.
        number = next((i for i, known in enumerate(arrays) if known is value), len(arrays))
        arrays += [value] if number == len(arrays) else []
        return {"array": number}
    if isinstance(value, Mapping):
        return {"map": [[k, _encoded(v, arrays)] for k, v in value.items()]}
    if isinstance(value, tuple | list):
        return [_encoded(v, arrays) for v in value]
    if isinstance(value, float | np.floating):
        # Written in hexadecimal: bit for bit, infinities included.
        return {"float": float(value).hex()}
    if isinstance(value, np.integer):
        return int(value)
    return value


def _decoded(value: Any, members: Mapping[str, bytes]) -> Any:
    if isinstance(value, list):
        return tuple(_decoded(v, members) for v in value)
    if not isinstance(value, dict):
        return value
    if "formula" in value:
        return parse(value["formula"])
    if "outcome" in value:
        return outcome_described(_decoded(value["outcome"], members))
    if "array" in value:
        content = io.BytesIO(members[f"arrays/{int(value['array'])}.npy"])
        array = np.lib.format.read_array(content, allow_pickle=False)
        array.setflags(write=False)
        return array
    if "map" in value:
        # A key of several columns is written as a list.
        return MappingProxyType(
            {tuple(k) if isinstance(k, list) else k: _decoded(v, members) for k, v in value["map"]}
        )
    if "float" in value:
        return float.fromhex(value["float"])
    kind = KINDS[value["kind"]]
    return kind(**{name: _decoded(v, members) for name, v in value["fields"].items()})
