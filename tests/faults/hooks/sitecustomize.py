"""Put on PYTHONPATH of a command under test: kills it, stops it or turns its clock, as asked.

``FAULT_KILL_AT=N``: SIGKILL before the Nth change of the folders in ``FAULT_FOLDERS``.
``FAULT_PAUSE_AT=WORDS``, ``FAULT_FIFO=PATH``: each line of the log that holds the words waits until
something is written into the FIFO. ``FAULT_OPENED=FILE``: names of the files that were opened.
"""

import os
import signal
import sys
from pathlib import Path

_PATHS = {
    "os.rename": (0, 1), "os.link": (0, 1), "os.remove": (0,), "os.mkdir": (0,), "os.rmdir": (0,),
    "os.truncate": (0,),
}  # fmt: skip
_WRITES = os.O_WRONLY | os.O_RDWR | os.O_CREAT


def changes_of(folders):
    """A function that says of an audit event whether it is about to change one of the folders."""
    inside = tuple(f"{folder}/" for folder in folders)

    def changes(event, args):
        if event == "open":
            path, _, flags = args
            return bool(flags & _WRITES) and isinstance(path, str) and path.startswith(inside)
        places = [args[n] for n in _PATHS.get(event, ())]
        # Inside of a tree that is being removed names count from an open folder.
        bare = event in ("os.remove", "os.rmdir") and args[-1] not in (None, -1)
        named = [os.fspath(place) for place in places if not isinstance(place, int)]
        return bare or any(place.startswith(inside) for place in named)

    return changes


def kill_at(number, folders, count=None):
    """Kill this process before its change ``number`` of the folders; 0 for never, only count."""
    changes, seen = changes_of(folders), [0]

    def watch(event, args):
        if not changes(event, args):
            return
        seen[0] += 1
        if count is not None:
            count[:4] = seen[0].to_bytes(4, "little")
        if seen[0] == number:
            os.kill(os.getpid(), signal.SIGKILL)

    sys.addaudithook(watch)


class _Pausing:
    """A stream on which some lines wait, after they have been written."""

    def __init__(self, stream, words, fifo):
        self._stream, self._words, self._fifo = stream, words, fifo

    def write(self, text):
        count = self._stream.write(text)
        if self._words in text:
            self._stream.flush()
            with Path(self._fifo).open() as fifo:
                fifo.read()
        return count

    def __getattr__(self, name):
        return getattr(self._stream, name)


def _note_opened(path):
    descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o644)

    def watch(event, args):
        if event == "open" and isinstance(args[0], str):
            os.write(descriptor, args[0].encode(errors="replace") + b"\n")

    sys.addaudithook(watch)


if "FAULT_KILL_AT" in os.environ:
    kill_at(int(os.environ["FAULT_KILL_AT"]), os.environ["FAULT_FOLDERS"].split(os.pathsep))
if "FAULT_PAUSE_AT" in os.environ:
    sys.stderr = _Pausing(sys.stderr, os.environ["FAULT_PAUSE_AT"], os.environ["FAULT_FIFO"])
if "FAULT_OPENED" in os.environ:
    _note_opened(os.environ["FAULT_OPENED"])
