"""What modepair.reports exports, and that it loads matplotlib only when a plot is asked for."""

import subprocess
import sys

import pytest

import modepair.reports


@pytest.mark.parametrize("name", modepair.reports.__all__)
def test_every_export_is_there(name):
    assert getattr(modepair.reports, name) is not None


def test_figures_is_the_function_even_after_its_module_is_imported():
    import modepair.reports.figures

    assert callable(modepair.reports.figures)


def test_unknown_names_are_refused():
    with pytest.raises(AttributeError, match=r"module 'modepair\.reports' has no attribute 'plott'"):
        _ = modepair.reports.plott


def test_plots_load_late():
    code = (
        "import sys, modepair.reports as r; r.ModePair, r.figures, r.console_for, r.summary_text;"
        "assert 'matplotlib' not in sys.modules; r.plot_cmrr;"
        "assert 'matplotlib' in sys.modules; assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
