"""The page of runs: what they asked and what came out, put together for `modepair.reports.page`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from modepair.reports.markdown import escape_markdown
from modepair.reports.page import Page, page_html
from modepair.reports.ranking import ranking_csv, ranking_markdown
from modepair.reports.readings import decibel_text, frequency_text
from modepair.reports.schematic import part_values, schematic_svg
from modepair.reports.sketch import value_text
from modepair.reports.tables import Column, figure_columns
from modepair.reports.verdicts import case_names, failing, overall, shown_verdicts, verdict_columns
from modepair.runner.comparing import Compared, candidate_axes, compare_runs, run_names
from modepair.runner.errors import OutputError
from modepair.runner.folder import RunFolder
from modepair.runner.measuring import measured_lines, measured_table
from modepair.runner.page_curves import LOWEST_OF_MANY, MOST_CURVES, draw_curves, winner_of
from modepair.runner.pages import FILE_PARTS, asked
from modepair.runner.reading import read_record
from modepair.runner.sweep import Run
from modepair.sweeps import Spec, expand
from modepair.sweeps.stage_circuits import NETLIST

if TYPE_CHECKING:
    from modepair.reports.baselines import Baseline
    from modepair.sweeps import Sweep

__all__ = ["page_of", "write_comparison", "write_report"]

MOST_CAUSES = 12
"""Causes of the budget that the page lists."""

MOST_ROWS = 40
"""Rows of measurements that the page lists."""


def page_of(
    runs: Sequence[Run],
    provenance: Mapping[str, str],
    compared: Compared | None = None,
    baseline: Baseline | None = None,
) -> Page:
    """Put together the page of runs.

    Parameters
    ----------
    runs : sequence of Run
        At least one.
    provenance : mapping of str to str
        What makes them repeatable.
    compared : Compared, optional
        Their candidates in their order.
    baseline : Baseline, optional
        Curves accepted earlier.

    Returns
    -------
    Page
        With the curves of up to `MOST_CURVES` cases.

    Raises
    ------
    ReadingError
        If the curves of a run cannot be read.
    """
    names = run_names(runs)
    specs = [run.spec for run in runs]
    drawn = draw_curves(runs, compared, baseline)
    budget, cause = _budget(runs, compared)
    sweeps = [expand(spec) for spec in specs]
    judged, met = _judged(runs)
    title = runs[0].spec.title or Path(runs[0].spec.path).stem
    verdict_table, verdict_note = _verdicts(runs[0]) if len(runs) == 1 else ([], "")
    told = _asked(sweeps, names)
    drawings, circuits = _stages(sweeps, names)
    bench = [(run, measured_table(run.folder / "curves.parquet", run.spec, run.cases)) for run in runs]
    return Page(
        title=title if len(runs) == 1 else f"{title} and {len(runs) - 1} more compared",
        kicker=_kicker(sweeps),
        curves=drawn.curves,
        overlays=drawn.overlays,
        curves_note=drawn.note,
        keep_hz=drawn.keep_hz,
        comparison=compared.comparison if compared else None,
        statement=_statement(runs[0], judged),
        met=met,
        judged=judged,
        verdicts=verdict_table,
        verdicts_note=verdict_note,
        spots_hz=specs[0].frequency.spots,
        schematics=drawings,
        circuits=circuits,
        # The values in a circuit's file stand in the table of its parts.
        asked={name: text for name, text in told.items() if not name.startswith(("op-amp ", FILE_PARTS))},
        opamps={
            name.removeprefix("op-amp "): text for name, text in told.items() if name.startswith("op-amp ")
        },
        budget=budget,
        budget_note=_BUDGET_NOTE,
        causes=[cause] if cause else [],
        tables=_tables(runs, compared),
        measured=[line for run, table in bench for line in measured_lines(table, run.spec, run.cases)],
        measured_table=_bench_columns(pd.concat([table for _, table in bench], ignore_index=True)),
        warnings=list(dict.fromkeys(text for run in runs for text in run.warnings)),
        caution_flags=("model", "nominal", *(flag for spec in specs for flag in spec.cautions)),
        provenance=provenance,
        stills=drawn.stills,
    )


def _kicker(sweeps: Sequence[Sweep]) -> str:
    stages = list(dict.fromkeys(name for sweep in sweeps for name in sweep.spec.topologies))
    count = sum(sweep.count for sweep in sweeps)
    cases = f"{count:,} {'case' if count == 1 else 'cases'}"
    return f"Common-mode rejection over frequency · {', '.join(stages)} · {cases}"


def _judged(runs: Sequence[Run]) -> tuple[str, bool | None]:
    """The verdicts on the whole, and whether all limits are kept; nothing where nothing is judged."""
    judged = [run for run in runs if len(run.verdicts)]
    if not judged:
        return "", None
    lines = [overall(run.verdicts, case_names(run.cases, run.spec.axes)[1]) for run in judged]
    lines = [line.partition(": ")[2] for line in lines]
    if len(runs) > 1:
        lines = [f"{run.folder.name}: {line}" for run, line in zip(judged, lines, strict=True)]
    return " ".join(lines), all(failing(run.verdicts).empty for run in judged)


def _statement(run: Run, judged: str) -> str:
    """The verdict where there are no candidates."""
    if judged:
        return judged
    done = run.cases[run.cases["state"] == "done"]
    if done.empty:
        return "Every case failed."
    row = done.iloc[int(np.argmin(done["cmrr_db_lowest"].to_numpy()))]
    name = case_names(run.cases, run.spec.axes)[1].get(int(row["case"]), "")
    at_floor = "lowest" in str(row["above_floor"]).split(", ")
    level = decibel_text(float(row["cmrr_db_lowest"]), at_floor).replace("> ", "above ")
    place = f" in case {int(row['case'])}{f' ({name})' if name else ''}" if len(run.cases) > 1 else ""
    return f"The lowest CMRR is {level} dB at {frequency_text(float(row['cmrr_lowest_at_hz']))}{place}."


def _verdicts(run: Run) -> tuple[list[Column], str]:
    if not len(run.verdicts):
        return [], ""
    rows, note = shown_verdicts(run.verdicts)
    return verdict_columns(rows, case_names(run.cases, run.spec.axes)[0]), note


def _stages(
    sweeps: Sequence[Sweep], names: Sequence[str]
) -> tuple[dict[str, str], dict[str, Sequence[Column]]]:
    """A drawing for each topology of each run; of an own circuit, which nobody can draw, a table of its parts."""
    drawn: dict[str, str] = {}
    listed: dict[str, Sequence[Column]] = {}
    for sweep, name in zip(sweeps, names, strict=True):
        whose = f"{name}: " if len(sweeps) > 1 else ""
        for topology in sweep.spec.topologies:
            blocks = [block for block in sweep.blocks if block.topology == topology]
            opamps: dict[str, set[str]] = {}
            for block in blocks:
                for instance, opamp in block.opamps.items():
                    opamps.setdefault(instance, set()).add(opamp)
            shown = {
                instance: next(iter(used)) if len(used) == 1 else f"{len(used)} candidates"
                for instance, used in opamps.items()
            }
            parts = part_values([block.parts for block in blocks])
            circuit = sweep.spec.circuit if topology == NETLIST else None
            if circuit is None:
                drawn[f"{whose}{topology} stage and its source"] = schematic_svg(topology, parts, shown)
                continue
            caption = f"{whose}subcircuit {circuit.subcircuit} of {circuit.file}, which is not drawn, and its source"
            rows = {part: value_text(part, value) for part, value in parts.items()} | shown
            listed[caption] = [
                Column("part", list(rows), "left"),
                Column("value", list(rows.values()), "left"),
            ]
    return drawn, listed


def _asked(sweeps: Sequence[Sweep], names: Sequence[str]) -> dict[str, str]:
    """Tell what was asked; of several runs, what is the same in all of them only once."""
    return _once([asked(sweep) for sweep in sweeps], names)


def _once(told: Sequence[Mapping[str, str]], names: Sequence[str]) -> dict[str, str]:
    """Put together what several runs tell: what is the same in all of them only once."""
    found: dict[str, str] = {}
    for key in dict.fromkeys(key for one in told for key in one):
        texts = [one.get(key, "–") for one in told]
        if len(set(texts)) == 1:
            found[key] = texts[0]
        else:
            found |= {f"{key}, {name}": text for name, text in zip(names, texts, strict=True)}
    return found


def _tables(runs: Sequence[Run], compared: Compared | None) -> dict[str, list[Column]]:
    """The cases, where no ranking sums them up; and those that failed."""
    found: dict[str, list[Column]] = {}
    for run, name in zip(runs, run_names(runs), strict=True):
        cases = run.cases
        names = case_names(cases, run.spec.axes)[1]
        done = cases[cases["state"] == "done"]
        if compared is None and len(done):
            rows = done if len(done) <= MOST_CURVES else done.nsmallest(LOWEST_OF_MANY, "cmrr_db_lowest")
            band = (run.spec.frequency.start, run.spec.frequency.stop)
            lead = [
                Column("case", [str(case) for case in rows["case"]]),
                Column("of", [names.get(int(case), "") for case in rows["case"]], "left"),
            ]
            heading = "Cases" if len(rows) == len(done) else f"The {len(rows)} lowest cases"
            found[heading] = [*lead, *figure_columns(rows, run.spec.frequency.spots, band)]
        failed = cases[cases["state"] != "done"].head(MOST_ROWS)
        if len(failed):
            found[f"Failed cases of {name}" if len(runs) > 1 else "Failed cases"] = [
                Column("case", [str(case) for case in failed["case"]]),
                Column("of", [names.get(int(case), "") for case in failed["case"]], "left"),
                Column("reason", [str(s).removeprefix("failed: ") for s in failed["state"]], "left"),
            ]
    return found


_BUDGET_NOTE = (
    "Share of the sum of sizes; CMRR if this were the only cause; CMRR of the worst board without it. Causes add as "
    "phasors, so their shares say what is worth improving, not what adds up."
)


def _budget(runs: Sequence[Run], compared: Compared | None) -> tuple[pd.DataFrame | None, str]:
    """The budget of the case that decides, at the spot nearest to where it does, and its largest cause in words.

    None where no budget was worked out.
    """
    winner = winner_of(compared)
    run = next((r for r, n in zip(runs, run_names(runs), strict=True) if winner and n == winner[0]), runs[0])
    path = run.folder / "budget.csv"
    table = pd.read_csv(path) if path.is_file() else pd.DataFrame()
    if table.empty:
        return None, ""
    case = winner[1] if winner and (table["case"] == winner[1]).any() else int(table["case"].iloc[0])
    table = table[table["case"] == case]
    at_hz = float(compared.comparison.winners.iloc[0]["decided_at_hz"]) if compared and winner else 0.0
    spots = table["frequency_hz"].unique()
    spot = float(spots[int(np.argmin(np.abs(np.log(spots / at_hz))))] if at_hz else spots[0])
    rows = table[table["frequency_hz"] == spot].sort_values("rank").head(MOST_CAUSES)
    place = f"case {case}, {frequency_text(spot)}"
    first = rows.iloc[0]
    said = (
        f"The largest single cause on the worst board at {frequency_text(spot)} is {first['cause']}, with "
        f"{100 * first['share']:.0f} % of the budget"
    )
    if not np.isnan(first["without_db"]):
        said += f"; without it that board has {first['without_db']:.1f} dB"
    shown = pd.DataFrame(
        {
            f"cause ({place})": rows["cause"].tolist(),
            "kind": rows["kind"].tolist(),
            "share, %": (100 * rows["share"]).round(1).tolist(),
            "alone, dB": rows["alone_db"].round(1).tolist(),
            "without it, dB": rows["without_db"].round(1).tolist(),
        }
    )
    return shown, f"{said}."


def _bench_columns(table: pd.DataFrame) -> list[Column]:
    if table.empty:
        return []
    rows = table.head(MOST_ROWS)

    def decibels(name: str) -> list[str]:
        return ["–" if pd.isna(value) else f"{value:.1f}" for value in rows[name]]

    return [
        Column("measurement", rows["measurement"].tolist(), "left"),
        Column("case", [str(case) for case in rows["case"]]),
        Column("frequency", [frequency_text(hz, digits=4) for hz in rows["frequency_hz"]]),
        Column("measured\ndB", decibels("measured_db")),
        Column("simulated\ndB", decibels("simulated_db")),
        Column("difference\ndB", decibels("difference_db")),
        Column("remark\n", rows["remark"].tolist(), "left"),
    ]


def write_report(
    folder: RunFolder,
    spec: Spec,
    cases: pd.DataFrame,
    verdicts: pd.DataFrame,
    provenance: Mapping[str, str],
    baseline: Baseline | None = None,
    warnings: Sequence[str] = (),
) -> None:
    """Write `report.html` into a run folder.

    Parameters
    ----------
    folder : RunFolder
        Where to; its other files are written already.
    spec : Spec
        What was asked.
    cases, verdicts : DataFrame
        What came out.
    provenance : mapping of str to str
        What makes the run repeatable.
    baseline : Baseline, optional
        Curves accepted earlier.
    warnings : sequence of str
        What the op-amp models cannot show.
    """
    run = Run(folder.building, spec, cases, verdicts, warnings=warnings)
    any_done = bool((cases["state"] == "done").any())
    compared = compare_runs([run]) if any_done and candidate_axes(spec, ()) else None
    folder.write_text("report.html", page_html(page_of([run], provenance, compared, baseline)))


def _warned(runs: Sequence[Run]) -> str:
    """Warnings of several runs, for the top of a page in Markdown."""
    texts = dict.fromkeys(text for run in runs for text in run.warnings)
    return "".join(f"**Warning:** {escape_markdown(text)}\n\n" for text in texts)


def write_comparison(output: Path, compared: Compared) -> list[Path]:
    """Write the files of a comparison.

    Parameters
    ----------
    output : Path
        The folder; it is made where there is none.
    compared : Compared
        Runs compared.

    Returns
    -------
    list of Path
        `comparison.csv`, `comparison.md` and `report.html`, each there whole or not at all.

    Raises
    ------
    OutputError
        If the folder cannot be written.
    """
    runs, comparison = compared.runs, compared.comparison
    spots = runs[0].spec.frequency.spots
    title = runs[0].spec.title if len(runs) == 1 else ""
    texts = {
        "comparison.csv": ranking_csv(comparison).to_csv(index=False),
        "comparison.md": _warned(runs) + ranking_markdown(comparison, spots, title),
        "report.html": page_html(page_of(runs, _made_from(runs, compared.names), compared)),
    }
    written = []
    try:
        output.mkdir(parents=True, exist_ok=True)
        for name, text in texts.items():
            partial = output / f".{name}.partial"
            partial.write_text(text, encoding="utf-8")
            written.append(partial.replace(output / name))
    except OSError as error:
        raise OutputError(
            f"{output}: cannot be written: {error.strerror}; name another folder with -o"
        ) from error
    return written


def _made_from(runs: Sequence[Run], names: Sequence[str]) -> dict[str, str]:
    """Provenance of runs from their records: what is the same in all only once."""
    told = []
    for run in runs:
        record = read_record(run.folder)
        told.append(
            {
                "spec": str(record["spec_file"]),
                "digest": f"sha256 {run.spec.digest}",
                "date": str(record["started"]).replace("T", " ").replace("+00:00", " UTC"),
                **{name: str(version) for name, version in record["versions"].items()},
            }
        )
    return _once(told, names)
