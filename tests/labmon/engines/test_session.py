"""The test session itself stands on the real engines."""

import os

import pytest
from channels.layers import get_channel_layer
from django.db import connection


@pytest.mark.django_db
def test_database_is_postgresql():
    with connection.cursor() as cursor:
        cursor.execute("select current_setting('server_version_num')::int, current_setting('listen_addresses')")
        version, addresses = cursor.fetchone()
    assert version >= 150000
    if "LABMON_TEST_DATABASE_URL" not in os.environ:
        assert addresses == "", "the embedded server listens on its socket only"


async def test_channel_layer_delivers_through_the_broker():
    layer = get_channel_layer()
    channel = await layer.new_channel()
    await layer.group_add("lab", channel)
    await layer.group_send("lab", {"type": "changed", "ids": [7]})
    assert await layer.receive(channel) == {"type": "changed", "ids": [7]}
    await layer.flush()
