"""The op-amp bench's plot: gain, CMRR, phase and output impedance of measured op-amps over frequency."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter

from modepair.reports.bench import Bench, bench_figures
from modepair.reports.end_labels import EndLabel, label_height, label_room, write_labels
from modepair.reports.model_warnings import FREE_OF_ERROR_DB
from modepair.reports.pairs import FloatArray
from modepair.reports.palette import HUES
from modepair.reports.panels import in_our_look, make_panels
from modepair.reports.scales import frequency_axis, level_axis
from modepair.sweeps import render

__all__ = ["plot_bench"]

MOST_OPAMPS = 20
_DASHES: tuple[tuple[float, ...], ...] = ((), (5.0, 2.0), (1.5, 1.5), (6.0, 1.5, 1.5, 1.5))


@in_our_look
def plot_bench(benches: Sequence[Bench], *, title: str = "") -> Figure:
    """Draw what the bench measured.

    Parameters
    ----------
    benches : sequence of Bench
        At least one, all over the same frequencies; the first 20 are drawn.
    title : str
        Text above the panels.

    Returns
    -------
    matplotlib.figure.Figure
        Four panels up to ten times the highest unity-gain frequency; a label at each curve of CMRR. CMRR above
        200 dB is not drawn, since it is none.
    """
    benches = benches[:MOST_OPAMPS]
    frequency_hz = benches[0].frequency_hz
    highest = max(bench_figures(one).get("unity_gain_frequency", frequency_hz[-1]) for one in benches)
    seen = frequency_hz <= 10 * highest
    frequency_hz = frequency_hz[seen]
    cmrr_db = [np.where(one.cmrr_db > FREE_OF_ERROR_DB, np.nan, one.cmrr_db)[seen] for one in benches]
    panels_of: list[list[tuple[str, list[FloatArray], Sequence[float]]]] = [
        [
            (
                "open-loop gain (dB)",
                [20 * np.log10(np.abs(one.gain[seen])) for one in benches],
                (5, 10, 20, 40),
            ),
            ("CMRR of the op-amp alone (dB)", cmrr_db, (2, 5, 10, 20, 40)),
        ],
        [
            (
                "phase of the gain (degrees)",
                [np.degrees(np.unwrap(np.angle(one.gain[seen]))) for one in benches],
                (15, 45, 90, 180),
            ),
            (
                "output impedance, open loop",
                [np.log10(np.abs(one.output_impedance[seen])) for one in benches],
                (1, 2),
            ),
        ],
    ]
    ends = []
    for index, (one, level) in enumerate(zip(benches, cmrr_db, strict=True)):
        known = level[np.isfinite(level)]
        text = one.name if known.size else f"{one.name} (no CMRR mechanism)"
        last = float(level[-1]) if np.isfinite(level[-1]) else float(known[-1]) if known.size else 0.0
        ends.append(EndLabel(last, text, HUES[index % len(HUES)], _DASHES[index // len(HUES) % len(_DASHES)]))
    height = max(2.9, label_height(ends))
    figure, panels = make_panels(2, 2, label_room(ends), height, 4.3, title, lower_height=2.2)
    for row, contents in enumerate(panels_of):
        for column, (name, levels, steps) in enumerate(contents):
            panel = panels[row][column]
            level_axis(panel, levels, name, steps=steps)
            frequency_axis(panel, frequency_hz, named=row == 1, sparse=True)
            for end, level in zip(ends, levels, strict=True):
                line = panel.plot(frequency_hz, level, color=end.colour, linewidth=1.4)[0]
                if end.dashes:
                    line.set_dashes(end.dashes)
    panels[1][1].yaxis.set_major_formatter(FuncFormatter(lambda level, _: render(10.0**level, "Ω", 3)))
    write_labels(panels[0][1], ends)
    return figure
