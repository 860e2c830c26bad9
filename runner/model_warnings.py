"""Which op-amp models of a sweep cannot show what it is about: macromodels by their parameters, others on the bench."""

from __future__ import annotations

from modepair.circuits import imported_models
from modepair.circuits.bench import imported_mounting
from modepair.reports.bench import Bench
from modepair.reports.model_warnings import bench_warnings, parameter_warnings
from modepair.runner.benching import measure_opamps
from modepair.runner.workers import ExecutorFactory
from modepair.sweeps import Sweep

__all__ = ["model_warnings"]


def model_warnings(sweep: Sweep, executors: ExecutorFactory, jobs: int = 1) -> tuple[str, ...]:
    """Gather the warnings about the op-amp models of a sweep.

    Parameters
    ----------
    sweep : Sweep
        The sweep.
    executors : callable
        Makes an executor of so many workers, for imported models.
    jobs : int
        Number of workers.

    Returns
    -------
    tuple of str
        For the top of every page; macromodels first. A model whose CMRR is drawn from its minimum has a mechanism.
    """
    candidates = sweep.spec.candidates
    drawn = {
        name.partition(".")[0]
        for entry in (sweep.spec.tolerance.parts if sweep.spec.tolerance else ())
        if entry.least is not None
        for name in entry.of
    }
    found: dict[str, None] = {}
    for block in sweep.blocks:
        for instance, name in block.opamps.items():
            if candidates[name].file is None:
                given = {
                    part.partition(".")[2]: value
                    for part, value in block.parts.items()
                    if part.startswith(f"{instance}.")
                }
                if instance in drawn:
                    given.setdefault("cmrr", 0.0)
                found |= dict.fromkeys(parameter_warnings(name, given))
    used = {
        name: None
        for block in sweep.blocks
        for name in block.opamps.values()
        if candidates[name].file is not None
    }
    models = imported_models(used, candidates)
    if models:
        mountings = {name: imported_mounting(model) for name, model in models.items()}
        for name, result, _ in measure_opamps(executors, jobs, mountings):
            if isinstance(result, Bench):
                found |= dict.fromkeys(bench_warnings(result, candidates[name].declared))
            else:
                found[f"{result}; so nothing is known of the model's own CMRR"] = None
    return tuple(found)
