"""Chromium, a desk to point it at, and an eye on what it asks of the network.

The tests are skipped where there is no Chromium, except in continuous integration (``CI`` set), where they must run.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from urllib.parse import urlparse

import pytest
from desk_driver import SIZE, DeskProcess, Page

SPECTRA = Path(__file__).parents[2] / "demo_spectra"
#: Enough of the demonstration's spectra for a short night, of several formats.
NIGHT = ("th17_05.csv", "th17_09.fits", "th17_10.ecsv", "th17_12.dat", "th17_15.dat", "th17_03.txt")


def pytest_collection_modifyitems(items):
    for item in items:
        if Path(__file__).parent in Path(item.fspath).parents:
            item.add_marker(pytest.mark.browser)


def _find(*names: str) -> str | None:
    return next((path for name in names if (path := shutil.which(name))), None)


@pytest.fixture(scope="session")
def chromium(tmp_path_factory) -> Iterator:
    """A headless Chromium with an empty profile, 1280 x 800."""
    browser = _find("chromium", "chromium-browser", "google-chrome")
    driver = _find("chromedriver")
    if browser is None or driver is None:
        message = "Chromium and its driver are not installed (on Debian: apt-get install chromium chromium-driver)"
        if os.environ.get("CI"):
            pytest.fail(message)
        pytest.skip(message)
    from selenium import webdriver

    options = webdriver.ChromeOptions()
    options.binary_location = browser
    for argument in ("--headless=new", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
                     "--disable-background-networking", "--disable-component-update", "--disable-sync",
                     "--disable-dev-shm-usage", f"--user-data-dir={tmp_path_factory.mktemp('profile')}"):
        options.add_argument(argument)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    found = webdriver.Chrome(options=options, service=webdriver.ChromeService(driver))
    found.set_script_timeout(30)
    found.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", {
        "width": SIZE[0], "height": SIZE[1], "deviceScaleFactor": 1, "mobile": False})
    try:
        yield found
    finally:
        found.quit()


@pytest.fixture(scope="module")
def night(tmp_path_factory) -> Path:
    """A folder with a few spectra, one of them under a name that is HTML."""
    folder = tmp_path_factory.mktemp("night")
    for name in NIGHT:
        shutil.copy(SPECTRA / name, folder)
    shutil.copy(SPECTRA / "th17_09.fits", folder / "<img src=x onerror=document.title='owned'>.fits")
    return folder


@pytest.fixture(scope="module")
def desk(night) -> Iterator[DeskProcess]:
    started = DeskProcess(*sorted(p for p in night.iterdir() if p.suffix != ".jsonl"))
    yield started
    if started.process.poll() is None:
        started.process.kill()
        started.process.communicate()


@pytest.fixture
def page(chromium, desk) -> Iterator[Page]:
    """The desk's page, freshly opened; afterwards: no error on the console, no request beyond the desk."""
    opened = Page(chromium, desk.address)
    yield opened
    assert opened.severe() == []
    assert opened.asked_for() == {urlparse(desk.address).netloc}
