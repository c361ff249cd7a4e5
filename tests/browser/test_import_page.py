"""Reading a file in on the page, by hand: send it, look at what it becomes, read it in; again changes nothing."""

from datetime import UTC, datetime, timedelta

from ingest.store.read import read_readings
from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap

BEGIN = datetime(2025, 3, 4, 12, tzinfo=UTC)


def logger_file(count: int) -> bytes:
    """As a logger of a German PC writes: decimal commas, semicolons, local dates; 30 dB on about 1 mW."""
    lines = ["Messung 7", "Datum;Zeit;Port1 (mW);Port2 (mW)"]
    for place in range(count):
        at = BEGIN + timedelta(seconds=place)
        lines.append(f"{at:%d.%m.%Y};{at:%H:%M:%S};{0.998 + place * 1e-5:.5f};{0.000998 + place * 1e-8:.8f}".replace(".", ",")
                     .replace(f"{at:%d,%m,%Y}", f"{at:%d.%m.%Y}"))
    return ("\r\n".join(lines) + "\r\n").encode("cp1252")


def send(page, lab, content: bytes) -> None:
    page.goto(lab.url("/stations/n2/import/"))
    page.set_input_files("input[type=file]", {"name": "lauf.csv", "mimeType": "text/csv", "buffer": content})
    page.click("text=Look at its first lines")
    page.wait_for_selector("#lines-name")


def look(page, zone: str) -> None:
    page.fill("#id_zone", zone)
    page.click("text=Look at it")
    page.wait_for_selector("text=can be read")


def test_a_file_is_proposed_looked_at_and_read_in_once(signed_in, lab):
    tap = make_tap(make_station("n2"), "eom-in")
    page = signed_in(make_person(Role.MANAGER))
    send(page, lab, logger_file(40))
    assert page.input_value("#id_delimiter") == "semicolon"
    assert page.input_value("#id_decimal") == ","
    assert page.input_value("#id_port2-unit") == "mW"
    assert "1 s apart" in page.inner_text("main")
    look(page, "Europe/Berlin")
    first = page.locator("[aria-label='What the first rows become'] tbody tr").first.inner_text()
    assert "2025-03-04 11:00:00" in first
    assert "30.0" in first
    said = page.inner_text("main").replace("\xa0", " ")
    assert "The whole file: 40 readings from 2025-03-04 11:00:00 to 2025-03-04 11:00:39 UTC" in said
    assert "extinction ratio 30.0 dB, 30.0 dB over all (mean of leak)" in said
    assert "Of the first 20 rows, 20 can be read." in page.inner_text("h1")
    page.click("button[value=read] >> nth=0")
    page.wait_for_selector("text=40 rows: 40 stored, 0 known, 0 set aside.")
    held = read_readings(tap.pk, -(2**62), 2**62)
    assert len(held) == 40
    assert held.columns["port1"][0] == 0.998e-3

    send(page, lab, logger_file(60))
    assert page.input_value("#id_zone") == "Europe/Berlin"
    look(page, "Europe/Berlin")
    page.click("button[value=read] >> nth=0")
    page.wait_for_selector("text=60 rows: 20 stored, 40 known, 0 set aside.")
    assert len(read_readings(tap.pk, -(2**62), 2**62)) == 60


def test_a_wrong_zone_is_told_at_its_field_and_nothing_is_stored(signed_in, lab):
    tap = make_tap(make_station("n2"), "eom-in")
    page = signed_in(make_person(Role.MANAGER))
    send(page, lab, logger_file(10))
    page.fill("#id_zone", "Europe/Berln")
    page.click("text=Look at it")
    page.wait_for_selector(".fault")
    assert "s no time zone" in page.inner_text(".fault")
    assert len(read_readings(tap.pk, -(2**62), 2**62)) == 0
