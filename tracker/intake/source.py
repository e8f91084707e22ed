"""Opening what is given: a CSV file, a Parquet file, a Green Button feed, or a pandas frame.

The form of a file is told by its content, never by its name.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

from tracker.errors import InputError, IntakeError
from tracker.intake.csv_source import CsvSource
from tracker.intake.green_button import GreenButtonSource, is_xml
from tracker.intake.guide import ColumnGuide, matched
from tracker.intake.rows import Source
from tracker.intake.table_source import PARQUET_MAGIC, FrameSource, ParquetSource
from tracker.intake.unpack import opened, packing_of

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Source", "matched", "open_source"]

#: Bytes that tell one form from another.
BEGINNING = 4096


def open_source(given: Path | str | pd.DataFrame, guide: ColumnGuide | None = None) -> Source:
    """Open a file or a frame.

    Parameters
    ----------
    guide : ColumnGuide, optional
        What the headings mean and how the text is written.

    Raises
    ------
    InputError
        If there is no such file.
    IntakeError
        If the file has no headings that can be read.
    """
    if not isinstance(given, (str, Path)):
        return FrameSource(given, guide)
    path = checked_path(given)
    try:
        packing = packing_of(path)
        with opened(path, packing) as file:
            beginning = file.read(BEGINNING)
    except (OSError, EOFError, ValueError) as error:
        raise IntakeError(f"{path}: cannot be read ({error}). Send the file anew.") from error
    if beginning.startswith(PARQUET_MAGIC):
        if packing is not None:
            raise IntakeError(f"{path}: is Parquet that was packed once more. Unpack it.")
        return ParquetSource(path, guide)
    if is_xml(beginning):
        return GreenButtonSource(path, packing, guide)
    return CsvSource(path, packing, guide)


def checked_path(given: Path | str) -> Path:
    """Return the path of a file that is there.

    Raises
    ------
    InputError
        If it is none.
    """
    path = Path(given)
    try:
        if path.is_dir():
            raise InputError(f"{path} is a folder, not a file. Name the files in it.")
        if not path.is_file():
            raise InputError(f"{path} is not there. Check the name and the folder.")
    except ValueError as error:  # a NUL in the name
        raise InputError(f"{os.fspath(path)!r} is no name of a file.") from error
    return path
