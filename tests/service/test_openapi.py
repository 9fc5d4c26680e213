"""Generated requests over the whole API: none may end in a 5xx."""

import os
import time
from collections import Counter

import pytest
import schemathesis
from hypothesis import HealthCheck, Phase, given, seed, settings
from schemathesis.checks import not_a_server_error

from bemescape.service.settings import Settings
from service.helpers import ball, ply_bytes, tell, upload
from service.in_process import Live

pytestmark = pytest.mark.slow
EXAMPLES = 15
#: 300 for the five minutes of the claim.
SECONDS = float(os.environ.get("BEMESCAPE_API_SECONDS", "0"))


@pytest.fixture(scope="module")
def generated(tmp_path_factory):
    server = Live(Settings(data=tmp_path_factory.mktemp("generated"), second_opinion=False), draws=False)
    with server.client() as client:
        upload(client, ply_bytes(*ball()))
    yield server
    server.close()


def answers(url, operation, number):
    """Statuses of the answers to generated requests, others for each number."""
    found = []

    @seed(number)
    @settings(
        max_examples=EXAMPLES,
        deadline=None,
        phases=[Phase.explicit, Phase.generate],
        suppress_health_check=list(HealthCheck),
        database=None,
    )
    @given(case=operation.as_strategy())
    def run(case):
        found.append(case.call_and_validate(base_url=url, checks=[not_a_server_error], timeout=60).status_code)

    run()
    return found


def test_no_generated_request_ends_in_a_fault_of_ours(generated):
    """Rounds over every operation, each round with other requests, until the time is over; one round at least."""
    schema = schemathesis.openapi.from_url(f"{generated.url}/api/openapi.json")
    # A stream may stay open; its refusals are tested by hand.
    operations = [found.ok() for found in schema.get_all_operations()]
    operations = [operation for operation in operations if not operation.path.endswith("/events")]
    tried = Counter()
    statuses = Counter()
    ends = time.monotonic() + SECONDS
    rounds = 0
    while rounds == 0 or time.monotonic() < ends:
        for operation in operations:
            for status in answers(generated.url, operation, rounds):
                tried[operation.label] += 1
                statuses[status] += 1
        rounds += 1
    tell({"rounds": rounds, "requests": sum(tried.values()), "statuses": dict(sorted(statuses.items()))})
    assert set(tried) == {operation.label for operation in operations}
    assert sum(tried.values()) > 100
    # The service still answers as it should.
    with generated.client() as client:
        assert client.get("/api/surfaces").status_code == 200
    assert generated.app.state.service.store.integrity() == "ok"
