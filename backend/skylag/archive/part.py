"""What the parts of an archive share: a way to write in a transaction and a way to read.  Knows no table."""

from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Any

from sqlalchemy.engine import Connection


class Part:
    """A part of an archive: its verbs run through the archive's own transactions.

    write    runs a function of a connection in one transaction and gives what it gives
    reading  opens a connection for reading
    """

    def __init__(
        self,
        write: Callable[[Callable[[Connection], Any]], Any],
        reading: Callable[[], AbstractContextManager[Connection]],
    ) -> None:
        self._write, self._reading = write, reading
