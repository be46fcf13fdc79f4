"""The running server, as a process of its own on a free port of this machine: starts, answers, stops."""

import http.client
import os
import re
import signal
import socket
import subprocess
import sys
import time
from contextlib import contextmanager
from urllib.parse import quote

import pytest

TILE = "tiles/00c0ffee00c0ffee/z0.50/gas/0/1/0/1"
WAIT = 60  # seconds, of which a start needs about one


@contextmanager
def serving(*arguments):
    """A server process and the port that it said; ended by its own id, whatever happens."""
    process = subprocess.Popen(
        [sys.executable, "-m", "tilemap", "serve", *map(str, arguments), "--port", "0"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    try:
        said = process.stdout.readline()
        found = re.search(r"http://127\.0\.0\.1:(\d+)/", said)
        assert found, said + process.stderr.read()
        yield process, int(found[1])
    finally:
        if process.poll() is None:
            process.terminate()
        process.communicate(timeout=WAIT)


def ask(port, path, method="GET", headers=None):
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=WAIT)
    connection.request(method, path, headers=headers or {})
    response = connection.getresponse()
    body = response.read()
    connection.close()
    return response, body


def answers(port):
    try:
        socket.create_connection(("127.0.0.1", port), timeout=1).close()
    except OSError:
        return False
    return True


@pytest.fixture(scope="module")
def port(made_atlas):
    with serving(made_atlas) as (_, number):
        yield number


def test_the_list_and_a_tile_come_over_the_wire(port, made_atlas):
    listed, _ = ask(port, "/")
    response, body = ask(port, f"/field/{TILE}")
    assert (listed.status, response.status) == (200, 200)
    assert int(response.headers["Content-Length"]) == len(body)
    assert "Content-Encoding" not in response.headers


@pytest.mark.parametrize("path", [f"/field/{TILE}", "/field/atlas.json"])
def test_head_over_the_wire_says_the_length_and_sends_nothing(port, path):
    _, body = ask(port, path)
    head, nothing = ask(port, path, "HEAD")
    assert (head.status, nothing, head.headers["Content-Length"]) == (200, b"", str(len(body)))


def test_not_modified_and_no_content_carry_no_body(port):
    first, _ = ask(port, f"/field/{TILE}")
    again, nothing = ask(port, f"/field/{TILE}", headers={"If-None-Match": first.headers["ETag"]})
    empty, none = ask(port, f"/field/{TILE.replace('gas/0/1/0/1', 'stars/0/0/0/0')}")
    assert (again.status, nothing, empty.status, none) == (304, b"", 204, b"")


def test_connections_are_kept_for_the_next_tile(port):
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=WAIT)
    local = set()
    for _ in range(20):
        connection.request("GET", f"/field/{TILE}")
        assert connection.getresponse().read()
        local.add(connection.sock.getsockname())
    connection.close()
    assert len(local) == 1


def test_a_name_beyond_ascii_works_over_the_wire(own_atlas):
    named = own_atlas.rename(own_atlas.with_name("Sjön & 50%.atlas"))
    with serving(named) as (_, number):
        name = quote("Sjön & 50%")
        assert [ask(number, f"/{name}/{below}")[0].status for below in (TILE, "atlas.json", "")] == [200, 200, 200]


@pytest.mark.parametrize(("number", "code"), [(signal.SIGTERM, 0), (signal.SIGINT, 130)])
def test_a_signal_stops_the_server_and_frees_its_port(made_atlas, number, code):
    with serving(made_atlas) as (process, port):
        os.killpg(process.pid, number)  # to the whole group, as a terminal does with Ctrl-C
        _, said = process.communicate(timeout=WAIT)
        assert process.returncode == code
        assert said.strip() == ("tilemap: interrupted" if code else "")
        assert not answers(port)


def test_nothing_is_left_running_when_the_server_is_killed(made_atlas):
    with serving(made_atlas) as (process, port):
        process.kill()
        process.communicate(timeout=WAIT)
        end = time.monotonic() + WAIT
        while answers(port) and time.monotonic() < end:
            time.sleep(0.05)
        assert not answers(port)


def test_a_port_that_is_taken_is_one_line_and_code_2(made_atlas):
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        ran = subprocess.run(
            [sys.executable, "-m", "tilemap", "serve", str(made_atlas), "--port", str(port)],
            capture_output=True,
            text=True,
            timeout=WAIT,
        )
    assert (ran.returncode, ran.stdout) == (2, "")
    assert ran.stderr == f"tilemap: port {port} on 127.0.0.1 is taken; choose another with --port, or 0 for any\n"


def test_a_host_that_is_not_this_machine_is_one_line_and_code_2(made_atlas):
    ran = subprocess.run(
        [sys.executable, "-m", "tilemap", "serve", str(made_atlas), "--host", "192.0.2.1"],  # RFC 5737: nobody's
        capture_output=True,
        text=True,
        timeout=WAIT,
    )
    assert ran.returncode == 2
    assert ran.stderr.startswith("tilemap: cannot listen on 192.0.2.1") and ran.stderr.count("\n") == 1
