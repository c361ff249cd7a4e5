"""Signing in and one's own keys, as a browser sees them."""

import re

import pytest
from django.contrib.sessions.models import Session
from django.test import Client

from labmon.people.actions import add_person
from labmon.people.keys import live_key
from labmon.people.models import PersonKey, Role, SignInTry
from labmon.people.sign_in import OF_ACCOUNT
from tests.factories import make_person

pytestmark = pytest.mark.django_db
GOOD, WRONG = "a long enough one", "another long one"


@pytest.fixture
def asha():
    return add_person("asha", "researcher", password=GOOD)


def words(answer):
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", answer.content.decode()).replace("\xa0", " "))


def sign_in(client, name, password, **more):
    return client.post("/login/", {"username": name, "password": password}, **more)


def said(answer):
    return re.search(r'role="alert">.*?</div>', answer.content.decode(), re.S).group()


def test_a_pause_comes_after_some_failures_and_says_nothing_of_the_account(client, asha):
    answers = {}
    for name in ("asha", "nobody-at-all"):
        answers[name] = [said(sign_in(client, name, WRONG)) for _ in range(OF_ACCOUNT.free + 1)]
    assert answers["asha"] == answers["nobody-at-all"]
    assert "Name and password do not match" in answers["asha"][0] and "Too many tries. Wait" in answers["asha"][-1]
    assert "Too many tries" in said(sign_in(client, "asha", GOOD)), "a right password is not looked at in a pause"
    SignInTry.objects.update(paused_until=None)
    assert sign_in(client, "asha", GOOD).status_code == 302 and SignInTry.objects.filter(failures__gt=0).count() <= 2


def test_an_ended_account_is_told_as_little(client, asha):
    asha.is_active = False
    asha.save()
    assert said(sign_in(client, "asha", GOOD)) == said(sign_in(client, "nobody-at-all", GOOD))


def test_the_session_is_a_new_one_after_sign_in_and_after_a_new_password(client, asha):
    client.get("/login/")
    session = client.session
    session["planted"] = "by someone else"
    session.save()
    planted = session.session_key
    client.cookies["sessionid"] = planted
    sign_in(client, "asha", GOOD)
    signed = client.session.session_key
    assert signed != planted and not Session.objects.filter(pk=planted).exists()
    other = Client()
    sign_in(other, "asha", GOOD)
    typed = {"old_password": GOOD, "new_password1": "a new and long one", "new_password2": "a new and long one"}
    assert client.post("/you/", typed).status_code == 302
    assert client.session.session_key != signed and not Session.objects.filter(pk=signed).exists()
    assert client.get("/you/").status_code == 200 and other.get("/you/").status_code == 302


def test_cookies_are_for_this_site_and_not_for_scripts(client, asha, settings):
    settings.SESSION_COOKIE_SECURE = settings.CSRF_COOKIE_SECURE = True
    client.get("/login/")
    answer = sign_in(client, "asha", GOOD)
    session, token = answer.cookies["sessionid"], answer.cookies["csrftoken"]
    assert session["httponly"] and session["secure"] and session["samesite"] == "Lax"
    assert token["secure"] and token["samesite"] == "Lax"
    assert client.get("/login/", follow=True).headers["X-Frame-Options"] == "DENY"


def test_a_key_is_made_with_scope_and_end(client):
    client.force_login(make_person(Role.RESEARCHER))
    page = client.post("/you/keys/", {"purpose": "night notebook", "scope": "read", "days": "30"})
    key = PersonKey.objects.get()
    assert (key.scope, key.purpose, (key.expires_at - key.made_at).days) == ("read", "night notebook", 29)
    shown = re.search(r"person-[\w-]+", page.content.decode()).group()
    assert live_key(shown) == key and shown not in client.get("/you/").content.decode()
    assert "night notebook read" in words(client.get("/you/"))
    client.post("/you/keys/", {"scope": "everything"})
    assert PersonKey.objects.count() == 1
    client.post("/you/keys/", {"days": ""})
    assert PersonKey.objects.order_by("-pk")[0].scope == "read" and PersonKey.objects.order_by("-pk")[0].expires_at is None
