"""The pages of a run folder: plots and summary."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

import pandas as pd

from modepair.reports import Summary, axis_columns, summary_text
from modepair.reports.case_curves import CaseCurves
from modepair.reports.judged_sections import interference_section, verdict_section
from modepair.reports.yields import Yield, draws_needed
from modepair.runner.curve_plots import CAPTIONS, CurvePlots, Draughting, Drawing
from modepair.runner.folder import RunFolder
from modepair.runner.judging import Judged
from modepair.runner.results import Results
from modepair.sweeps import Sweep, ToleranceEntry, render
from modepair.sweeps.axes import settings
from modepair.sweeps.cases import base_settings
from modepair.sweeps.quantities import Kind

__all__ = ["asked", "begin_curves", "board_claim", "write_pages"]

FILE_PARTS = "parts in its file"
"""Of an own circuit, what `asked` calls the values that the spec leaves as they are."""

SECTIONS = {"stage.parts.": "parts", "stage.": "stage", "source.parts.": "source", "source.": "source"}


def _written(value: float, kind: object) -> str:
    """Write a value as a spec would."""
    if isinstance(kind, Kind) and (kind.decibels == "only" or (kind.decibels != "no" and value >= 1000)):
        return f"{20 * math.log10(value):.6g} dB"
    return render(value, kind.unit if isinstance(kind, Kind) else "")


def _tolerance_text(entry: ToleranceEntry) -> str:
    shares = [
        f"{key} {100 * value:.6g} %"
        for key, value in (("absolute", entry.absolute), ("matching", entry.matching))
        if value is not None
    ]
    if entry.least is not None:
        shares.append(f"least {20 * math.log10(entry.least):.6g} dB")
    elif entry.reciprocal:
        shares.append("least its op-amp's own")
    return f"{', '.join(entry.of)}: {', '.join(shares)}, {entry.law}"


def asked(sweep: Sweep) -> dict[str, str]:
    """Tell what a spec asks for, section by section.

    Parameters
    ----------
    sweep : Sweep
        The sweep.

    Returns
    -------
    dict of str to str
        Such as "source" to "resistance 350 Ω, cable_capacitance 3 nF"; axes last.
    """
    spec = sweep.spec
    kinds = settings(spec.candidates, spec.vocabulary)
    varied = {axis.path for axis in sweep.axes}
    found: dict[str, list[str]] = {"stage": [], "parts": [], "source": []}
    if "stage.topology" not in varied:
        found["stage"].append(spec.stage.topology)
    used = sorted({name for block in sweep.blocks for name in block.opamps.values()})
    opamps: dict[str, list[str]] = {name: [] for name in used}
    for path, value in base_settings(spec).items():
        if path in varied or path.startswith("tolerance."):
            continue
        if path.startswith("opamps."):
            name, _, parameter = path.removeprefix("opamps.").rpartition(".")
            if name in opamps:
                opamps[name].append(f"{parameter.replace('_', ' ')} {_written(value, kinds[path])}")
            continue
        prefix = next(prefix for prefix in SECTIONS if path.startswith(prefix))
        key = path.removeprefix(prefix)
        name = key if prefix.endswith("parts.") else key.replace("_", " ").replace(".", " ")
        found[SECTIONS[prefix]].append(f"{name} {_written(value, kinds[path])}")
    if spec.circuit:
        circuit = spec.circuit
        found["circuit"] = [
            f"subcircuit {circuit.subcircuit} of {circuit.file}",
            f"sha256 {circuit.digest[:16]}",
        ]
        found["circuit"] += [f"supply {render(volts, 'V')}" for volts in spec.stage.supplies or ()]
        found[FILE_PARTS] = [
            f"{name} {_written(value, kinds[f'stage.parts.{name}'])}"
            for name, value in circuit.values
            if f"stage.parts.{name}" not in varied and name not in spec.stage.parts
        ]
    texts = {section: ", ".join(items) for section, items in found.items() if items}
    for name in used:
        opamp = spec.candidates[name]
        if opamp.file is not None:
            opamps[name] = [f"model {opamp.file}", f"subcircuit {opamp.subcircuit}"]
            opamps[name] += [f"supply {render(volts, 'V')}" for volts in opamp.supplies or ()]
    texts |= {f"op-amp {name}": ", ".join(items) for name, items in opamps.items()}
    plan = spec.frequency
    texts["frequency"] = (
        f"{render(plan.start, 'Hz')} to {render(plan.stop, 'Hz')}, {plan.points_per_decade:g} points per decade"
    )
    if spec.tolerance:
        texts["draws"] = (
            f"{spec.tolerance.draws:.0f}, seed {spec.tolerance.seed:.0f}, {spec.tolerance.sampling}"
        )
        for index, entry in enumerate(spec.tolerance.parts):
            texts[f"tolerance {index}"] = _tolerance_text(entry)
    return texts | {f"axis {axis.path}": ", ".join(axis.labels) for axis in sweep.axes}


def write_pages(
    folder: RunFolder,
    sweep: Sweep,
    results: Results,
    provenance: dict[str, str],
    judged: Judged,
    curves: Drawing | None,
    measured: str = "",
    worst: pd.DataFrame | None = None,
    warnings: Sequence[str] = (),
) -> None:
    """Write plots and summary of a run.

    Parameters
    ----------
    folder : RunFolder
        Where to.
    sweep : Sweep
        What was asked.
    results : Results
        What it came to.
    provenance : dict of str to str
        What makes the run repeatable.
    judged : Judged
        Its verdicts.
    curves : Drawing or None
        Its curves, which `begin_curves` began to draw.
    measured : str
        The section on measurements, in Markdown; empty where there is none.
    worst : DataFrame, optional
        The worst case of each case.
    warnings : sequence of str
        What its op-amp models cannot show.
    """
    spec = sweep.spec
    plots = {caption: f"{stem}.png" for caption, stem in CAPTIONS.items()} if curves else {}
    if results.boards is not None:
        from modepair.runner.board_pages import plot_board_pages

        plots |= plot_board_pages(folder, sweep, results)
    summary = Summary(
        title=spec.title or Path(spec.path).stem,
        asked=asked(sweep),
        cases=results.cases,
        axes=sweep.axes,
        spots_hz=spec.frequency.spots,
        band_hz=(spec.frequency.start, spec.frequency.stop),
        provenance=provenance,
        caution_flags=("model", "nominal", *spec.cautions),
        plots=plots,
        warnings=warnings,
        opening=_verdict(sweep, results, judged),
        further=_boards(sweep, results, worst)
        | _interference(sweep, results)
        | ({"Measured": measured} if measured else {}),
    )
    folder.write_text("summary.md", summary_text(summary))
    if curves:
        curves.finish()


def begin_curves(folder: RunFolder, sweep: Sweep, results: Results, drawing: Draughting) -> Drawing | None:
    """Begin to draw the curves of a run.

    Parameters
    ----------
    folder : RunFolder
        Where to.
    sweep : Sweep
        What was asked.
    results : Results
        What it came to.
    drawing : Draughting
        Draws them.

    Returns
    -------
    Drawing or None
        For `write_pages`; none where every case failed.
    """
    if results.kept is None:
        return None
    spec = sweep.spec
    rows = results.cases[results.cases["case"].isin(results.kept_case)]
    case = results.kept_case.tolist()
    curves = CaseCurves(results.kept, axis_columns(rows, sweep.axes), spec.title, case, sweep.count)
    mask = spec.limits.cmrr.corners if spec.limits and spec.limits.cmrr else ()
    return drawing.begin(CurvePlots(curves, mask, spec.measurements), folder.building)


def _verdict(sweep: Sweep, results: Results, judged: Judged) -> dict[str, str]:
    if not len(judged.verdicts):
        return {}
    return {"Verdict": verdict_section(judged.verdicts, results.cases, sweep.axes, judged.changes)}


def board_claim(cases: pd.DataFrame) -> str:
    """Say what so many draws can claim."""
    most = f"{draws_needed(0.999):,} draws, all passing, are needed to claim a yield of 99.9 % with 95 % confidence"
    if "yield" not in cases:
        return f"No yield: the spec has no limits.cmrr to pass. {most}."
    drawn = int(cases["draws"].max())
    best = Yield(drawn, drawn).interval[0]
    return f"{drawn:,} draws that all pass show a yield above {100 * best:.3g} %; {most}."


def _boards(sweep: Sweep, results: Results, worst: pd.DataFrame | None) -> dict[str, str]:
    if results.boards is None or not (results.cases["draws"] > 0).any():
        return {}
    from modepair.reports.board_tables import boards_section, worst_case_section
    from modepair.runner.budget_pages import case_labels

    cases, axes = results.cases, sweep.axes
    found = {"Boards": boards_section(cases, axes, sweep.spec.frequency.spots, board_claim(cases))}
    if worst is not None:
        found["Worst case"] = worst_case_section(worst, case_labels(sweep, worst["case"].unique().tolist()))
    return found


def _interference(sweep: Sweep, results: Results) -> dict[str, str]:
    interference = sweep.spec.interference
    text = interference_section(results.cases, sweep.axes, interference) if interference else ""
    return {"Interference": text} if text else {}
