"""What importing costs: heavy libraries are loaded on first use only."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

import gapfit

HEAVY = ("corner", "emcee", "h5py", "jinja2", "matplotlib", "pandas", "pydantic", "scipy.stats", "xarray")


def loaded_after(code: str) -> set[str]:
    """Modules that a fresh interpreter has loaded after some code."""
    script = f"{code}\nimport json, sys\nprint('\\n' + json.dumps(sorted(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    return set(json.loads(done.stdout.splitlines()[-1]))


def test_import_of_the_package_is_light():
    loaded = loaded_after("import gapfit")
    assert not {name for name in (*HEAVY, "numpy", "scipy", "typer") if name in loaded}


def test_import_of_the_command_line_is_light():
    loaded = loaded_after("import gapfit.cli")
    assert not {name for name in (*HEAVY, "scipy") if name in loaded}


def test_fast_fit_does_without_sampler_and_figures():
    code = """
import numpy as np, gapfit
t = np.geomspace(0.2, 2.0, 8)
reading = 5000 * np.exp(-2 / t)
one = gapfit.fit_series(t, reading, 1.0, filling="1/3", engine="fast", mechanisms=["activation"])
assert 3 < one.gap.median < 5
"""
    assert not {"emcee", "matplotlib", "corner", "pandas", "jinja2"} & loaded_after(code)


@pytest.mark.parametrize("name", gapfit.__all__)
def test_every_public_name_is_there(name):
    assert getattr(gapfit, name).__module__.startswith("gapfit.")
    assert name in dir(gapfit)


def test_unknown_names_are_refused():
    with pytest.raises(AttributeError, match="no attribute 'magic'"):
        _ = gapfit.magic
