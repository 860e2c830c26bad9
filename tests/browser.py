"""A headless browser without a network, for the tests of pages."""

from __future__ import annotations

import base64
import json
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
)  # fmt: skip
OFFLINE = {"offline": True, "latency": 0, "downloadThroughput": 0, "uploadThroughput": 0}


def chromium() -> tuple[str, str]:
    """Paths of the browser and its driver; the test is skipped where one is missing."""
    browser = shutil.which("chromium") or shutil.which("chromium-browser")
    driver = shutil.which("chromedriver")
    if not browser or not driver:
        pytest.skip(
            "no chromium with chromedriver here; sh .ci/setup --tests installs them on Debian and Ubuntu"
        )
    return browser, driver


class Browser:
    """One page in a browser."""

    def __init__(self, driver: Any) -> None:
        self.driver = driver
        self.open_seconds = float("nan")

    def open(self, page: Path, wait: bool = True) -> None:
        start = time.perf_counter()
        self.driver.get(page.resolve().as_uri())
        if wait:
            self.wait_for("return document.documentElement.dataset.curves === 'drawn'")
        self.open_seconds = time.perf_counter() - start

    def run(self, script: str, *arguments: object) -> Any:
        return self.driver.execute_script(script, *arguments)

    def wait_for(self, script: str, seconds: float = 30.0) -> Any:
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            if found := self.run(script):
                return found
            time.sleep(0.05)
        raise AssertionError(f"the page never came to: {script}")

    def point_at(self, panel: str, frequency_hz: float, level: float) -> None:
        """Move the pointer to a place of a panel, in the units of its axes."""
        from selenium.webdriver.common.action_chains import ActionChains

        x, y = self.run(
            """
            const find = (views) => { for (const v of views) {
              if (v.model.name === arguments[0]) return v;
              const inner = find(v.child_views || []); if (inner) return inner; } };
            const view = find([...Bokeh.index]);
            view.el.scrollIntoView({ block: "center" });
            const box = view.el.getBoundingClientRect();
            const { x_scale, y_scale } = view.frame;
            return [box.left + x_scale.compute(arguments[1]), box.top + y_scale.compute(arguments[2])];
            """,
            panel, frequency_hz, level,
        )  # fmt: skip
        actions = ActionChains(self.driver)
        actions.w3c_actions.pointer_action.move_to_location(round(x) - 30, round(y) - 30)
        actions.w3c_actions.pointer_action.move_to_location(round(x), round(y))
        actions.perform()

    def reading(self) -> list[str]:
        """What the page shows of the curves under the pointer, a line each."""
        lines = "[...reading.childNodes].map((line) => line.textContent)"
        script = f"const reading = document.getElementById('reading'); return reading.hidden ? [] : {lines};"
        return list(self.run(script))

    def requests(self) -> list[str]:
        """Addresses that the page has asked for since the last call."""
        messages = [json.loads(entry["message"])["message"] for entry in self.driver.get_log("performance")]
        return [
            message["params"]["request"]["url"]
            for message in messages
            if message["method"] == "Network.requestWillBeSent"
        ]

    def complaints(self) -> list[str]:
        """Warnings and errors of the browser's console."""
        entries = self.driver.get_log("browser")
        return [entry["message"] for entry in entries if entry["level"] in {"WARNING", "SEVERE"}]

    def resize(self, width: int, height: int) -> None:
        self.driver.execute_cdp_cmd(
            "Emulation.setDeviceMetricsOverride",
            {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 600},
        )

    def screenshot(self, path: Path) -> None:
        shot = self.driver.execute_cdp_cmd("Page.captureScreenshot", {})
        path.write_bytes(base64.b64decode(shot["data"]))

    def print_to(self, path: Path) -> None:
        paper = {"paperWidth": 8.27, "paperHeight": 11.69, "printBackground": True, "preferCSSPageSize": True}
        path.write_bytes(base64.b64decode(self.driver.execute_cdp_cmd("Page.printToPDF", paper)["data"]))


@contextmanager
def open_browser(profile: Path) -> Iterator[Browser]:
    """Start a browser with a fresh profile and the network off."""
    browser, driver_path = chromium()
    from selenium import webdriver

    options = webdriver.ChromeOptions()
    options.binary_location = browser
    for flag in (*FLAGS, f"--user-data-dir={profile}", "--window-size=1400,900"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"performance": "ALL", "browser": "ALL"})
    driver = webdriver.Chrome(options=options, service=webdriver.ChromeService(executable_path=driver_path))
    try:
        driver.get("about:blank")
        driver.get_log("performance")  # what the browser's own first tab asked for
        driver.execute_cdp_cmd("Network.enable", {})
        driver.execute_cdp_cmd("Network.emulateNetworkConditions", OFFLINE)
        yield Browser(driver)
    finally:
        driver.quit()
