"""The fit of the demo quotes and its report, made once for all tests of the report."""

import numpy as np
import pytest
from reported_fits import part

import pyvolterra as pv
from pyvolterra import demo
from pyvolterra.report import render_report


@pytest.fixture(scope="session")
def demo_file(tmp_path_factory):
    return demo.write_demo_quotes(tmp_path_factory.mktemp("demo") / "quotes.csv")


@pytest.fixture(scope="session")
def demo_fit(demo_file):
    return pv.calibrate(pv.read_quotes(demo_file))


@pytest.fixture(scope="session")
def demo_report(demo_fit):
    return render_report(demo_fit)


@pytest.fixture(scope="session")
def two_expiries(demo_fit):
    """The same fit as if the file had had two expiries: quicker to draw."""
    t = demo_fit.smiles.maturity
    return part(demo_fit, np.isin(t, np.unique(t)[[2, 7]]))
