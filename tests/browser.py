"""A real headless browser for tests of pages; without one they are skipped."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

PHONE, DESK = (360, 760), (1280, 900)


def open_browser():
    """Chromium under its own driver, or a skip with the reason."""
    webdriver = pytest.importorskip("selenium.webdriver")
    binary, driver = shutil.which("chromium"), shutil.which("chromedriver")
    if not (binary and driver):
        pytest.skip("chromium and chromedriver are not installed")
    options = webdriver.ChromeOptions()
    options.binary_location = binary
    for word in ("--headless=new", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--disable-dev-shm-usage"):
        options.add_argument(word)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    return webdriver.Chrome(options=options, service=webdriver.ChromeService(driver))


class Browser:
    """What tests ask of a page."""

    def __init__(self) -> None:
        self.driver = open_browser()
        self.driver.execute_cdp_cmd("Network.enable", {})

    def show(self, page: Path | str, size=PHONE, scheme="light", media="") -> None:
        """Open a file or an address at a size, in a colour scheme, on screen or paper."""
        self.width = size[0]
        self.driver.execute_cdp_cmd(
            "Emulation.setDeviceMetricsOverride",
            {"width": size[0], "height": size[1], "deviceScaleFactor": 1, "mobile": size == PHONE},
        )
        features = [{"name": "prefers-color-scheme", "value": scheme}]
        self.driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": media, "features": features})
        for kind in ("browser", "performance"):
            self.driver.get_log(kind)
        self.driver.get(page.resolve().as_uri() if isinstance(page, Path) else page)

    def asked_for(self) -> list[str]:
        """Addresses that the page made the browser ask for, itself left out."""
        import json

        sent = [json.loads(entry["message"])["message"] for entry in self.driver.get_log("performance")]
        urls = [each["params"]["request"]["url"] for each in sent if each["method"] == "Network.requestWillBeSent"]
        return [url for url in urls if url != self.driver.current_url and not url.startswith("data:")]

    def complaints(self) -> list[str]:
        """What the console says."""
        return [entry["message"] for entry in self.driver.get_log("browser")]

    def too_wide(self) -> int:
        """Pixels by which the page is wider than the screen (a telephone's window grows with it)."""
        return self.js("return document.documentElement.scrollWidth") - self.width

    def js(self, script, *given):
        """Run a line of script in the page."""
        return self.driver.execute_script(script, *given)

    def violations(self) -> list[str]:
        """What the accessibility checker finds, best practices included."""
        from axe_core_python.selenium import Axe

        found = Axe().run(self.driver)["violations"]
        return [f"{each['id']}: {each['nodes'][0]['html'][:200]}" for each in found]


@pytest.fixture(scope="module")
def browser():
    """One browser for all tests of a file."""
    one = Browser()
    yield one
    one.driver.quit()
