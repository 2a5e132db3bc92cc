"""Small documents from elsewhere: bounded in size, and in time even when the server trickles."""

from __future__ import annotations

import pytest

from classify.raster import remote


class Trickle:
    """An answer that gives a byte at a time, for ever."""

    def __init__(self, clock):
        self.clock = clock

    def read1(self, size):
        self.clock.now += 1
        return b"."


class Clock:
    now = 0.0

    def monotonic(self):
        return self.now


def test_a_server_that_sends_a_byte_at_a_time_is_not_waited_for(monkeypatch):
    clock = Clock()
    monkeypatch.setattr(remote, "time", clock)
    with pytest.raises(TimeoutError):
        remote._read_in_time(Trickle(clock), deadline=30)
    assert clock.now == 31
