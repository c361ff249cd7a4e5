"""The notebook client before the real API, in this process; every call is held against the served OpenAPI document."""

import http.client
import io
from urllib.parse import parse_qs, urlsplit

import pytest
from django.test import Client
from labmon_notebook.door import Door
from labmon_notebook.lab import Lab

from tests.labmon.api.conftest import holds_to_document, lab, read_lab  # noqa: F401  the lab of the API's own tests


class NearAnswer(io.BytesIO):
    """An answer as http.client gives it."""

    def __init__(self, status, headers, body):
        super().__init__(body)
        self.status, self.headers = status, headers


class NearConnection:
    """A connection that ends at Django's test client."""

    def __init__(self, door):
        self.door = door

    def request(self, method, target, headers):
        self.door.asked.append((method.lower(), urlsplit(target).path, parse_qs(urlsplit(target).query)))
        fault = self.door.faults.pop(0) if self.door.faults else None
        if isinstance(fault, Exception):
            raise fault
        if fault is not None:
            self.answer = NearAnswer(*fault)
            return
        got = Client().generic(method, target, headers={name.lower(): value for name, value in headers.items()})
        if not got.streaming:
            holds_to_document(got, method.lower(), urlsplit(target).path)
        body = b"".join(got.streaming_content) if got.streaming else got.content
        self.answer = NearAnswer(got.status_code, http.client.HTTPMessage(), body)
        for name, value in got.headers.items():
            self.answer.headers[name] = value

    def getresponse(self):
        return self.answer

    def close(self):
        pass


class NearDoor(Door):
    """Asks in this process; ``asked`` is what it asked, ``faults`` what becomes of the next calls, ``waits`` its pauses."""

    def __init__(self, key):
        self.asked, self.faults, self.waits = [], [], []
        super().__init__("http://labmon.example:8000", key, wait=self.waits.append)

    def _connection(self):
        return NearConnection(self)


@pytest.fixture
def near(read_lab):  # noqa: F811
    """The researcher's notebook, and the door it asks through."""
    return Lab("", door=NearDoor(read_lab.researcher.key))


def asked(notebook):
    return notebook._door.asked
