"""Application factory. Nothing here runs at import time."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from pathlib import Path

import dash_mantine_components as dmc
from dash import Dash, get_relative_path, html, page_container
from flask import Response
from pandas import DataFrame

from tracker.dashboard.pages import doubtful, missing, ranking, unit
from tracker.errors import TrackerError
from tracker.planning.doubtful import doubtful_connections, doubts_table
from tracker.planning.priority import priority_list
from tracker.reports.tables import csv_text
from tracker.store.engine import Database

PAGES = (ranking, unit, doubtful, missing)
CONTENT_SECURITY_POLICY = (
    "default-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data: blob:; "
    "font-src 'self' data:; object-src 'none'; base-uri 'self'; form-action 'self'; "
    "frame-ancestors 'none'; script-src 'self' "
)
FONTS = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Noto Sans', 'Helvetica Neue', sans-serif"
INDEX = """<!DOCTYPE html>
<html lang="en">
  <head>
    {%metas%}
    <title>{%title%}</title>
    <link rel="icon" href="data:,">
    {%css%}
  </head>
  <body>
    {%app_entry%}
    <footer>{%config%}{%scripts%}{%renderer%}</footer>
  </body>
</html>
"""


def create_app(database: Database) -> Dash:
    """Build the dashboard around an open store."""
    app = Dash(
        "tracker",
        use_pages=True,
        pages_folder="",
        assets_folder=str(Path(__file__).parent / "assets"),
        health_endpoint="health",
        index_string=INDEX,
        meta_tags=[{"name": "viewport", "content": "width=device-width, initial-scale=1"}],
        title="tracker",
        update_title="",
    )
    for page in PAGES:
        page.register(app, database)
    app.layout = _shell
    _add_export(app, database)
    _add_security_headers(app)
    return app


def _shell() -> dmc.MantineProvider:
    return dmc.MantineProvider(
        html.Div(
            [
                html.A("Skip to the content", href="#content", className="skip"),
                html.Header(
                    [
                        html.A("tracker", href=get_relative_path("/"), className="brand"),
                        html.Span("Hot spots and insulation life of distribution transformers"),
                    ],
                    className="top",
                ),
                html.Div(page_container, id="content", tabIndex=-1),
            ]
        ),
        forceColorScheme="light",
        theme={"fontFamily": FONTS, "primaryColor": "blue", "defaultRadius": "sm"},
    )


def _add_export(app: Dash, database: Database) -> None:
    """Let tables be fetched as the files that the commands write."""
    tables: dict[str, Callable[[], DataFrame]] = {
        "priority_list": lambda: priority_list(database),
        "doubtful_connections": lambda: doubts_table(doubtful_connections(database)),
    }

    def _table(name: str) -> Response:
        try:
            text = csv_text(tables[name]())
        except TrackerError as error:
            return Response(f"{error}\n", status=409, mimetype="text/plain")
        return Response(
            text,
            mimetype="text/csv",
            headers={"Content-Disposition": f'attachment; filename="{name}.csv"'},
        )

    for name in tables:
        address = f"{app.config.requests_pathname_prefix}export/{name}.csv"
        app.server.add_url_rule(address, name, partial(_table, name))


def _add_security_headers(app: Dash) -> None:
    def _headers(response: Response) -> Response:
        # Asked at every response: Dash adds an inline script at the first request.
        policy = CONTENT_SECURITY_POLICY + " ".join(app.csp_hashes())
        response.headers["Content-Security-Policy"] = policy
        response.headers["X-Content-Type-Options"] = "nosniff"
        response.headers["Referrer-Policy"] = "same-origin"
        return response

    app.server.after_request(_headers)
