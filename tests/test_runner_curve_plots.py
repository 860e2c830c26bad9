"""Plots beside the run: the same files whichever process draws them, and whatever becomes of it."""

import os
import signal
import sys
from contextlib import contextmanager

import pytest

from modepair.reports.axis_labels import axis_columns
from modepair.reports.case_curves import CaseCurves
from modepair.runner import curve_plots
from modepair.runner.curve_plots import CAPTIONS, CurvePlots, Draughting, draughting
from modepair.runner.workers import submit, worker_pool
from tests.synthetic_cases import one_pole_cases

FILES = {f"{stem}.{suffix}" for stem in CAPTIONS.values() for suffix in ("png", "svg")}


def silo_plots() -> CurvePlots:
    made = one_pole_cases(2, 2)
    return CurvePlots(CaseCurves(made.pair, axis_columns(made.cases, made.axes), "Silo"), [(1.0, 60.0)])


def bytes_of(folder) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_both_processes_draw_the_same_files(tmp_path):
    here, there = tmp_path / "here", tmp_path / "there"
    for folder in (here, there):
        folder.mkdir()
    Draughting().begin(silo_plots(), here).finish()
    with worker_pool() as executors, executors(1) as executor:
        Draughting(executor).begin(silo_plots(), there).finish()
    assert bytes_of(here).keys() == FILES
    assert bytes_of(here) == bytes_of(there)


def test_the_plots_are_there_though_their_process_dies(tmp_path):
    with worker_pool() as executors, executors(1) as executor:
        drawing = Draughting(executor)
        os.kill(submit(executor, os.getpid).result(), signal.SIGKILL)
        drawing.begin(silo_plots(), tmp_path).finish()
    assert bytes_of(tmp_path).keys() == FILES


def test_a_file_that_cannot_be_written_is_told(tmp_path):
    with worker_pool() as executors, executors(1) as executor:
        drawing = Draughting(executor).begin(silo_plots(), tmp_path / "gone")
        with pytest.raises(FileNotFoundError, match="gone"):
            drawing.finish()


@pytest.mark.parametrize(("processors", "imported", "beside"), [(2, False, 1), (1, False, 0), (2, True, 0)])
def test_a_process_is_started_only_where_it_saves_time(monkeypatch, processors, imported, beside):
    monkeypatch.setattr(os, "cpu_count", lambda: processors)
    if not imported:
        monkeypatch.delitem(sys.modules, "matplotlib.figure", raising=False)
    started = []

    @contextmanager
    def counted_pool():
        with worker_pool() as executors:
            yield lambda jobs: started.append(jobs) or executors(jobs)

    monkeypatch.setattr(curve_plots, "worker_pool", counted_pool)
    with draughting():
        pass
    assert started == [1] * beside


def test_it_can_be_kept_from_starting_one(tmp_path):
    with draughting(beside=False) as drawing:
        drawing.begin(silo_plots(), tmp_path).finish()
    assert bytes_of(tmp_path).keys() == FILES
