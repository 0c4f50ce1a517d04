"""The endpoints' tests use the real store where replies are in play, and a FHIR server where a patient is fetched."""

import pytest
from databases import opened, store, store_url
from fhir_server_on_loopback import FhirServer, serve
from pytest_httpserver import HTTPServer

__all__ = ["opened", "store", "store_url"]


@pytest.fixture
def server(httpserver: HTTPServer) -> FhirServer:
    return serve(httpserver)
