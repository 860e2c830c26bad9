"""The page in a real browser with the network off: it opens, reads, sorts, hides, prints, and asks for nothing.

The sweep is of eight candidates in three conditions. How long the page takes to open depends on the machine and is
measured by `python -m tests.test_page_in_browser`, not judged here.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

from modepair.runner import run
from modepair.runner.comparing import Compared, compare_runs
from modepair.runner.report import write_comparison
from tests.browser import Browser, chromium, open_browser

EXAMPLE = Path(__file__).parent.parent / "sweeps" / "examples" / "silo-weighing.yaml"
HOSTILE = "<img src=x onerror=alert(1)></script><script>document.title='taken'</script>"
LARGEST_PAGE = 6_000_000


def write_page(folder: Path) -> tuple[Path, Compared]:
    """Run the example with a mask, bench data and a title that tries to break out; write its page."""
    text = re.sub(r"(?ms)^(?:limits|tolerance):.*?(?=^[a-z]|\Z)", "", EXAMPLE.read_text(encoding="utf-8"))
    lines = [f'title: "{HOSTILE}"' if line.startswith("title:") else line for line in text.splitlines()]
    lines += [
        "limits: {cmrr: [[50, 70 dB], [1k, 50 dB], [4k, 36 dB]]}",
        "measured:",
        f'  - {{name: "{HOSTILE}", file: board.csv, frequency: {{column: f}}, cmrr: {{column: c}}}}',
    ]
    spec = folder / "silo.yaml"
    spec.write_text("\n".join(lines), encoding="utf-8")
    (folder / "board.csv").write_text("f,c\n50,90\n1000,75\n", encoding="utf-8")
    compared = compare_runs([run(spec, folder / "run", jobs=1)])
    write_comparison(folder / "out", compared)
    return folder / "out" / "report.html", compared


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Compared]:
    chromium()
    return write_page(tmp_path_factory.mktemp("page"))


@pytest.fixture(scope="module")
def browser(page: tuple[Path, Compared], tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    with open_browser(tmp_path_factory.mktemp("profile")) as opened:
        yield opened


@pytest.fixture
def opened(browser: Browser, page: tuple[Path, Compared]) -> Iterator[Browser]:
    browser.resize(1400, 900)
    browser.open(page[0])
    yield browser
    assert browser.complaints() == []
    asked_for = browser.requests()
    assert [address for address in asked_for if not address.startswith(("file://", "data:", "blob:"))] == []


def column(browser: Browser, number: int) -> list[str]:
    rows = "[...document.querySelectorAll('#ranking tbody tr')]"
    script = f"return {rows}.map(row => row.cells[arguments[0]].textContent.trim())"
    return list(browser.run(script, number))


def test_it_is_small_enough_to_be_mailed(page: tuple[Path, Compared]) -> None:
    assert page[0].stat().st_size < LARGEST_PAGE


def test_the_browser_says_what_is_wrong_and_what_is_asked_for(browser: Browser, tmp_path: Path) -> None:
    """The two checks of every test here can fail: a page that breaks both is noticed."""
    bad = tmp_path / "bad.html"
    bad.write_text("<img src='http://192.0.2.1/x.png'><script>undefinedName()</script>", encoding="utf-8")
    browser.open(bad, wait=False)
    assert any("undefinedName is not defined" in text for text in browser.complaints())
    assert "http://192.0.2.1/x.png" in browser.requests()


def test_the_verdict_is_the_first_thing_on_the_screen(opened: Browser, page: tuple[Path, Compared]) -> None:
    best = page[1].comparison.table["candidate"].iloc[0]
    top = opened.run("return document.querySelector('.headline').getBoundingClientRect().bottom")
    assert top < 450
    assert best in opened.run("return document.querySelector('.headline').textContent")


def test_hostile_texts_are_only_texts(opened: Browser) -> None:
    assert opened.run("return document.title") == HOSTILE
    assert opened.run("return document.querySelector('h1').textContent") == HOSTILE
    assert opened.run("return document.querySelectorAll('img[src=x]').length") == 0


def test_the_pointer_reads_every_curve_that_lies_under_it(
    opened: Browser, page: tuple[Path, Compared]
) -> None:
    curves = page[1].runs[0].curves
    at_1khz = curves[curves["frequency_hz"] == 1000.0].set_index("case")
    level = float(at_1khz["cmrr_db"][3])  # precision-bipolar, imbalance 100
    opened.point_at("panel-cmrr", 1000.0, level)
    reading = opened.wait_for(
        "const shown = document.getElementById('reading');"
        "return shown.hidden ? null : [...shown.childNodes].map(node => node.textContent)"
    )
    assert reading[0] == "at 1 kHz"
    (line,) = [text for text in reading if text.startswith("precision-bipolar, imbalance 100 (case 3) ")]
    assert f"CMRR {level:.1f} dB, {level - 50:+.1f} dB to the mask; A_cm " in line
    opened.point_at("panel-cmrr", 1000.0, -15.0)
    opened.wait_for("return document.getElementById('reading').hidden")


def test_bench_points_are_read_as_plain_text(opened: Browser) -> None:
    opened.point_at("panel-cmrr", 1000.0, 75.0)
    opened.wait_for("return !document.getElementById('reading').hidden")
    assert any(text.startswith(f"measured: {HOSTILE} measured CMRR 75.0 dB") for text in opened.reading())


def test_a_heading_sorts_and_sorts_back(opened: Browser) -> None:
    heads = opened.run(
        "return [...document.querySelectorAll('#ranking th')].map(h => h.textContent.replace(/\\s+/g, ' '))"
    )
    place = heads.index("bandwidth")
    press = "document.querySelectorAll('#ranking th button')[arguments[0]].click()"
    before = column(opened, place)
    opened.run(press, place)

    def hertz(text: str) -> float:
        number, unit = text.split(" ")
        return float(number) * {"Hz": 1, "kHz": 1e3}[unit]

    assert column(opened, place) == sorted(before, key=hertz)
    assert before != column(opened, place)
    opened.run(press, place)
    assert column(opened, place) == sorted(before, key=hertz, reverse=True)
    opened.run(press, 1)
    assert column(opened, 1) == sorted(column(opened, 1))


def test_a_name_hides_its_curves_and_shows_them_again(opened: Browser) -> None:
    visible = """
    const models = [...Bokeh.documents[0].roots()[0].references()];
    return models.filter(m => m.name && m.glyph && m.visible && m.glyph.type === "Line").map(m => m.name);
    """
    press = """
    const found = [...document.querySelectorAll('.switch')].find(s => s.dataset.name === arguments[0]);
    found.click(); return found.getAttribute('aria-pressed');
    """
    everything = opened.run(visible)
    assert len([name for name in everything if "case" in name]) == 2 * 24
    assert opened.run(press, "zero-drift") == "false"
    assert opened.run(press, "100") == "false"
    shown = [name for name in opened.run(visible) if "case" in name]
    assert len(shown) == 2 * 7 * 2
    assert not any("zero-drift" in name or "imbalance 100 " in name for name in shown)
    assert opened.run(press, "mask") == "false"
    assert "mask" not in opened.run(visible)
    for name in ("zero-drift", "100", "mask"):
        assert opened.run(press, name) == "true"
    assert opened.run(visible) == everything


def test_ticks_follow_when_the_band_is_enlarged(opened: Browser) -> None:
    ticks = """
    const models = [...Bokeh.documents[0].roots()[0].references()];
    return [...models.find(m => m.name === "frequency-cmrr").major_label_overrides.values()];
    """
    whole = opened.run(ticks)
    assert whole == ["1 Hz", "10 Hz", "100 Hz", "1 kHz", "10 kHz", "100 kHz"]
    opened.run(
        "const models = [...Bokeh.documents[0].roots()[0].references()];"
        "models.find(m => m.name === 'panel-cmrr').x_range.setv({start: 90, end: 2100})"
    )
    assert opened.run(ticks) == ["100 Hz", "200 Hz", "500 Hz", "1 kHz", "2 kHz"]
    opened.run("document.querySelector('.whole').click()")
    assert opened.run(ticks) == whole


@pytest.mark.parametrize("width", [1400, 390])
def test_nothing_is_wider_than_the_screen(opened: Browser, width: int) -> None:
    opened.resize(width, 844)
    opened.wait_for(f"return innerWidth === {width}")
    assert opened.run("return document.documentElement.scrollWidth") == width


def test_it_prints_on_a4(opened: Browser, tmp_path: Path) -> None:
    """Vector text on a few A4 pages, the curves as a drawing with a label at each."""
    opened.print_to(tmp_path / "page.pdf")
    data = (tmp_path / "page.pdf").read_bytes()
    pages = data.count(b"/Type /Page\n") or data.count(b"/Type /Page ")
    assert 2 <= pages <= 8
    # A4 is 595 by 842 points.
    assert b"/MediaBox [0 0 594.95996 841.91998]" in data or b"/MediaBox [0 0 595" in data
    reader = shutil.which("pdftotext")
    if reader:
        text = subprocess.run(
            [reader, "-layout", tmp_path / "page.pdf", "-"], capture_output=True, text=True, check=True
        ).stdout
        assert "Op-amp data" in text
        assert "show the whole band" not in text


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as scratch:
        written, _ = write_page(Path(scratch))
        print(f"page: {written.stat().st_size / 1e6:.2f} MB")
        for attempt in range(3):
            with open_browser(Path(scratch) / f"profile-{attempt}") as one:
                one.open(written)
                print(f"opened in {one.open_seconds:.2f} s, curves drawn", file=sys.stdout)
