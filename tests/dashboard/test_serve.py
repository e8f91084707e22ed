"""Serving: the address that is told answers, and what cannot be served is said."""

from __future__ import annotations

import signal
import socket
import subprocess
import sys
import urllib.request
from pathlib import Path

import pytest

from tracker.dashboard.serve import serve
from tracker.errors import InputError

SERVE = """
import signal, sys
from tracker.dashboard.serve import serve
signal.signal(signal.SIGINT, signal.default_int_handler)  # ignored in what runs in the background
serve(sys.argv[1], "127.0.0.1", 0, ready=lambda address: print(address, flush=True))
"""


def test_the_address_told_answers_until_interrupted(tmp_path: Path) -> None:
    """`ready` is told where the page can be opened; Ctrl-C ends it without a traceback."""
    url = f"sqlite:///{tmp_path / 'new.db'}"
    with subprocess.Popen(
        [sys.executable, "-c", SERVE, url],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        try:
            assert process.stdout is not None
            address = process.stdout.readline().strip()
            with urllib.request.urlopen(f"{address}health", timeout=30) as reply:
                assert reply.status == 200
            process.send_signal(signal.SIGINT)
            _, said = process.communicate(timeout=30)
        finally:
            process.kill()  # a server that does not stop must not stop the tests
    assert process.returncode == 0
    assert "Traceback" not in said


def test_a_port_that_is_taken_is_one_clear_line(tmp_path: Path) -> None:
    """Two dashboards on one port: the second says so and how to go on."""
    with socket.create_server(("127.0.0.1", 0)) as other:
        port = other.getsockname()[1]
        with pytest.raises(InputError, match=f"port {port}: Address already in use.*--port"):
            serve(f"sqlite:///{tmp_path / 'new.db'}", "127.0.0.1", port)


@pytest.mark.parametrize("port", [-1, 65_536])
def test_a_number_that_is_no_port(port: int) -> None:
    """The range is said."""
    with pytest.raises(InputError, match="allowed 0 to 65535"):
        serve("sqlite:///never-made.db", "127.0.0.1", port)
