"""A JupyterLab server and one headless Chromium for the whole run. Without them the tests are skipped, unless
BRANCHLAB_REQUIRE_BROWSER=1 forbids it."""

import os

import pytest

from tests.browser.lab import CHROMIUM_FLAGS, Lab, Server, chromium


def unavailable(why: str) -> None:
    """Skip, or fail where browser tests are required."""
    if os.environ.get("BRANCHLAB_REQUIRE_BROWSER") == "1":
        pytest.fail(why)
    pytest.skip(why)


@pytest.fixture(scope="session")
def lab_server(tmp_path_factory):
    server = Server(tmp_path_factory.mktemp("lab"))
    server.start()
    yield server
    server.stop()


@pytest.fixture(scope="session")
def browser():
    if chromium() is None:
        unavailable("there is no Chromium on this machine (Debian: apt-get install chromium)")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as tool:
        found = tool.chromium.launch(executable_path=chromium(), headless=True, args=CHROMIUM_FLAGS)
        yield found
        found.close()


@pytest.fixture
def lab(lab_server, browser):
    page = Lab(lab_server, browser)
    yield page
    problems = list(page.problems)  # not what the page says when its kernel is taken away
    page.close()
    assert problems == []
