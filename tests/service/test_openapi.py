"""Generated requests over the whole API: none may end in a 5xx."""

import os

import pytest
import schemathesis
from hypothesis import HealthCheck, Phase, given, settings
from schemathesis.checks import not_a_server_error

from bemescape.service.settings import Settings
from service.helpers import ball, ply_bytes, upload
from service.in_process import Live

pytestmark = pytest.mark.slow
EXAMPLES = int(os.environ.get("BEMESCAPE_API_EXAMPLES", "15"))


@pytest.fixture(scope="module")
def generated(tmp_path_factory):
    server = Live(Settings(data=tmp_path_factory.mktemp("generated"), second_opinion=False), draws=False)
    with server.client() as client:
        upload(client, ply_bytes(*ball()))
    yield server
    server.close()


def test_no_generated_request_ends_in_a_fault_of_ours(generated):
    schema = schemathesis.openapi.from_url(f"{generated.url}/api/openapi.json")
    tried = 0
    for found in schema.get_all_operations():
        operation = found.ok()
        if operation.path.endswith("/events"):
            continue  # a stream that may stay open; its refusals are tested by hand

        @settings(
            max_examples=EXAMPLES,
            deadline=None,
            phases=[Phase.explicit, Phase.generate],
            suppress_health_check=list(HealthCheck),
            database=None,
            derandomize=True,
        )
        @given(case=operation.as_strategy())
        def run(case):
            nonlocal tried
            tried += 1
            case.call_and_validate(base_url=generated.url, checks=[not_a_server_error], timeout=60)

        run()
    assert tried > 100
