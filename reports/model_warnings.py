"""Warnings about op-amp models that cannot show what a sweep is about.

A curve simulated with a model that has no common-mode error, or one without its fall over frequency, is fiction
at the places where the op-amp decides. Every page that uses such a model says so at its top.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from modepair.reports.bench import Bench, bench_figures, compare_figures
from modepair.reports.readings import frequency_text

__all__ = [
    "FREE_OF_ERROR_DB",
    "bench_warnings",
    "flat_warning",
    "no_mechanism_warning",
    "parameter_warnings",
]

FREE_OF_ERROR_DB = 200.0
"""CMRR beyond which a model is taken to have no common-mode error: no part is near it, and the round-off of a
solve is not far."""

LARGEST_DIFFERENCE_DB = 3.0
"""Difference between measured and declared figures beyond which a model is not the part that was declared."""

COMPARED = {
    "cmrr": "CMRR",
    "cmrr_corner": "the corner of its CMRR",
    "open_loop_gain": "open-loop gain",
    "gain_bandwidth": "gain-bandwidth",
}


def no_mechanism_warning(name: str) -> str:
    """Word that a model has no common-mode error at all."""
    return (
        f"{name}: the model has no CMRR mechanism, its outputs do not move with the common mode. The curves show "
        "the resistors' and the source's CMRR alone, without the op-amp's."
    )


def flat_warning(name: str, level_db: float | None = None) -> str:
    """Word that a model's common-mode error does not grow with frequency."""
    level = "" if level_db is None else f", {level_db:.1f} dB at every frequency up to its unity gain"
    return (
        f"{name}: the model's CMRR does not depend on frequency{level}. That of real op-amps falls, so the curves are "
        "too good at high frequency."
    )


def parameter_warnings(name: str, parameters: Mapping[str, object]) -> list[str]:
    """Warnings about a macromodel, told from its parameters.

    Parameters
    ----------
    name : str
        The candidate, or the instance.
    parameters : mapping of str to object
        The parameters that it has.

    Returns
    -------
    list of str
        One sentence or two each.
    """
    if "cmrr" not in parameters:
        return [no_mechanism_warning(name)]
    return [flat_warning(name)] if "cmrr_corner" not in parameters else []


def bench_warnings(bench: Bench, declared: Mapping[str, float]) -> list[str]:
    """Warnings about a measured model.

    Parameters
    ----------
    bench : Bench
        The measurement.
    declared : mapping of str to float
        What was declared of it, under the names of op-amp parameters.

    Returns
    -------
    list of str
        One sentence or two each.
    """
    figures = bench_figures(bench)
    unity_hz = figures.get("unity_gain_frequency", bench.frequency_hz[-1])
    below_unity = bench.cmrr_db[bench.frequency_hz <= unity_hz]
    warnings = []
    if bench.gain[0].real < 0:
        warnings.append(
            f"{bench.name}: its output falls when its plus pin rises; are plus and minus exchanged in pins?"
        )
    if (below_unity > FREE_OF_ERROR_DB).all():
        warnings.append(no_mechanism_warning(bench.name))
    elif below_unity[0] > FREE_OF_ERROR_DB:
        lowest = float(below_unity.min())
        warnings.append(
            f"{bench.name}: its CMRR is above {FREE_OF_ERROR_DB:.0f} dB at low frequency and {lowest:.0f} dB at the "
            "least: the model's input stage is perfectly symmetric, as no real one is. The curves are too good."
        )
    elif np.abs(below_unity - below_unity[0]).max() < LARGEST_DIFFERENCE_DB:
        warnings.append(flat_warning(bench.name, float(below_unity[0])))
    for one in compare_figures(figures, declared):
        difference = one.difference_db
        if one.parameter in COMPARED and difference is not None and abs(difference) > LARGEST_DIFFERENCE_DB:
            noun = COMPARED[one.parameter]
            measured, stated = (_text(one.parameter, value) for value in (one.measured, one.declared))
            warnings.append(
                f"{bench.name}: {noun} of the model is {measured}, declared is {stated}: "
                f"{abs(difference):.1f} dB {'more' if difference > 0 else 'less'}."
            )
    return warnings


def _text(parameter: str, value: float | None) -> str:
    number = value or 0.0
    if parameter in ("cmrr", "open_loop_gain"):
        return f"{20 * np.log10(number):.1f} dB"
    return frequency_text(number)
