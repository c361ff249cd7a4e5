"""Answers of the API: strict JSON, missing values null."""

from typing import Any

import msgspec
from django.http import HttpResponse

JSON_TYPE = "application/json"
_encoder = msgspec.json.Encoder()


def json_answer(said: Any, *, status: int = 200) -> HttpResponse:
    """``said`` as JSON; a number that is not finite becomes null (msgspec writes no NaN)."""
    answer = HttpResponse(_encoder.encode(said), status=status, content_type=JSON_TYPE)
    answer.headers["Cache-Control"] = "no-store"
    return answer
