"""Making, watching and taking a package: page, rights, audit, command."""

import io
import zipfile

import pytest
from django.core.management import CommandError, call_command
from django.test import Client
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.evidence.actions import ask_evidence
from labmon.evidence.files import digest_of, place_of
from labmon.evidence.making import LEFT_AFTER, make_waiting_evidence
from labmon.evidence.models import RunEvidence
from labmon.people.models import Role
from tests.factories import make_person
from tests.labmon.evidence.conftest import HOUR, ledger_of, write_er


@pytest.fixture(autouse=True)
def own_folder(settings, tmp_path):
    settings.MEDIA_ROOT = tmp_path / "files"


def client_of(role):
    client = Client()
    client.force_login(make_person(role))
    return client


def made(run):
    evidence = ask_evidence(ledger_of(run), by=None)
    make_waiting_evidence()
    evidence.refresh_from_db()
    return evidence


def page(client, run):
    return client.get(f"/runs/{run.pk}/evidence/").content.decode()


def test_asked_for_made_and_taken(ten_hours, django_capture_on_commit_callbacks, monkeypatch):
    asked = []
    monkeypatch.setattr("labmon.evidence.tasks.make_evidence_task.delay", lambda: asked.append(1))
    client = client_of(Role.RESEARCHER)
    assert "has no ledger yet" in page(client, ten_hours)
    ledger_of(ten_hours)
    assert "No evidence of Rb scan 14 yet." in page(client, ten_hours)
    with django_capture_on_commit_callbacks(execute=True):
        assert client.post(f"/runs/{ten_hours.pk}/evidence/").status_code == 302
    assert asked == [1] and "is being made" in page(client, ten_hours) and "<progress" in page(client, ten_hours)
    assert client.get(f"/runs/{ten_hours.pk}/evidence/1.zip").status_code == 404
    (pk,) = make_waiting_evidence()
    evidence = RunEvidence.objects.get(pk=pk)
    assert evidence.rows_total == evidence.rows_done == 34_200 and evidence.sha256 == digest_of(place_of(evidence))
    assert "1 package to take" in page(client, ten_hours) and evidence.sha256 in page(client, ten_hours)
    answer = client.get(f"/runs/{ten_hours.pk}/evidence/1.zip")
    content = b"".join(answer.streaming_content)
    assert answer.headers["Content-Disposition"] == f'attachment; filename="labmon-run-{ten_hours.pk}-evidence-1.zip"'
    assert zipfile.ZipFile(io.BytesIO(content)).testzip() is None
    entry = AuditEntry.objects.get(action="export evidence")
    assert entry.after["sha256"] == evidence.sha256 and entry.after["form"] == "package"


def test_the_report_is_read_under_a_policy_that_lets_in_its_style_alone(ten_hours):
    made(ten_hours)
    client = client_of(Role.RESEARCHER)
    answer = client.get(f"/runs/{ten_hours.pk}/evidence/1/report.html")
    policy = answer.headers["Content-Security-Policy"]
    assert "script-src" not in policy and "'sha256-" in policy
    assert client.get(f"/runs/{ten_hours.pk}/evidence/1/report.pdf").content[:5] == b"%PDF-"
    taken = AuditEntry.objects.filter(action="export evidence").order_by("pk")
    assert [entry.after["form"] for entry in taken] == ["report", "PDF"]


def test_where_pango_is_missing_the_page_says_print(ten_hours, monkeypatch):
    monkeypatch.setattr("labmon.evidence.package.can_write_pdf", lambda: False)
    made(ten_hours)
    client = client_of(Role.RESEARCHER)
    assert "print the report from the browser" in page(client, ten_hours)
    assert client.get(f"/runs/{ten_hours.pk}/evidence/1/report.pdf").status_code == 404


def test_a_guest_takes_nothing(ten_hours):
    made(ten_hours)
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(ten_hours.taps.get().station)
    client = Client()
    client.force_login(guest)
    assert client.get(f"/runs/{ten_hours.pk}/evidence/1.zip").status_code == 403
    assert "Evidence" not in client.get(f"/runs/{ten_hours.pk}/").content.decode()


def test_one_at_a_time_and_numbers_go_on(ten_hours):
    ledger = ledger_of(ten_hours)
    ask_evidence(ledger, by=None)
    with pytest.raises(WriteError, match="is being made"):
        ask_evidence(ledger, by=None)
    make_waiting_evidence()
    assert ask_evidence(ledger, by=None).number == 2


def test_late_readings_are_told_on_the_page(ten_hours):
    evidence = ask_evidence(ledger_of(ten_hours), by=None)
    write_er(ten_hours.taps.get(), [3.0 * HOUR + second for second in range(60)], 30.0, boot="spool")
    make_waiting_evidence()
    evidence.refresh_from_db()
    assert evidence.made_at is None and "Make a new version of the ledger" in evidence.fault
    assert "60 s are another class now" in page(client_of(Role.RESEARCHER), ten_hours)
    assert list(place_of(evidence).parent.iterdir()) == [], "nothing half-written is left"


def test_what_a_dead_worker_left_is_taken_up(ten_hours):
    evidence = ask_evidence(ledger_of(ten_hours), by=None)
    RunEvidence.objects.filter(pk=evidence.pk).update(beat_at=timezone.now())
    assert make_waiting_evidence() == []
    RunEvidence.objects.filter(pk=evidence.pk).update(beat_at=timezone.now() - LEFT_AFTER * 2)
    assert make_waiting_evidence() == [evidence.pk]


def verify(path):
    out = io.StringIO()
    call_command("verify_evidence", str(path), stdout=out)
    return out.getvalue()


def test_the_command_verifies_and_knows_its_own(ten_hours):
    said = verify(place_of(made(ten_hours)))
    assert f"made here for run {ten_hours.pk}, version 1 of its ledger" in said
    assert "All agrees, to the second: length 36000 s, good 32400 s, below limit 1200 s, untrusted 600 s" in said


def changed_package(path, name, change):
    """The ZIP with one file changed, as an unpacking, editing and packing gives it."""
    other = path.with_name("other.zip")
    with zipfile.ZipFile(path) as old, zipfile.ZipFile(other, "w") as new:
        for info in old.infolist():
            content = old.read(info)
            new.writestr(info.filename, change(content) if info.filename.endswith(name) else content)
    return other


@pytest.mark.parametrize(("name", "change", "said"), [
    ("ledger.csv", lambda content: content.replace(b"below limit", b"good"), "data/ledger.csv was changed"),
    ("in.parquet", lambda content: content[:-1] + b"x", "data/readings/bench-a__in.parquet was changed"),
    ("in.csv", lambda content: content.replace(b"\n", b" \n", 1), "data/readings/bench-a__in.csv was changed"),
])
def test_the_command_names_what_was_changed(ten_hours, name, change, said):
    out = io.StringIO()
    other = changed_package(place_of(made(ten_hours)), name, change)
    with pytest.raises(CommandError, match="this is not what labmon made"):
        call_command("verify_evidence", str(other), stdout=out)
    assert said in out.getvalue() and "not known here" in out.getvalue()


def test_the_command_refuses_what_is_no_package(tmp_path):
    (tmp_path / "no.zip").write_bytes(b"no")
    with zipfile.ZipFile(tmp_path / "out.zip", "w") as package:
        package.writestr("../../etc/labmon", "x")
    for name, said in (("no.zip", "cannot be read as a ZIP"), ("out.zip", "do not unpack it"), ("none.zip", "is no file")):
        with pytest.raises(CommandError, match=said):
            call_command("verify_evidence", str(tmp_path / name))
