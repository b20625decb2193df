"""How tables leave the program."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from astropy.table import QTable

__all__ = ["table_bytes"]


def table_bytes(table: QTable) -> bytes:
    """A table as ECSV."""
    buffer = io.StringIO()
    table.write(buffer, format="ascii.ecsv")
    return buffer.getvalue().encode()
