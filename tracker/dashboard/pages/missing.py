"""What is shown for an address that is no page."""

from __future__ import annotations

from typing import Any

from dash import Dash, html, register_page

from tracker.store.engine import Database

#: Dash shows the page of this name where no other fits.
PAGE = "not_found_404"


def layout(**_query: Any) -> html.Main:
    """Return the page."""
    return html.Main(
        [
            html.H1("No such page"),
            html.P(["The ranking is at ", html.A("the start", href="/"), "."]),
        ]
    )


def register(app: Dash, database: Database) -> None:
    """Attach the page to `app`."""
    del app, database
    register_page(PAGE, title="No such page - tracker", layout=layout)
