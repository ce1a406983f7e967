"""The command in forked processes of a program that has loaded it already: many runs are cheap.

Reads a line of JSON a run on stdin, with ``arguments``, ``environ``, ``stderr`` (a file),
``user`` (0 to stay the same), ``kill_at`` (0 for never) and ``folders``; answers with ``status``
as `os.waitstatus_to_exitcode` tells it, and ``changes`` of the folders.
"""

import json
import mmap
import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent / "hooks"))

from sitecustomize import kill_at

from ensemble_horizon.cli.main import main


def run(task, count):
    """In the child: the command, until it ends or is killed."""
    os.setsid()
    with Path(task["stderr"]).open("wb") as stream:
        os.dup2(stream.fileno(), 1)
        os.dup2(stream.fileno(), 2)
    os.environ.update(task["environ"])
    if task["user"]:
        os.setgroups([])
        os.setgid(task["user"])
        os.setuid(task["user"])
    status = 1
    try:
        kill_at(task["kill_at"], task["folders"], count)
        main(task["arguments"])
    except SystemExit as end:
        status = end.code if isinstance(end.code, int) else int(end.code is not None)
    finally:
        sys.stderr.flush()
        os._exit(status)


if __name__ == "__main__":
    try:
        main(sys.argv[1:])  # loads what loads late
    except SystemExit as end:
        assert not end.code, end.code
    for line in sys.stdin:
        task, count = json.loads(line), mmap.mmap(-1, 4)
        child = os.fork()
        if child == 0:
            run(task, count)
        _, status = os.waitpid(child, 0)
        found = {
            "status": os.waitstatus_to_exitcode(status),
            "changes": int.from_bytes(count[:4], "little"),
        }
        print(json.dumps(found), file=sys.__stdout__, flush=True)
