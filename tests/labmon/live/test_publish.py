"""Browsers hear of a change after its commit, and only then; a dead broker costs the hint."""

import asyncio

import pytest
from asgiref.sync import async_to_sync
from channels.layers import get_channel_layer
from django.db import transaction
from redis.exceptions import ConnectionError as Gone

from labmon.live import publish as publish_module
from labmon.live.publish import LAB_GROUP, publish

pytestmark = pytest.mark.django_db(transaction=True)
CHANGE = {"kind": "tap", "ids": [1, 2]}


def test_change_arrives_at_the_group_through_the_real_broker():
    async def heard():
        from asgiref.sync import sync_to_async

        layer = get_channel_layer()
        channel = await layer.new_channel()
        await layer.group_add(LAB_GROUP, channel)
        await sync_to_async(publish)(CHANGE)
        return await layer.receive(channel)

    assert async_to_sync(heard)() == {"type": "lab.changed", "change": CHANGE}


def test_nothing_is_told_of_what_was_rolled_back(monkeypatch):
    told = []
    monkeypatch.setattr(publish_module, "_send", told.append)

    def change_and_fail():
        with transaction.atomic():
            publish(CHANGE)
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        change_and_fail()
    assert told == []


@pytest.mark.parametrize("fault", [Gone("no broker"), ConnectionRefusedError("no broker"), TimeoutError("slow")])
def test_dead_broker_is_noted_and_the_write_stands(monkeypatch, caplog, fault):
    def fail(*_):
        raise fault

    monkeypatch.setattr(publish_module, "async_to_sync", lambda _: fail)
    with transaction.atomic():
        publish(CHANGE)
    assert "publish_failed" in caplog.text


def test_hanging_broker_holds_the_write_up_for_a_moment_only(monkeypatch, caplog):
    class Hanging:
        async def group_send(self, *_):
            await asyncio.Event().wait()

    monkeypatch.setattr(publish_module, "get_channel_layer", Hanging)
    monkeypatch.setattr(publish_module, "PATIENCE_S", 0.05)
    with transaction.atomic():
        publish(CHANGE)
    assert "publish_failed" in caplog.text
