"""A password's hash as mosquitto's password file has it: PBKDF2 (RFC 8018) with HMAC-SHA-512.

Form: ``$7$iterations$salt$hash``, salt and hash in base64 (read in files that mosquitto_passwd 2.0 wrote; tests compare).
"""

import base64
import hashlib
import hmac
import secrets

ITERATIONS = 101
"""mosquitto_passwd's own number. More would buy nothing: a station key is 256 random bits, not a word to be guessed."""
_SALT_BYTES, _HASH_BYTES = 12, 64


def broker_hash_of(password: str) -> str:
    """A new hash with a salt of its own."""
    return _hash(password, secrets.token_bytes(_SALT_BYTES), ITERATIONS)


def is_hash_of(kept: str, password: str) -> bool:
    """Whether a kept hash is of this password."""
    try:
        _, kind, iterations, salt, _ = kept.split("$")
        return kind == "7" and hmac.compare_digest(kept, _hash(password, base64.b64decode(salt), int(iterations)))
    except ValueError:
        return False


def _hash(password: str, salt: bytes, iterations: int) -> str:
    made = hashlib.pbkdf2_hmac("sha512", password.encode(), salt, iterations, _HASH_BYTES)
    return f"$7${iterations}${base64.b64encode(salt).decode()}${base64.b64encode(made).decode()}"
