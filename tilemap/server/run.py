"""Atlas folders and an address in; serves until told to stop.

granian runs the application: its own threads speak HTTP in native code, and a bare WSGI callable under it gave half of
what nginx gives with the same bytes as a file, where pure Python servers gave a seventh at best (design, section 9).
"""

from __future__ import annotations

import ctypes
import errno
import os
import signal
import socket
import sys
import threading
import time
from collections.abc import Callable, Iterable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

from tilemap.errors import InputError, NotSoError
from tilemap.server.app import make_app
from tilemap.server.shelf import Shelf

THREADS = 8  # they wait for disks and for DuckDB, more than they compute
GRACE = 3  # seconds that requests under way get when the server stops
DIE_WITH_PARENT = 1  # PR_SET_PDEATHSIG of prctl(2)


def serve(
    atlases: Sequence[str | Path], host: str = "127.0.0.1", port: int = 8750, say: Callable[[str], None] = print
) -> None:
    """Serve atlases until SIGTERM (returns) or Ctrl-C (raises KeyboardInterrupt).

    Parameters
    ----------
    atlases
        Atlas folders.
    host, port
        Where to listen; port 0 takes one that is free.
    say
        Told the address once it answers.

    Raises
    ------
    InputError
        If a folder is not an atlas, or the address cannot be had.
    KeyboardInterrupt
        On SIGINT, after the workers have ended.
    """
    from granian import Granian
    from granian.constants import Interfaces

    paths = [os.fspath(Path(path).resolve()) for path in atlases]
    count = len(list(Shelf(paths)))
    port = claim(host, port)
    server = Granian(
        "tilemap",
        address=host,
        port=port,
        interface=Interfaces.WSGI,
        workers=1,
        blocking_threads=THREADS,
        workers_kill_timeout=GRACE,
        websockets=False,
        log_enabled=False,
    )
    received: list[int] = []
    stop = server.signal_handler_interrupt

    def remember(number: int, *rest: Any) -> None:
        received.append(number)
        stop(number, *rest)

    server.signal_handler_interrupt = remember  # type: ignore[method-assign]
    what = "1 atlas" if count == 1 else f"{count} atlases"
    line = f"{what} at {address(host, port)}  (Ctrl-C stops)"
    server.on_startup(lambda: threading.Thread(target=_announce, args=(host, port, line, say), daemon=True).start())
    try:
        server.serve(target_loader=partial(load, paths), wrap_loader=False)
    except SystemExit as end:
        raise NotSoError("the server ended by itself; start it again") from end
    if signal.SIGINT in received:
        raise KeyboardInterrupt


def load(paths: Iterable[str]) -> Callable[..., Iterable[bytes]]:
    """The application, made inside granian's worker process, which must not outlive its parent.

    A Ctrl-C reaches both processes, and the parent then ends the worker; two signals at once leave granian's worker
    waiting for itself (seen with granian 2.8), so this one is kept from it.
    """
    signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(DIE_WITH_PARENT, signal.SIGTERM)
    return make_app(paths)


def claim(host: str, port: int) -> int:
    """A port that can be listened on now: `port` itself, or a free one for 0.

    Raises
    ------
    InputError
        If it is taken, not allowed, or the host is not one of this machine's.
    """
    try:
        family, kind, protocol, _, place = socket.getaddrinfo(
            host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE
        )[0]
        with socket.socket(family, kind, protocol) as probe:
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            probe.bind(place)
            probe.listen()
            return probe.getsockname()[1]
    except OverflowError as failure:
        raise InputError(f"port {port}: ports go from 1 to 65535") from failure
    except OSError as failure:
        if failure.errno == errno.EADDRINUSE:
            raise InputError(f"port {port} on {host} is taken; choose another with --port, or 0 for any") from failure
        if failure.errno == errno.EACCES:
            raise InputError(
                f"port {port} needs more rights than yours; choose one above 1023 with --port"
            ) from failure
        raise InputError(
            f"cannot listen on {host}: {failure.strerror or failure}; --host 127.0.0.1 is this machine"
        ) from failure


def address(host: str, port: int) -> str:
    shown = {"0.0.0.0": "127.0.0.1", "::": "[::1]", "": "127.0.0.1"}.get(host, f"[{host}]" if ":" in host else host)
    return f"http://{shown}:{port}/"


def _announce(host: str, port: int, line: str, say: Callable[[str], None]) -> None:
    """Say the line as soon as the address answers."""
    target = {"0.0.0.0": "127.0.0.1", "::": "::1", "": "127.0.0.1"}.get(host, host)
    end = time.monotonic() + 30
    while time.monotonic() < end:
        time.sleep(0.05)  # the worker is forked meanwhile, while this thread holds no lock
        try:
            socket.create_connection((target, port), timeout=1).close()
        except OSError:
            continue
        say(line)
        return
