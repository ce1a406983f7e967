"""What runs in the worker processes of a cluster."""

from __future__ import annotations

import pickle
import threading
from functools import cache
from typing import Any

from threadpoolctl import ThreadpoolController

from ensemble_horizon.night.engine.sharing import install

# A worker may have many threads, but the NetCDF library lets one in, and there is one `shared`.
_ONE_AT_A_TIME = threading.Lock()


def perform(common: Any, payload: bytes) -> Any:
    """Do one task: ``payload`` is a pickled pair of a function and its argument."""
    with _ONE_AT_A_TIME:
        before = install(common)
        try:
            function, task = pickle.loads(payload)
            with _controller().limit(limits=1):
                return function(task)
        finally:
            install(before)


@cache
def _controller() -> ThreadpoolController:
    """Found once, after the libraries were loaded: the search costs as much as a small task."""
    return ThreadpoolController()
