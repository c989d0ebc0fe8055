"""Importing the package stays light, and the optional packages stay optional."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import pyvolterra


def test_import_brings_no_heavy_package():
    code = (
        "import sys, pyvolterra\n"
        "heavy = {'matplotlib', 'pandas', 'pyarrow', 'rich', 'scipy.optimize'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
    )
    subprocess.run([sys.executable, "-P", "-c", code], check=True)


@pytest.mark.parametrize("name", ["calibrate", "Fit"])
def test_lazy_names(name):
    import pyvolterra as pv

    assert getattr(pv, name) is not None
    assert name in pv.__all__


def test_unknown_attribute():
    import pyvolterra as pv

    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = pv.nothing


def test_a_checkout_without_the_core_says_what_to_do(tmp_path):
    source = Path(pyvolterra.__file__).parent
    shutil.copytree(
        source, tmp_path / "pyvolterra", ignore=shutil.ignore_patterns("_core*.so", "*.pyd")
    )
    result = subprocess.run(
        [sys.executable, "-c", "import pyvolterra"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        env=os.environ | {"PYTHONPATH": ""},
    )
    assert result.returncode == 1
    assert "circular" not in result.stderr
    assert result.stderr.count("Traceback") == 1
    last = result.stderr.splitlines()[-1]
    assert last.startswith("ImportError: pyvolterra was imported from ")
    for words in ("no compiled core", "another folder", "build_ext --inplace"):
        assert words in last
