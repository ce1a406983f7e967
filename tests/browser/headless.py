"""A real browser without a window, driven through its own protocol."""

from __future__ import annotations

import base64
import json
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from selenium import webdriver
from selenium.webdriver.chrome.service import Service

CHROMIUM, DRIVER = shutil.which("chromium"), shutil.which("chromedriver")
_OPTIONS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
    "--force-color-profile=srgb",
)


class Browser:
    """A browser with the few things that the tests ask of it."""

    def __init__(self, profile: Path) -> None:
        options = webdriver.ChromeOptions()
        options.binary_location = CHROMIUM or ""
        for option in (*_OPTIONS, f"--user-data-dir={profile}"):
            options.add_argument(option)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        # The driver is named, so that none is looked for in the network.
        self.driver = webdriver.Chrome(options=options, service=Service(DRIVER or ""))
        self.driver.set_page_load_timeout(120)

    def ask(self, command: str, **parameters: object) -> dict:
        """Send a command of the browser's protocol."""
        return self.driver.execute_cdp_cmd(command, parameters)

    def run(self, script: str, *arguments: object) -> object:
        """Run a script in the page and return what it returns."""
        return self.driver.execute_script(script, *arguments)

    def show(self, page: Path, width: int = 1280, height: int = 900, scheme: str = "light") -> None:
        """Open a page in a window of that size and scheme, with all logs empty."""
        self.ask(
            "Emulation.setDeviceMetricsOverride",
            width=width, height=height, deviceScaleFactor=1, mobile=width < 600,
        )  # fmt: skip
        self.ask("Emulation.setTouchEmulationEnabled", enabled=width < 600)
        self.scheme(scheme)
        self.driver.get("about:blank")
        self.log(), self.requests()
        self.driver.get(page.as_uri())

    def scheme(self, name: str) -> None:
        """Prefer light or dark."""
        features = [{"name": "prefers-color-scheme", "value": name}]
        self.ask("Emulation.setEmulatedMedia", media="", features=features)

    def log(self) -> list[str]:
        """What the console has said since it was asked last."""
        return [entry["message"] for entry in self.driver.get_log("browser")]

    def events(self, method: str) -> list[dict]:
        """Parameters of what the browser has told by that name since it was asked last."""
        told = (
            json.loads(item["message"])["message"] for item in self.driver.get_log("performance")
        )
        return [event["params"] for event in told if event["method"] == method]

    def requests(self) -> list[str]:
        """Addresses that were asked for since this was asked last."""
        return [event["request"]["url"] for event in self.events("Network.requestWillBeSent")]

    def paper(self, path: Path) -> Path:
        """Print the page as PDF on A4, or on what the page itself asks for."""
        found = self.ask(
            "Page.printToPDF",
            printBackground=True, preferCSSPageSize=True, paperWidth=210 / 25.4,
            paperHeight=297 / 25.4,
        )  # fmt: skip
        path.write_bytes(base64.b64decode(found["data"]))
        return path

    def picture(self, path: Path) -> Path:
        """Save what the window shows of the whole page, for people to look at."""
        found = self.ask("Page.captureScreenshot", captureBeyondViewport=True)
        path.write_bytes(base64.b64decode(found["data"]))
        return path

    @contextmanager
    def without_scripts(self) -> Iterator[None]:
        """Forbid all scripts of pages inside the block."""
        self.ask("Emulation.setScriptExecutionDisabled", value=True)
        try:
            yield
        finally:
            self.ask("Emulation.setScriptExecutionDisabled", value=False)

    def quit(self) -> None:
        """End the browser."""
        self.driver.quit()
