"""Writes a study's section into RESULTS.md: its table, when, on what, in which versions."""

from __future__ import annotations

import datetime
import os
import platform
import re
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path

RESULTS = Path(__file__).with_name("RESULTS.md")
HEAD = (
    "# Results of the validation studies\n\n"
    "Each section is written by the script it names, run from the top folder as "
    "`python -m validation.NAME`.\n"
)


def section(script: str, title: str, text: str, table: Sequence[Sequence[object]]) -> None:
    """Put a section in place of the script's last one. The table's first row is its head."""
    head, *body = [[str(cell) for cell in row] for row in table]
    lines = ["| " + " | ".join(row) + " |" for row in [head, ["---"] * len(head), *body]]
    packages = ", ".join(f"{p} {version(p)}" for p in ("numpy", "scipy", "pandas", "statsmodels"))
    made = (
        f"*`python -m validation.{script}`, {datetime.date.today()}, Python "
        f"{platform.python_version()}, {packages}, {os.cpu_count()} cores.*"
    )
    new = f"## {title}\n\n{text}\n\n" + "\n".join(lines) + f"\n\n{made}\n"
    old = RESULTS.read_text(encoding="utf-8") if RESULTS.exists() else HEAD
    parts = re.split(r"(?m)^(?=## )", old)
    mine = [i for i, part in enumerate(parts) if f"validation.{script}`" in part and i > 0]
    if mine:
        parts[mine[0]] = new
    else:
        parts.append(new)
    RESULTS.write_text("\n\n".join(part.rstrip() for part in parts) + "\n", encoding="utf-8")
    print(new)
