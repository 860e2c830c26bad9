"""The files of a plot: a PNG and an SVG, the same bytes each time."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from io import StringIO
from pathlib import Path

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image
from PIL.PngImagePlugin import PngInfo

from modepair.reports.panels import in_our_look

__all__ = ["svg_text", "write_plot"]


@in_our_look
def write_plot(figure: Figure, stem: Path) -> tuple[Path, Path]:
    """Write a figure as PNG and SVG.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        As from `plot_cmrr` and `plot_gains`.
    stem : Path
        Path without a suffix.

    Returns
    -------
    tuple of Path
        The PNG and the SVG file. The same curves give the same bytes: no date, no random identifiers.
    """
    png, svg = stem.with_name(f"{stem.name}.png"), stem.with_name(f"{stem.name}.svg")
    canvas = FigureCanvasAgg(figure)
    canvas.draw()  # type: ignore[no-untyped-call]
    pixels = canvas.buffer_rgba()  # type: ignore[no-untyped-call]
    # Compressing leaves Python free: the SVG is drawn at the same time.
    with ThreadPoolExecutor(1) as beside:
        compressed = beside.submit(_write_png, pixels, figure.dpi, png)
        svg.write_text(svg_text(figure), encoding="utf-8")
        compressed.result()
    return png, svg


@in_our_look
def svg_text(figure: Figure) -> str:
    """Give a figure as SVG, its texts as text, with neither a date nor random identifiers.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        The figure.

    Returns
    -------
    str
        A document of its own.
    """
    buffer = StringIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": "modepair"})
    return buffer.getvalue()


def _write_png(pixels: memoryview, dpi: float, path: Path) -> None:
    told = PngInfo()
    told.add_text("Software", "modepair")
    # Nothing is transparent, and a fourth channel costs a third more.
    image = Image.fromarray(np.asarray(pixels)).convert("RGB")
    image.save(path, "PNG", compress_level=3, dpi=(dpi, dpi), pnginfo=told)
