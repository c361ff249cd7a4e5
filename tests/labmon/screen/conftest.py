"""Each test looks at its own lab."""

import pytest

from labmon.screen.snapshot import snapshot


@pytest.fixture(autouse=True)
def fresh_look():
    snapshot.forget()
