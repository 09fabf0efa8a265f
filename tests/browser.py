"""A headless browser for the tests of the page, where the machine has one."""

from __future__ import annotations

import base64
import json
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--hide-scrollbars",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--disable-dev-shm-usage",
)  # fmt: skip
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
DRIVER = shutil.which("chromedriver")
MISSING = "" if CHROMIUM and DRIVER else "needs chromium and chromedriver, which this machine does not have"


@contextmanager
def started() -> Iterator[Any]:
    """A browser of its own, with nothing of anybody's settings; it is gone afterwards."""
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = CHROMIUM or ""
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        for flag in (*FLAGS, f"--user-data-dir={profile}"):
            options.add_argument(flag)
        driver = webdriver.Chrome(options=options, service=Service(DRIVER))
        try:
            yield driver
        finally:
            driver.quit()


def show(driver: Any, page: Path, width: int = 1280, scheme: str = "light") -> None:
    """Load a page at a width, in light or dark; what was logged before is forgotten."""
    for kind in ("browser", "performance"):
        driver.get_log(kind)
    driver.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride", {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False}
    )
    scheme_asked = [{"name": "prefers-color-scheme", "value": scheme}]
    driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": scheme_asked})
    driver.get(page.as_uri())


def complaints(driver: Any) -> list[str]:
    return [entry["message"] for entry in driver.get_log("browser")]


def asked_for(driver: Any) -> list[str]:
    """Every address that was asked for since the page was loaded; the browser's own empty tab stays inside it."""
    messages = [json.loads(entry["message"])["message"] for entry in driver.get_log("performance")]
    sent = [m["params"] for m in messages if m["method"] == "Network.requestWillBeSent"]
    return [p["request"]["url"] for p in sent if not p["documentURL"].startswith("chrome")]


def printed(driver: Any, width: float, height: float) -> bytes:
    """The page as PDF on paper of that size [inch]."""
    asked = {"paperWidth": width, "paperHeight": height, "printBackground": True}
    return base64.b64decode(driver.execute_cdp_cmd("Page.printToPDF", asked)["data"])


CONTRASTS = """
const rgb = (text) => text.match(/[\\d.]+/g).map(Number);
const linear = (c) => c / 255 <= 0.04045 ? c / 255 / 12.92 : ((c / 255 + 0.055) / 1.055) ** 2.4;
const light = ([r, g, b]) => 0.2126 * linear(r) + 0.7152 * linear(g) + 0.0722 * linear(b);
const behind = (element) => {
  for (let e = element; e; e = e.parentElement) {
    const colour = rgb(getComputedStyle(e).backgroundColor);
    if (colour.length === 3 || colour[3] > 0.99) return colour;
  }
  return [255, 255, 255];
};
const found = [];
const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
for (let node = walker.nextNode(); node; node = walker.nextNode()) {
  const element = node.parentElement;
  if (!node.data.trim() || ["SCRIPT", "STYLE"].includes(element.tagName) || !element.getClientRects().length) continue;
  const [a, b] = [light(rgb(getComputedStyle(element).color)), light(behind(element))];
  found.push([(Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05), node.data.trim().slice(0, 40)]);
}
return found;
"""


def contrasts(driver: Any) -> list[tuple[float, str]]:
    """Contrast of every visible text against what lies behind it.

    By relative luminance (W3C, Web Content Accessibility Guidelines 2.1, definitions "contrast ratio" and "relative
    luminance").
    """
    return [(ratio, text) for ratio, text in driver.execute_script(CONTRASTS)]
