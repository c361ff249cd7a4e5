"""The OpenAPI document is valid, and describes every call that there is and no other."""

import json
import re

from django.urls import get_resolver
from openapi_spec_validator import OpenAPIV31SpecValidator

from labmon.api.openapi import document
from tests.labmon.api.conftest import Caller

MOUNTED_BEFORE_DJANGO = {("post", "/api/v1/readings")}


def described():
    return {(method, path) for path, operations in document()["paths"].items() for method in operations}


def routed(resolver, before="/"):
    for one in resolver.url_patterns:
        address = before + re.sub(r"<(?:\w+:)?(\w+)>", r"{\1}", re.sub(r"<row:\w+>", "{id}", str(one.pattern)))
        if hasattr(one, "url_patterns"):
            yield from routed(one, address)
        elif hasattr(one.callback, "methods"):
            yield from ((method.lower(), address) for method in one.callback.methods)
        elif address.startswith(("/api/", "/health/")) and address != "/health/":  # the lab's health page, for people
            assert one.name == "unknown", f"{address} was not made by by_method or open_to_all"


def test_the_document_is_valid_openapi():
    OpenAPIV31SpecValidator(document()).validate()


def test_it_is_served_to_all_as_it_is():
    assert json.loads(Caller().get("/api/v1/openapi.json").content) == json.loads(json.dumps(document()))


def test_every_route_and_method_is_described_and_the_reverse():
    assert set(routed(get_resolver())) | MOUNTED_BEFORE_DJANGO == described()


def test_every_parameter_in_a_path_is_described():
    for path, operations in document()["paths"].items():
        for operation in operations.values():
            said = {one["name"] for one in operation.get("parameters", ()) if one["in"] == "path"}
            assert said == set(re.findall(r"{(\w+)}", path))
