"""Every example of docs/api.md runs."""

import io
import json
import re
import shlex
from pathlib import Path

from django.core.management import call_command
from django.test import Client

from tests.labmon.api.conftest import holds_to_document
from tests.labmon.api.test_alarms import make_alarm

PAGE = Path(__file__).resolve().parents[3] / "docs" / "api.md"


def examples():
    for block in re.findall(r"```sh\n(.*?)```", PAGE.read_text(), re.DOTALL):
        yield from filter(None, block.splitlines())


def curl(words, key, numbers):
    """The answer to a curl command line of the page: -X, -H, -d and an address."""
    method, headers, body, address = "GET", {}, "", ""
    rest = iter(words)
    for word in rest:
        match word:
            case "-X":
                method = next(rest)
            case "-H":
                name, _, value = next(rest).partition(": ")
                headers[name.lower()] = value.replace("$KEY", key)
            case "-d":
                body = next(rest)
            case "-o":
                next(rest)
            case _:
                address = word.removeprefix("$LAB")
    for holder, number in numbers.items():
        address = address.replace(holder, holder.replace("1", str(number)))
    answer = Client().generic(method, address, body, content_type=headers.pop("content-type", "text/plain"), headers=headers)
    if not answer.streaming:
        holds_to_document(answer, method.lower(), address)
    return answer


def test_every_example_runs(read_lab):
    alarm = make_alarm(read_lab.tap, returned_at=None)
    numbers = {"/experiments/1/": read_lab.experiment.pk, "/alarms/1/": alarm.pk}
    ran = 0
    for line in examples():
        words = shlex.split(line)
        if words[0] == "curl":
            answer = curl(words[1:], read_lab.owner.key, numbers)
            assert answer.status_code in {200, 201}, line
            assert b"".join(answer.streaming_content) if answer.streaming else answer.content
        else:
            assert words[:2] == ["python", "manage.py"], line
            out = io.StringIO()
            call_command(*words[2:], stdout=out)
            json.loads(out.getvalue())
        ran += 1
    assert ran >= 15
