"""A headless Chromium with no network, and what the tests ask of a page in it."""

from __future__ import annotations

import base64
import os
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

AXE = Path(__file__).parent / "vendor" / "axe.min.js"  # axe-core 4.14.1 (npm), MPL-2.0

_FLAGS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--hide-scrollbars",
    "--force-device-scale-factor=1",
    # Every host name fails to resolve: a page that wants the network shows it as an error.
    "--host-resolver-rules=MAP * ~NOTFOUND",
)


def open_browser() -> Any:
    """Start Chromium through its driver; skip where there is none, but never in CI."""
    chromium = shutil.which("chromium") or shutil.which("google-chrome")
    driver = shutil.which("chromedriver")
    if chromium is None or driver is None:
        if os.environ.get("CI"):
            pytest.fail("CI has no chromium or chromedriver")
        pytest.skip("no chromium with chromedriver on this machine")
    selenium = pytest.importorskip("selenium", reason="selenium is not installed")
    assert selenium
    from selenium.webdriver import Chrome, ChromeOptions
    from selenium.webdriver.chrome.service import Service

    options = ChromeOptions()
    options.binary_location = chromium
    for flag in (*_FLAGS, f"--user-data-dir={tempfile.mkdtemp(prefix='mrics-browser-')}"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    return Chrome(options=options, service=Service(driver))


class Page:
    """One page in the browser."""

    def __init__(self, browser: Any, path: Path, width: int = 1280, height: int = 1000) -> None:
        self.browser = browser
        self.width(width, height)
        self.cdp("Emulation.setEmulatedMedia", media="", features=[])
        browser.get_log("browser")
        browser.get(path.resolve().as_uri())
        if self.script("return !!document.getElementById('viewer')"):
            self.painted()

    def cdp(self, command: str, **values: Any) -> Any:
        return self.browser.execute_cdp_cmd(command, values)

    def width(self, width: int, height: int) -> None:
        self.cdp(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )

    def script(self, text: str, *values: Any) -> Any:
        return self.browser.execute_script(text, *values)

    def one(self, selector: str) -> Any:
        return self.browser.find_element("css selector", selector)

    def errors(self) -> list[str]:
        """Errors the browser's console shows (not its advice on speed)."""
        log = self.browser.get_log("browser")
        return [entry["message"] for entry in log if entry["level"] == "SEVERE"]

    def painted(self) -> str:
        """Wait until the viewer has drawn its present state; "scan slice mode turn"."""
        from selenium.webdriver.support.ui import WebDriverWait

        find = "return document.getElementById('v-stage').dataset.painted || ''"
        return str(WebDriverWait(self.browser, 20, 0.02).until(lambda _: self.script(find)))

    def wait_for(self, condition: Callable[[], bool]) -> None:
        """Wait until something holds; fail after 20 s."""
        from selenium.webdriver.support.ui import WebDriverWait

        WebDriverWait(self.browser, 20, 0.02).until(lambda _: condition())

    def keys(self, *keys: str) -> str:
        """Press keys in the stage, wait for the drawing."""
        stage = self.one("#v-stage")
        for key in keys:
            stage.send_keys(key)
        return self.painted()

    def choose(self, selector: str, value: object) -> str:
        """Set a menu or field as a person would leave it, wait for the drawing."""
        self.script(
            "const e = document.querySelector(arguments[0]); e.value = arguments[1];"
            "e.dispatchEvent(new Event('input', {bubbles: true}));"
            "e.dispatchEvent(new Event('change', {bubbles: true}));",
            selector,
            value,
        )
        return self.painted()

    def pixels(self, panel: int, rows: int, columns: int) -> np.ndarray:
        """Colours of a panel, one per voxel in view, shape (rows, columns, 3)."""
        text = self.script(
            """
            const canvas = document.querySelectorAll('#v-stage canvas')[arguments[0]];
            const [rows, columns] = [arguments[1], arguments[2]];
            const all = canvas.getContext('2d').getImageData(0, 0, canvas.width, canvas.height);
            const bytes = [];
            for (let r = 0; r < rows; r += 1) for (let c = 0; c < columns; c += 1) {
              const y = Math.floor((r + 0.5) * canvas.height / rows);
              const x = Math.floor((c + 0.5) * canvas.width / columns);
              const at = 4 * (y * canvas.width + x);
              bytes.push(String.fromCharCode(all.data[at], all.data[at + 1], all.data[at + 2]));
            }
            return btoa(bytes.join(''));
            """,
            panel,
            rows,
            columns,
        )
        raw = np.frombuffer(base64.b64decode(text), dtype=np.uint8)
        return raw.reshape(rows, columns, 3)


def faults(page: Page) -> Any:
    """What axe-core finds by the WCAG 2.1 A and AA rules and its own, folded parts opened."""
    page.script("document.querySelectorAll('details').forEach((d) => { d.open = true; })")
    page.script(AXE.read_text())
    return page.browser.execute_async_script(
        "const done = arguments[arguments.length - 1];"
        "const rules = ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'best-practice'];"
        "axe.run(document, {runOnly: rules})"
        ".then((r) => done(r.violations.map((v) => [v.id, v.impact, v.nodes.length, "
        "v.nodes[0].html.slice(0, 160)])))"
    )
