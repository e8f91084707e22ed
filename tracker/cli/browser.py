"""Opening a page in the person's browser, where there is one."""

from __future__ import annotations

import os
import sys
import webbrowser


def open_in_browser(url: str) -> None:
    """Open a page, unless this machine has no screen: a browser in the terminal helps nobody."""
    has_screen = sys.platform in ("win32", "darwin") or any(
        os.environ.get(name) for name in ("DISPLAY", "WAYLAND_DISPLAY")
    )
    if has_screen:
        webbrowser.open(url)
