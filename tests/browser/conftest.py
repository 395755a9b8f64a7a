"""A headless browser from the system's packages that never reaches for the network."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from selenium.webdriver import Chrome, ChromeOptions
from selenium.webdriver.chrome.service import Service

FLAGS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-dev-shm-usage",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-default-apps",
    "--disable-sync",
    "--disable-extensions",
    "--no-first-run",
    "--hide-scrollbars",
    "--force-device-scale-factor=1",
    "--window-size=1240,1100",
)


@pytest.fixture(scope="session")
def browser() -> Iterator[Chrome]:
    """One browser for all tests."""
    options = ChromeOptions()
    options.binary_location = "/usr/bin/chromium"
    for flag in FLAGS:
        options.add_argument(flag)
    driver = Chrome(options=options, service=Service("/usr/bin/chromedriver"))
    driver.set_page_load_timeout(60)
    try:
        yield driver
    finally:
        driver.quit()
