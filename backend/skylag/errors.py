"""The family of exceptions.

SkylagError
  FormatError         a file is not what it says        (path, line)
  NotEnough           too little data for an honest answer   (had, needed, where)
  Unsolvable          the adjustment has no unique answer    (which biases, why)
  Missing             asked for something the archive lacks  (what, nearest there is)
  Refused             a choice outside its allowed range     (name, value, allowed)

A message has four parts: what, which one, the rule, the way out.  Raises nothing itself and imports nothing.
"""

from typing import Any


class SkylagError(Exception):
    """Any failure this program explains to a person."""

    def __init__(self, message: str, **details: Any) -> None:
        super().__init__(message)
        self.message = message
        self.details = details

    def __reduce__(self) -> tuple[Any, ...]:
        """Survive pickling between processes with details kept."""
        return (_rebuild, (type(self), self.message, self.details))


def _rebuild(kind: type[SkylagError], message: str, details: dict[str, Any]) -> SkylagError:
    return kind(message, **details)


class FormatError(SkylagError):
    """A file is not what it says it is; details: path, line."""


class NotEnough(SkylagError):
    """Too little data for an honest answer; details: had, needed, where."""


class Unsolvable(SkylagError):
    """The adjustment has no unique answer; details: which, why."""


class Missing(SkylagError):
    """Asked for something that is not there; details: what, nearest."""


class Refused(SkylagError):
    """A choice outside its allowed range; details: name, value, allowed."""
