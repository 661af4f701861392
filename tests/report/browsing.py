"""The open report page and a hand at it: keys, mouse, what the browser complains of and asks for.

Drives Debian's chromium headless through chromedriver with `selenium` (a test dependency); no driver is looked for or
downloaded, since its place is given. `start` skips the test where either program is absent.
"""

from __future__ import annotations

import json
import shutil
import time
from pathlib import Path
from typing import Any

import pytest

FLAGS = ("headless=new", "no-sandbox", "disable-gpu", "no-first-run", "disable-background-networking",
         "disable-component-update", "disable-sync", "mute-audio")


def start(profile: Path, downloads: Path) -> Any:
    """A fresh Chromium that logs every address it asks for and saves into `downloads`."""
    chromium, chromedriver = shutil.which("chromium"), shutil.which("chromedriver")
    if chromium is None or chromedriver is None:
        pytest.skip("needs Debian's chromium and chromium-driver")
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = chromium
    for flag in (*FLAGS, f"user-data-dir={profile}"):
        options.add_argument(f"--{flag}")
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    browser = webdriver.Chrome(options=options, service=Service(chromedriver))
    browser.execute_cdp_cmd("Browser.setDownloadBehavior", {"behavior": "allow", "downloadPath": str(downloads)})
    return browser


class Page:
    """The open page and a hand at it."""

    def __init__(self, driver: Any) -> None:
        self.driver = driver

    def open(
        self, path: Path, *, width: int = 1400, height: int = 900, scale: float = 1, scheme: str = "light"
    ) -> None:
        """Open without what an earlier test has left."""
        self.driver.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", {
            "width": width, "height": height, "deviceScaleFactor": scale, "mobile": False})
        self.driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {
            "features": [{"name": "prefers-color-scheme", "value": scheme}]})
        self.driver.get(path.as_uri())
        self.script("localStorage.clear()")
        self.driver.get_log("performance")
        self.driver.get_log("browser")
        self.driver.refresh()

    def script(self, text: str, *values: Any) -> Any:
        return self.driver.execute_script(text, *values)

    def find(self, selector: str) -> Any:
        return self.driver.find_element("css selector", selector)

    def text(self, selector: str) -> str:
        return str(self.script("return document.querySelector(arguments[0]).textContent", selector))

    def value(self, selector: str) -> str:
        return str(self.script("return document.querySelector(arguments[0]).value", selector))

    def keys(self, *keys: str, at: str = "#score", shift: bool = False, control: bool = False) -> None:
        """Press keys where the focus is put first."""
        from selenium.webdriver.common.keys import Keys

        self.script("document.querySelector(arguments[0]).focus()", at)
        actions = self.actions()
        held = [key for key, wanted in ((Keys.SHIFT, shift), (Keys.CONTROL, control)) if wanted]
        for key in held:
            actions.key_down(key)
        for key in keys:
            actions.send_keys(getattr(Keys, key) if len(key) > 1 else key)
        for key in held:
            actions.key_up(key)
        actions.perform()
        self.drawn()

    def drag(self, start: tuple[float, float], end: tuple[float, float] | None = None) -> None:
        """Click at a point of the score, or drag to another; from its upper left corner."""
        box = self.script("const b = document.getElementById('score').getBoundingClientRect(); return [b.x, b.y]")
        actions = self.actions().w3c_actions
        pointer = actions.pointer_action
        pointer.move_to_location(box[0] + start[0], box[1] + start[1])
        pointer.pointer_down()
        for part in (0.5, 1.0) if end else ():
            pointer.move_to_location(*(round(b + s + part * (e - s)) for b, s, e in zip(box, start, end, strict=True)))
        pointer.pointer_up()
        actions.perform()
        self.drawn()

    def drawn(self) -> None:
        """Wait until what was asked for is on the page: it draws with the next frame, and that one is over then."""
        self.driver.execute_async_script(
            "const done = arguments[0]; requestAnimationFrame(() => requestAnimationFrame(() => done()))")

    def actions(self) -> Any:
        from selenium.webdriver.common.action_chains import ActionChains

        return ActionChains(self.driver, duration=20)

    def wait(self, script: str, *, seconds: float = 30.0) -> Any:
        """Until a script's answer is true."""
        end = time.monotonic() + seconds
        while not (answer := self.script(script)):
            assert time.monotonic() < end, f"never true: {script}"
            time.sleep(0.02)
        return answer

    def complaints(self) -> list[str]:
        return [entry["message"] for entry in self.driver.get_log("browser")]

    def requests(self) -> list[str]:
        """Every address asked for since the page was opened or this was called."""
        events = [json.loads(entry["message"])["message"] for entry in self.driver.get_log("performance")]
        return [event["params"]["request"]["url"] for event in events if event["method"] == "Network.requestWillBeSent"]

    def corrections(self) -> list[str]:
        """The list of corrections as it stands there."""
        entries = self.script("return [...document.querySelectorAll('#corrections .entry')].map((e) => e.textContent)")
        return list(entries)

    def save(self, downloads: Path) -> Path:
        """Press Save and wait for the file."""
        for old in downloads.glob("corrections*.csv"):
            old.unlink()
        self.find("#save").click()
        end = time.monotonic() + 30
        while not (found := list(downloads.glob("corrections*.csv"))):
            assert time.monotonic() < end, "no corrections.csv was saved"
            time.sleep(0.02)
        return found[0]
