"""The logbook on the pages."""

import io
import json
import re
from datetime import timedelta

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.utils import timezone
from PIL import Image

from labmon.logbook.actions import edit_entry, write_entry
from labmon.logbook.models import ConfigurationChange, LogEntry, LogTag
from labmon.people.models import Role
from tests.factories import make_experiment, make_person, make_run, make_station, make_tap

pytestmark = pytest.mark.django_db


@pytest.fixture
def ann():
    return make_person(Role.RESEARCHER, username="ann")


@pytest.fixture
def bench():
    station = make_station("n2", owner=make_person(Role.OWNER, username="asha"))
    make_tap(station, "eom-in")
    return station


def words(answer):
    text = re.sub(r"<(script|style|svg).*?</\1>", " ", answer.content.decode(), flags=re.S)
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text))


def write(bench, by, **fields):
    return write_entry(bench, **{"by": by, "at": timezone.now() - timedelta(hours=1), "text": "spooled anew"} | fields)


def test_one_tap_and_the_question(client, ann, bench):
    client.force_login(ann)
    assert "I touched the fibre" in words(client.get("/stations/n2/"))
    asked = client.post("/stations/n2/log/touched/", follow=True)
    entry = LogEntry.objects.get()
    assert (entry.tag, entry.by, entry.was_change) == ("touched", ann, None)
    assert "Is n2 still as it was?" in words(asked) and not ConfigurationChange.objects.exists()
    assert "Say whether the bench changed" in words(client.get("/stations/n2/log/"))
    answer = client.post(f"/stations/n2/log/{entry.pk}/change/", {"kind": "fibre"}, follow=True)
    assert "Noted as a configuration change" in words(answer) and ConfigurationChange.objects.get().kind == "fibre"
    assert "n2 was last changed at" in words(client.get("/stations/n2/log/"))
    client.post(f"/stations/n2/log/{entry.pk}/change/", {"kind": ""})
    entry.refresh_from_db()
    assert entry.was_change is False and ConfigurationChange.objects.get().withdrawn_at


def test_an_empty_logbook_says_how_to_begin(client, ann, bench):
    client.force_login(ann)
    said = words(client.get("/stations/n2/log/"))
    assert "Nobody has written in the logbook of n2 yet." in said and "Write the first one below" in said


def test_nothing_typed_is_lost(client, ann, bench):
    client.force_login(ann)
    typed = {"text": "long words", "tag": "repair", "change": "joint", "at": "2031-13-01 00:00:00", "tap": "eom-in"}
    answer = client.post("/stations/n2/log/", typed)
    assert answer.status_code == 422 and "long words" in answer.content.decode() and not LogEntry.objects.exists()
    answer = client.post("/stations/n2/log/", typed | {"at": "2500-01-01 00:00:00"})
    assert answer.status_code == 422 and "The time lies ahead." in words(answer)
    assert 'value="2500-01-01 00:00:00"' in answer.content.decode()


def png() -> bytes:
    out = io.BytesIO()
    Image.new("RGB", (8, 8)).save(out, "PNG")
    return out.getvalue()


def test_a_picture_is_stored_and_served_to_those_who_see_the_bench(client, ann, bench, settings, tmp_path):
    settings.MEDIA_ROOT = tmp_path
    client.force_login(ann)
    upload = SimpleUploadedFile("<script>.png", png(), "text/html")
    client.post("/stations/n2/log/", {"text": "", "tag": "note", "at": "2026-01-01 00:00:00", "picture": upload})
    entry = LogEntry.objects.get()
    address = f"/stations/n2/log/{entry.pk}/picture/"
    answer = client.get(address)
    assert Image.open(io.BytesIO(b"".join([answer.content]))).size == (8, 8)
    assert answer["Content-Type"] == "image/png" and answer["X-Content-Type-Options"] == "nosniff"
    assert "sandbox" in answer["Content-Security-Policy"] and "script" not in answer["Content-Disposition"]
    assert "no-store" in answer["Cache-Control"]
    guest = make_person(Role.GUEST)
    client.force_login(guest)
    assert client.get(address).status_code == 404
    guest.guest_stations.add(bench)
    assert client.get(address).status_code == 200
    client.logout()
    assert client.get(address).status_code == 302
    client.force_login(ann)
    refused = client.post("/stations/n2/log/", {"text": "keep me", "tag": "note", "at": "2026-01-01 00:00:00",
                                                "picture": SimpleUploadedFile("a.png", b"<svg/>", "image/png")})
    assert refused.status_code == 422 and "cannot be read as a picture" in words(refused)
    assert "keep me" in refused.content.decode()


def test_an_entry_without_picture_has_none_to_serve(client, ann, bench):
    entry = write(bench, ann)
    client.force_login(ann)
    assert client.get(f"/stations/n2/log/{entry.pk}/picture/").status_code == 404


