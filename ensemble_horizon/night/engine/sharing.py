"""What all tasks of an engine have in common, once in each process."""

from __future__ import annotations

from typing import Any

_shared: Any = None


def shared() -> Any:
    """What the engine was given for all its tasks."""
    return _shared


def install(common: Any) -> Any:
    """Make ``common`` what `shared` gives in this process; returns what it gave before."""
    global _shared
    before, _shared = _shared, common
    return before
