"""A WSGI app in, a server on a free port of this machine out, that notes what is asked and can be slow, gone and back."""

from __future__ import annotations

import contextlib
import socket
import threading
import time
from collections.abc import Callable, Iterable
from typing import Any

from werkzeug.serving import WSGIRequestHandler, make_server


class Quiet(WSGIRequestHandler):
    def log(self, *_: Any) -> None:
        pass


class Live:
    """Serves `app` until `stop`; `start` brings it back at the same address.

    Attributes
    ----------
    asked : list of str
        Paths of all requests, in order.
    delay : callable
        Path to seconds that its answer is held back.
    spoil : callable
        Path and body to the body that is sent.
    refuse : callable
        Path to whether it is answered with 503.
    """

    def __init__(self, app: Callable[..., Iterable[bytes]]) -> None:
        self.app = app
        self.port = 0
        self.asked: list[str] = []
        self.calm()
        self.start()

    def calm(self) -> None:
        self.delay: Callable[[str], float] = lambda path: 0.0
        self.spoil: Callable[[str, bytes], bytes] = lambda path, body: body
        self.refuse: Callable[[str], bool] = lambda path: False
        self.asked.clear()

    def start(self) -> None:
        self._server = make_server("127.0.0.1", self.port, self._answer, threaded=True, request_handler=Quiet)
        self._server.daemon_threads = True
        self._sockets: list[socket.socket] = []
        accept = self._server.get_request

        def get_request() -> tuple[socket.socket, Any]:
            connection, peer = accept()
            self._sockets.append(connection)
            return connection, peer

        self._server.get_request = get_request  # type: ignore[method-assign]
        self.port = self._server.port
        self._thread = threading.Thread(target=self._server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True)
        self._thread.start()

    def stop(self) -> None:
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()
        for connection in self._sockets:  # also those that the browser has opened beforehand
            with contextlib.suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)

    @property
    def address(self) -> str:
        return f"http://127.0.0.1:{self.port}"

    def tiles(self) -> list[tuple[str, ...]]:
        """Epoch, sheet, level, slab, row and column of every tile that was asked for."""
        return [tuple(path.split("/tiles/")[1].split("/")[1:]) for path in self.asked if "/tiles/" in path]

    def _answer(self, environ: dict[str, Any], start: Callable[..., Any]) -> Iterable[bytes]:
        path = environ.get("SCRIPT_NAME", "") + environ["PATH_INFO"]
        self.asked.append(path)
        time.sleep(self.delay(path))
        if self.refuse(path):
            start("503 Service Unavailable", [("Content-Length", "0"), ("Cache-Control", "no-store")])
            return [b""]
        return [self.spoil(path, b"".join(self.app(environ, start)))]
