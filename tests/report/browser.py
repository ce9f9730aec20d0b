"""A real headless Chromium for the tests of the page, and axe-core to judge it.

Debian has the browser in `chromium` and `chromium-driver`; selenium is in the extra `test`; the
version of axe-core is pinned in `package.json` beside this file and comes by
``npm install --prefix tests/report``. Without them the tests are skipped and say so.
"""

from __future__ import annotations

import contextlib
import json
import shutil
from pathlib import Path

import pytest

AXE = Path(__file__).with_name("node_modules") / "axe-core" / "axe.min.js"
FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
)  # fmt: skip


def skip_without_browser():
    missing = [name for name in ("chromium", "chromedriver") if shutil.which(name) is None]
    with contextlib.suppress(ImportError):
        import selenium  # noqa: F401

        if not missing:
            return
        pytest.skip(f"THE PAGE IS NOT TRIED IN A BROWSER: {' and '.join(missing)} not installed")
    pytest.skip("THE PAGE IS NOT TRIED IN A BROWSER: selenium is not installed")


def skip_without_axe():
    if not AXE.exists():
        pytest.skip("ACCESSIBILITY IS NOT JUDGED: type npm install --prefix tests/report")


@contextlib.contextmanager
def chromium(profile):
    """Open a browser with a profile of its own; quit it, and it alone, afterwards."""
    from selenium import webdriver

    options = webdriver.ChromeOptions()
    for flag in (*FLAGS, f"--user-data-dir={profile}"):
        options.add_argument(flag)
    options.binary_location = shutil.which("chromium")
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    service = webdriver.ChromeService(shutil.which("chromedriver"))
    driver = webdriver.Chrome(options=options, service=service)
    driver.set_page_load_timeout(60)
    driver.set_script_timeout(60)
    try:
        yield driver
    finally:
        driver.quit()


def open_page(driver, path, *, width=1000, dark=False):
    """Open a file at a width; return what the console said and what was asked of the net."""
    for kind in ("browser", "performance"):
        driver.get_log(kind)
    mobile = width < 500
    metrics = {"width": width, "height": 800, "deviceScaleFactor": 1, "mobile": mobile}
    driver.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", metrics)
    scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
    driver.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": [scheme]})
    driver.get(path.as_uri())
    return driver.get_log("browser"), requests(driver, path.as_uri())


def requests(driver, page):
    """What a page asked for; a browser's own first tab may still be loading beside it."""
    events = [json.loads(entry["message"])["message"] for entry in driver.get_log("performance")]
    return [
        event["params"]["request"]["url"]
        for event in events
        if event["method"] == "Network.requestWillBeSent" and event["params"]["documentURL"] == page
    ]


def violations(driver):
    """What axe-core finds wrong, one line each."""
    driver.execute_script(AXE.read_text(encoding="utf-8"))
    found = driver.execute_async_script(
        "const done = arguments[0]; axe.run(document).then(r => done(r.violations.map(v => "
        "v.id + ': ' + v.help + ' at ' + v.nodes.slice(0, 3).map(n => n.html.slice(0, 120))"
        ".join(' | '))), e => done(['axe failed: ' + e]));"
    )
    return list(found)
