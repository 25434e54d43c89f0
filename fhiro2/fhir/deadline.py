"""Connections that give up on a server that only drips: all of one answer must have come by a deadline.

Socket time-outs start again with each byte. Here every wait for bytes, of headers or body, is cut at what is left of
the time for the whole answer.
"""

from __future__ import annotations

import io
import socket
from collections.abc import Callable
from http.client import HTTPResponse
from typing import Any

from requests.adapters import HTTPAdapter
from urllib3.connection import HTTPConnection, HTTPSConnection
from urllib3.connectionpool import HTTPConnectionPool, HTTPSConnectionPool


def connections(seconds: float, clock: Callable[[], float]) -> HTTPAdapter:
    """An adapter whose answers must be complete ``seconds`` after the request was sent, else a time-out is raised."""

    class Response(HTTPResponse):
        def __init__(self, sock: socket.socket, *args: Any, **options: Any) -> None:
            super().__init__(sock, *args, **options)
            self.fp = io.BufferedReader(_Timed(sock, self.fp.detach(), clock() + seconds, clock))

    class Plain(HTTPConnection):
        response_class = Response

    class Secure(HTTPSConnection):
        response_class = Response

    class PlainPool(HTTPConnectionPool):
        ConnectionCls = Plain

    class SecurePool(HTTPSConnectionPool):
        ConnectionCls = Secure

    adapter = HTTPAdapter()
    adapter.poolmanager.pool_classes_by_scheme = {"http": PlainPool, "https": SecurePool}
    return adapter


class _Timed(io.RawIOBase):
    """The bytes of a socket until a point in time."""

    def __init__(self, sock: socket.socket, stream: io.RawIOBase, until: float, clock: Callable[[], float]) -> None:
        self._socket = sock
        self._stream = stream
        self._until = until
        self._clock = clock
        self._silence = sock.gettimeout()

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: Any) -> int | None:
        left = self._until - self._clock()
        if left <= 0:
            raise TimeoutError("the answer was not complete in time")
        self._socket.settimeout(left if self._silence is None else min(left, self._silence))
        return self._stream.readinto(buffer)

    def close(self) -> None:
        self._stream.close()
        super().close()
