"""Our password hashes and mosquitto's are the same kind."""

import os
import shutil
import subprocess

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.broker_hash import broker_hash_of, is_hash_of

PROGRAM = shutil.which("mosquitto_passwd", path=os.environ.get("PATH", "") + ":/usr/bin")
passwords = st.text(st.characters(codec="utf-8"), max_size=40)


@settings(deadline=None)
@given(passwords, passwords)
def test_a_hash_is_of_its_password_only(password, other):
    kept = broker_hash_of(password)
    assert is_hash_of(kept, password) and is_hash_of(kept, other) == (password == other) and kept != broker_hash_of(password)


@pytest.mark.parametrize("kept", ["", "x", "$6$101$AAAA$AAAA", "$7$many$AAAA$AAAA", "$7$101$A$A", "$7$0$AAAA$AAAA"])
def test_anything_else_is_of_no_password(kept):
    assert not is_hash_of(kept, "x")


@pytest.mark.parametrize("password", ["only-for-tests", "ä space µ"])
def test_mosquittos_own_program_makes_the_same_hash(tmp_path, password):
    """Outside reference: mosquitto_passwd of Debian's mosquitto."""
    if PROGRAM is None:
        pytest.skip("mosquitto_passwd is missing (on Debian: apt-get install mosquitto)")
    file = tmp_path / "passwords"
    subprocess.run([PROGRAM, "-c", "-b", file, "user", password], check=True, capture_output=True)
    kept = file.read_text().strip().split(":", 1)[1]
    assert is_hash_of(kept, password) and not is_hash_of(kept, password + "x")
    assert [len(part) for part in kept.split("$")] == [len(part) for part in broker_hash_of(password).split("$")]