def test_the_old_words_stay_on_the_page(client, ann, bench):
    entry = write(bench, ann)
    client.force_login(ann)
    answer = client.post(f"/stations/n2/log/{entry.pk}/", {"text": "re-spooled", "tag": "repair", "at": "2026-01-01 00:00:00",
                                                           "until_at": ""}, follow=True)
    said = words(answer)
    assert "re-spooled" in said and "How it read before" in said and "spooled anew" in said


def test_struck_out_is_still_read_but_not_drawn(client, ann, bench):
    entry = write(bench, ann)
    client.force_login(ann)
    client.post(f"/stations/n2/log/{entry.pk}/strike/")
    assert "struck out" in words(client.get("/stations/n2/log/"))
    assert "spooled anew" not in words(client.get("/stations/n2/"))


def test_plot_and_list_show_the_same_marks(client, ann, bench):
    write(bench, ann, tag=LogTag.REPAIR, change="joint")
    client.force_login(ann)
    now = timezone.now()
    span = f"{(now - timedelta(days=1)).strftime('%Y-%m-%dT%H:%M:%SZ')}/{now.strftime('%Y-%m-%dT%H:%M:%SZ')}"
    drawn = json.loads(client.get("/stations/n2/taps/eom-in/history.json", {"quantity": "er_db", "span": span}).content)["marks"]
    assert [(one["word"], one["is_change"]) for one in drawn] == [("changed: connector or splice", True)]
    page = client.get("/stations/n2/")
    assert "changed: connector or splice" in words(page) and f'href="{drawn[0]["href"]}"' in page.content.decode()


def test_a_guest_reads_without_names_and_writes_nothing(client, ann, bench):
    entry = write(bench, ann)
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(bench)
    client.force_login(guest)
    said = words(client.get("/stations/n2/log/"))
    assert "by a researcher" in said and "spooled anew" in said and " ann" not in said
    assert "Write an entry" not in said and "I touched the fibre" not in words(client.get("/stations/n2/"))
    own = f"/stations/n2/log/{entry.pk}/"
    posts = ["/stations/n2/log/", "/stations/n2/log/touched/", own, f"{own}change/", f"{own}strike/"]
    typed = {"text": "x", "tag": "note", "at": "2026-01-01 00:00:00"}
    assert [client.post(one, typed).status_code for one in posts] == [403] * 5
    assert LogEntry.objects.count() == 1


def queries(client, address):
    with CaptureQueriesContext(connection) as seen:
        assert client.get(address).status_code == 200
    return len(seen)


def test_the_log_page_costs_the_same_for_more(client, ann, bench):
    client.force_login(ann)
    for _ in range(3):
        write(bench, ann)
    few = queries(client, "/stations/n2/log/")
    for number in range(40):
        edit_entry(write(bench, ann), by=ann, at=timezone.now(), until_at=None, text=f"edited {number}", tag=LogTag.NOTE)
    assert queries(client, "/stations/n2/log/") == few


def test_an_experiments_page_has_what_was_written_about_its_benches(client, ann, bench):
    experiment = make_experiment(bench.taps.get(), name="EOM input")
    write(bench, ann)
    write(make_station("far"), ann, text="elsewhere")
    client.force_login(ann)
    address = f"/experiments/{experiment.pk}/"
    said = words(client.get(address))
    assert "In the logbooks of its benches" in said and "spooled anew" in said and "elsewhere" not in said
    few = queries(client, address)
    for _ in range(20):
        write(bench, ann)
    assert queries(client, address) == few


def wish_about(run):
    at = timezone.now() - timedelta(minutes=5)
    return {"text": "lens slipped", "tag": "note", "at": f"{at:%Y-%m-%d %H:%M:%S}", "run": run.pk}


def test_written_about_a_run_and_read_on_its_page(client, ann, bench):
    client.force_login(ann)
    run = make_run(make_experiment(bench.taps.get()), timezone.now() - timedelta(hours=2), 3600.0, name="night of the long fibre")
    page = client.get(f"/runs/{run.pk}/")
    assert "Nothing is written about this run or its time." in words(page)
    address = f"/stations/n2/log/?run={run.pk}"
    assert address in page.content.decode()
    assert "About the run night of the long fibre" in words(client.get(address))
    client.post(address, wish_about(run))
    assert LogEntry.objects.get().run == run
    assert "lens slipped" in words(client.get(f"/runs/{run.pk}/"))
    assert "run night of the long fibre" in words(client.get("/stations/n2/log/"))


def test_a_run_of_another_bench_is_refused_and_the_words_stay(client, ann, bench):
    client.force_login(ann)
    other = make_run(make_experiment(make_tap(make_station("n3"))), timezone.now() - timedelta(hours=2), 3600.0)
    answer = client.post("/stations/n2/log/", wish_about(other))
    assert answer.status_code == 422 and "does not run on n2" in words(answer) and "lens slipped" in words(answer)
    assert client.get("/stations/n2/log/?run=99999").status_code == 404
