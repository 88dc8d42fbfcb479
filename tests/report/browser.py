"""A headless Chromium without any network, and what to ask of it."""

import shutil
import subprocess
import time
from pathlib import Path

import pytest

#: Text of everything on the page, in the views' shadow trees too, that matches a selector.
_DEEP_TEXT = """
const found = [];
(function walk(root) {
  for (const node of root.querySelectorAll("*")) {
    if (node.matches(arguments_selector)) found.push((node.shadowRoot ?? node).textContent);
    if (node.shadowRoot) walk(node.shadowRoot);
  }
})(document);
return found;
""".replace("arguments_selector", "selector")


class Browser:
    """One tab; `open` waits until the views are linked."""

    def __init__(self):
        from selenium import webdriver

        options = webdriver.ChromeOptions()
        for argument in (
            "--headless=new", "--no-sandbox", "--disable-dev-shm-usage", "--window-size=1500,1900", "--disable-gpu",
            "--host-resolver-rules=MAP * ~NOTFOUND",
        ):  # fmt: skip
            options.add_argument(argument)
        options.binary_location = shutil.which("chromium")
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        service = webdriver.ChromeService(shutil.which("chromedriver"), log_output=subprocess.DEVNULL)
        self.driver = webdriver.Chrome(options=options, service=service)
        self.driver.set_script_timeout(60)

    def open(self, page):
        self.driver.get(Path(page).resolve().as_uri())
        self.wait(lambda: self.run("return document.documentElement.dataset.ready") == "yes")

    def run(self, script, *arguments):
        return self.driver.execute_script(script, *arguments)

    def wait(self, condition, seconds=30):
        until = time.monotonic() + seconds
        while time.monotonic() < until:
            if condition():
                return
            time.sleep(0.05)
        raise AssertionError(f"nothing came of it within {seconds} s; the console says {self.complaints()}")

    def complaints(self):
        return [entry for entry in self.driver.get_log("browser") if entry["level"] in ("SEVERE", "WARNING")]

    def deep_text(self, selector):
        return self.run(f"const selector = {selector!r};" + _DEEP_TEXT)

    def close(self):
        self.driver.quit()


def make_browser():
    pytest.importorskip("selenium")
    for program in ("chromium", "chromedriver"):
        if shutil.which(program) is None:
            pytest.skip(
                f"no {program} here; the page is tested in a real browser (apt-get install chromium chromium-driver)"
            )
    return Browser()
