from datetime import timedelta

import pytest
from django.utils import timezone
from hypothesis import given
from hypothesis import strategies as st

from labmon.people.models import SignInTry
from labmon.people.sign_in import FORGET, OF_ACCOUNT, OF_ADDRESS, account_mark, address_mark, begin_try, note_success

NOW = timezone.now()


def after(seconds: float):
    return NOW + timedelta(seconds=seconds)


@given(st.integers(0, 10_000))
def test_the_pause_never_shrinks_and_never_passes_the_longest(failures):
    for patience in (OF_ACCOUNT, OF_ADDRESS):
        pause_s = patience.pause_s(failures)
        assert 0.0 <= pause_s <= patience.pause_s(failures + 1) <= patience.longest_s
        assert (pause_s == 0.0) is (failures < patience.free)


@pytest.mark.django_db
def test_the_pause_of_an_account_doubles_and_holds_for_every_address():
    waits, at_s = [], 0.0
    for number in range(12):
        assert begin_try("asha", f"10.0.0.{number}", after(at_s)) == 0.0
        wait_s = begin_try("asha", "10.9.9.9", after(at_s))
        if not wait_s:
            SignInTry.objects.filter(mark=account_mark("asha")).update(failures=number + 1, paused_until=None)
        waits.append(wait_s)
        at_s += wait_s
    assert waits == [0.0] * 4 + [5.0, 10.0, 20.0, 40.0, 80.0, 160.0, 320.0, 640.0]


@pytest.mark.django_db
def test_a_whole_day_of_guessing_one_account_is_about_a_hundred_guesses():
    """Twelve doublings to the longest pause, then one each 900 s: 86 400 s / 900 s = 96 and the first dozen."""
    at_s, looked_at = 0.0, 0
    while at_s < 86_400:
        wait_s = begin_try("asha", f"10.0.{looked_at // 200}.{looked_at % 200}", after(at_s))
        looked_at += wait_s == 0.0
        at_s += wait_s or 0.1
    assert 96 <= looked_at <= 110


@pytest.mark.django_db
def test_one_address_that_goes_through_many_names_is_paused_too():
    waits = [begin_try(f"name{number}", "10.0.0.1", NOW) for number in range(OF_ADDRESS.free + 1)]
    assert waits == [0.0] * OF_ADDRESS.free + [5.0]
    assert begin_try("name1", "10.0.0.2", NOW) == 0.0


@pytest.mark.django_db
def test_a_right_password_clears_the_account_and_does_not_charge_the_address():
    for number in range(100):
        assert begin_try(f"person{number}", "10.0.0.1", NOW) == 0.0
        note_success(f"person{number}", "10.0.0.1")
    assert SignInTry.objects.get().failures == 0


@pytest.mark.django_db
def test_all_is_forgotten_after_a_day():
    for _ in range(8):
        begin_try("asha", "10.0.0.1", NOW)
    assert begin_try("asha", "10.0.0.1", NOW) > 0.0
    assert begin_try("asha", "10.0.0.1", NOW + FORGET + timedelta(seconds=1)) == 0.0
    assert {row.failures for row in SignInTry.objects.all()} == {1}


def test_marks():
    assert account_mark("Asha ") == account_mark("asha") and account_mark("asha") != account_mark("ash")
    assert address_mark("2001:db8::1") == address_mark("2001:db8::ffff:2") != address_mark("2001:db8:0:1::1")
    assert address_mark("10.0.0.1") != address_mark("10.0.0.2")
    assert address_mark("") == address_mark("") and address_mark("10.0.0.1") != account_mark("10.0.0.1")


@pytest.mark.django_db
def test_no_name_and_no_address_is_kept():
    begin_try("maren-oduya", "203.0.113.7", NOW)
    kept = b"".join(bytes(row.mark) for row in SignInTry.objects.all())
    assert b"maren" not in kept and b"203.0" not in kept
