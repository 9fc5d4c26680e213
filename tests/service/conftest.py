import pytest

from bemescape.service.settings import Limits, Settings
from service.helpers import order, upload, wait_until_over
from service.in_process import Live

SMALL = Limits(upload_bytes=2_000_000, faces=50_000, panels=30_000, run_s=600.0, read_s=60.0, queued_runs=6)


@pytest.fixture(scope="session")
def live(tmp_path_factory):
    """A service without tokens."""
    server = Live(Settings(data=tmp_path_factory.mktemp("service"), second_opinion=False, limits=SMALL), draws=False)
    yield server
    server.close()


@pytest.fixture(scope="session")
def client(live):
    with live.client() as client:
        yield client


@pytest.fixture(scope="session")
def surface(client):
    """The ball, uploaded."""
    answer = upload(client)
    assert answer.status_code == 201, answer.text
    return answer.json()


@pytest.fixture(scope="session")
def solved(client, surface):
    """A finished run on the ball."""
    start = {"points": {"middle": [0.0, 0.0, 0.0]}}
    answer = client.post("/api/runs", json=order(surface["id"], name="first", start=start))
    assert answer.status_code == 202, answer.text
    record = wait_until_over(client, answer.json()["id"])
    assert record["state"] == "done", record["reason"]
    return record


@pytest.fixture(scope="session")
def guarded(tmp_path_factory):
    """A service with two tokens."""
    tokens = {"anna": "anna-token-0123456789", "bela": "bela-token-0123456789"}
    server = Live(
        Settings(data=tmp_path_factory.mktemp("guarded"), tokens=tokens, second_opinion=False, limits=SMALL),
        draws=False,
    )
    yield server
    server.close()


@pytest.fixture(scope="session")
def own(tmp_path_factory):
    """A service for the browser: what other tests leave behind would be on its shelf."""
    server = Live(Settings(data=tmp_path_factory.mktemp("browser"), second_opinion=False, slots=1))
    yield server
    server.close()


@pytest.fixture(scope="session")
def playwright():
    from playwright.sync_api import sync_playwright

    with sync_playwright() as started:
        yield started


@pytest.fixture(scope="session")
def browser(playwright):
    from service.browser import SOFTWARE_3D, launched

    with launched(playwright, *SOFTWARE_3D) as browser:
        yield browser


@pytest.fixture
def page(browser, own):
    from service.browser import watched_page

    with watched_page(browser, own) as page:
        yield page
