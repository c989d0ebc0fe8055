"""Importing the package stays light, and the optional packages stay optional."""

import subprocess
import sys

import pytest


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
