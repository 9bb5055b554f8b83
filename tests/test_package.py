"""What a notebook reaches through `import manybody`, and the notebook of the README."""

import re
import runpy
from pathlib import Path

import numpy as np
import pytest

import manybody

ROOT = Path(__file__).parent.parent


@pytest.mark.parametrize("name", manybody.__all__)
def test_every_public_name_exists_and_is_documented(name):
    thing = getattr(manybody, name)
    assert name in dir(manybody)
    assert not callable(thing) or thing.__doc__


def test_unknown_names_are_told():
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        manybody.nothing  # noqa: B018


def python_blocks():
    return re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(encoding="utf-8"), flags=re.DOTALL)


def test_the_python_study_of_the_readme(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    [code] = [block for block in python_blocks() if "study_from_functions" in block]
    script = tmp_path / "notebook.py"
    script.write_text(code, encoding="utf-8")
    tree = runpy.run_path(str(script))["tree"]
    assert tree["quantum_energy"].dims == ("sites", "spin", "rule")
    gap = tree["gap"]
    assert bool((gap.sel(rule="toeplitz") >= -1e-9).all()) and bool((gap.sel(rule="wick") <= 1e-9).all())
    assert np.isfinite(tree["relative_gap"].values).all()
    again = manybody.open_results(tmp_path / "three_site")
    np.testing.assert_array_equal(again["gap"].values, gap.values)
