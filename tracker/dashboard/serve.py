"""Serving the dashboard, with threads: pages send many small requests at once."""

from __future__ import annotations

import socket
from collections.abc import Callable
from contextlib import closing

from waitress.server import create_server

from tracker.dashboard.app import create_app
from tracker.errors import InputError
from tracker.store.schema import open_database

THREADS = 8
HIGHEST_PORT = 65_535


def serve(
    database_url: str, host: str, port: int, *, ready: Callable[[str], None] | None = None
) -> None:
    """Serve the dashboard until interrupted.

    Parameters
    ----------
    database_url : str
        The store.
    host : str
        Address to listen at; 127.0.0.1 is seen from this machine alone.
    port : int
        0 takes any free one.
    ready : callable, optional
        Told the dashboard's address once it answers.

    Raises
    ------
    InputError
        If the port is taken, or host and port are none to listen at.
    StoreError
        If the store cannot be opened.
    """
    if not 0 <= port <= HIGHEST_PORT:
        raise InputError(
            f"port = {port} is no port; allowed 0 to {HIGHEST_PORT}. Name another with --port."
        )
    with _listening(host, port) as listener, closing(open_database(database_url)) as database:
        server = create_server(create_app(database).server, sockets=[listener], threads=THREADS)
        with closing(server):
            if ready:
                ready(f"http://{_shown(host)}:{listener.getsockname()[1]}/")
            server.run()


def _listening(host: str, port: int) -> socket.socket:
    try:
        family = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0][0]
        return socket.create_server((host, port), family=family)
    except OSError as error:
        raise InputError(
            f"cannot listen at {host} port {port}: {error.strerror}. "
            "Stop what runs there, or name others with --host and --port."
        ) from error


def _shown(host: str) -> str:
    return f"[{host}]" if ":" in host else host
