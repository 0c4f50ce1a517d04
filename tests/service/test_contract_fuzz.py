"""Requests nobody would write, made from the published document: no 5xx, no answer that is not in it."""

from __future__ import annotations

import os

import schemathesis
from hypothesis import settings
from in_process import parts
from schemathesis.checks import not_a_server_error
from schemathesis.specs.openapi.checks import (
    content_type_conformance,
    response_schema_conformance,
    status_code_conformance,
)

from cds.service.app import create_app

schema = schemathesis.openapi.from_wsgi("/openapi.json", create_app(parts()))
EXAMPLES = 400 if os.environ.get("GDMT_CARDS_EXAMPLES") == "deep" else 15


@schema.parametrize()
@settings(max_examples=EXAMPLES, deadline=None)
def test_no_request_gets_an_answer_that_is_not_in_the_document(case):
    response = case.call()
    case.validate_response(
        response,
        checks=[
            not_a_server_error,
            status_code_conformance,
            content_type_conformance,
            response_schema_conformance,
        ],
    )
