"""Files of a plot: the same bytes each time, and text that stays text."""

from xml.etree import ElementTree

from PIL import Image

from modepair.reports.axis_labels import axis_columns
from modepair.reports.case_curves import CaseCurves
from modepair.reports.plot_files import write_plot
from modepair.reports.plots import plot_cmrr
from tests.synthetic_cases import Made, one_pole_cases


def curves_of(made: Made, title: str = "") -> CaseCurves:
    return CaseCurves(made.pair, axis_columns(made.cases, made.axes), title)


def test_files_are_the_same_each_time(tmp_path):
    made = one_pole_cases(2, 2, perfect=(3,))
    for name in ("one", "two"):
        files = write_plot(plot_cmrr(curves_of(made, title="Silo")), tmp_path / f"{name}.v1")
        assert [f.name for f in files] == [f"{name}.v1.png", f"{name}.v1.svg"]
    for suffix in ("png", "svg"):
        assert (tmp_path / f"one.v1.{suffix}").read_bytes() == (tmp_path / f"two.v1.{suffix}").read_bytes()
    root = ElementTree.parse(tmp_path / "one.v1.svg").getroot()
    assert root.tag.endswith("svg")
    assert "date" not in (tmp_path / "one.v1.svg").read_text().lower().split("<style")[0]
    assert (tmp_path / "one.v1.png").read_bytes().startswith(b"\x89PNG")


def test_the_png_is_opaque_and_says_its_size(tmp_path):
    made = one_pole_cases(2, 2)
    figure = plot_cmrr(curves_of(made))
    png, _ = write_plot(figure, tmp_path / "cmrr")
    with Image.open(png) as image:
        assert image.mode == "RGB"
        inches = [pixels / dpi for pixels, dpi in zip(image.size, image.info["dpi"], strict=True)]
    # A pixel, of 140 in an inch, is the most that a size can be off.
    assert all(abs(a - b) < 1 / 100 for a, b in zip(inches, figure.get_size_inches(), strict=True))


def test_the_svg_keeps_its_text(tmp_path):
    made = one_pole_cases(2, 2)
    _, svg = write_plot(plot_cmrr(curves_of(made, title="5 < 6 & 7")), tmp_path / "cmrr")
    texts = [element for element in ElementTree.parse(svg).iter() if element.tag.endswith("}text")]
    assert {"5 < 6 & 7", "10 kHz", "CMRR (dB)", "quiet-bipolar, imbalance 20"} <= {
        text.text for text in texts
    }
    # A machine without the first font has one of the others.
    assert all("sans-serif" in text.attrib["style"] for text in texts)
