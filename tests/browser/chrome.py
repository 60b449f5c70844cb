"""A headless Chromium for tests that look at pages: opens files, counts requests, prints, takes pictures.

Owns where browser and driver are found and with which flags they start. SHEDWRIGHT_BROWSER_REQUIRED=1 turns a
missing browser or axe-core from a skip into a failure.
"""

import base64
import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import pytest

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--hide-scrollbars",
)
PAPER = {"A4": (8.27, 11.69), "Letter": (8.5, 11.0)}
"""Inches."""


def lacking(what: str) -> None:
    """Skip with the reason, or fail where the browser's tests must run."""
    if os.environ.get("SHEDWRIGHT_BROWSER_REQUIRED") == "1":
        pytest.fail(f"{what}, and SHEDWRIGHT_BROWSER_REQUIRED=1 says that it must be there")
    pytest.skip(what)


def axe_source() -> str:
    """The text of axe-core: the file that AXE_CORE names, else node_modules below the repository or here."""
    root = Path(__file__).resolve().parents[2]
    places = [Path(os.environ["AXE_CORE"])] if "AXE_CORE" in os.environ else []
    places += [base / "node_modules" / "axe-core" / "axe.min.js" for base in (root, Path.cwd())]
    for place in places:
        if place.is_file():
            return place.read_text(encoding="utf-8")
    lacking("axe-core is not installed (npm install axe-core, or AXE_CORE=path of axe.min.js)")
    raise AssertionError


class Chrome:
    """One browser; every method opens what it is given afresh."""

    def __init__(self, driver: Any) -> None:
        self.driver = driver

    def see(self, page: Path, width: int = 1200, height: int = 900, dark: bool = False) -> None:
        """Open a page file at a width, light or dark."""
        self.driver.execute_cdp_cmd(
            "Emulation.setDeviceMetricsOverride",
            {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 600},
        )
        scheme = "dark" if dark else "light"
        self.driver.execute_cdp_cmd(
            "Emulation.setEmulatedMedia",
            {"media": "screen", "features": [{"name": "prefers-color-scheme", "value": scheme}]},
        )
        self.driver.get(page.resolve().as_uri())

    def on_paper(self, page: Path, paper: str, margin_mm: float = 13.0) -> list[str]:
        """Open a page as it is printed on a paper and name the tables and charts that do not fit its width."""
        width = round(96.0 * (PAPER[paper][0] - 2.0 * margin_mm / 25.4))
        self.see(page, width)
        self.driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print", "features": []})
        found: list[str] = self.run(
            "const wide = document.documentElement.clientWidth + 1;"
            "return [...document.querySelectorAll('table, svg, p')].filter(one => "
            "one.getBoundingClientRect().right > wide).map(one => one.textContent.slice(0, 60));"
        )
        return found

    def run(self, script: str, *arguments: Any) -> Any:
        """A script in the page; its return value."""
        return self.driver.execute_script(script, *arguments)

    def requests(self) -> list[str]:
        """Addresses asked for since this was last called."""
        told = [json.loads(row["message"])["message"] for row in self.driver.get_log("performance")]
        return [
            row["params"]["request"]["url"] for row in told if row["method"] == "Network.requestWillBeSent"
        ]

    def complaints(self) -> list[str]:
        """Messages of the console since this was last called."""
        return [row["message"] for row in self.driver.get_log("browser")]

    def faults(self, source: str) -> list[str]:
        """What axe-core finds on the open page: rule, target and summary of each violation."""
        if not self.run("return typeof axe !== 'undefined'"):
            self.run(source + "; window.axe = axe;")
        found = self.driver.execute_async_script(
            "const done = arguments[arguments.length - 1];"
            "axe.run(document, {resultTypes: ['violations']}).then(r => done(r.violations));"
        )
        return [
            f"{one['id']}: {node['target']} {node['failureSummary'][:300]}"
            for one in found
            for node in one["nodes"][:3]
        ]

    def picture(self, path: Path, whole: bool = True) -> None:
        """The open page as a PNG file."""
        told = self.driver.execute_cdp_cmd(
            "Page.captureScreenshot", {"format": "png", "captureBeyondViewport": whole}
        )
        path.write_bytes(base64.b64decode(told["data"]))

    def pdf(self, paper: str = "A4") -> bytes:
        """The open page printed."""
        width, height = PAPER[paper]
        self.driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "", "features": []})
        told = self.driver.execute_cdp_cmd(
            "Page.printToPDF",
            {"paperWidth": width, "paperHeight": height, "printBackground": True, "preferCSSPageSize": False},
        )
        return base64.b64decode(told["data"])


@contextmanager
def chrome() -> Iterator[Chrome]:
    """A browser for as long as the block runs; skips (or fails) with the reason where there is none."""
    browser = os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("google-chrome")
    driver = os.environ.get("CHROMEDRIVER") or shutil.which("chromedriver")
    if browser is None or driver is None:
        lacking("no Chromium with chromedriver is installed (Debian: chromium, chromium-driver)")
        raise AssertionError
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    with TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        options = webdriver.ChromeOptions()
        options.binary_location = browser
        for flag in (*FLAGS, f"--user-data-dir={profile}"):
            options.add_argument(flag)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        session = webdriver.Chrome(options=options, service=Service(driver))
        try:
            session.get("about:blank")
            session.get_log("performance")  # the browser's own first page is not ours
            yield Chrome(session)
        finally:
            session.quit()
