"""Hot spots, insulation life and replacement priorities of distribution transformers.

`open_store` gives the verbs of the command line to notebooks; the formulas alone are in
`tracker.thermal`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from tracker.version import __version__

if TYPE_CHECKING:
    from tracker.api import TransformerStore

__all__ = ["__version__", "open_store"]


def open_store(url: str = "sqlite:///tracker.db") -> TransformerStore:
    """Open a store, making it when there is none.

    Parameters
    ----------
    url : str
        Any SQLAlchemy URL.

    Raises
    ------
    tracker.errors.StoreError
        If the store is at another revision than this program needs.
    """
    from tracker.api import TransformerStore

    return TransformerStore(url)
