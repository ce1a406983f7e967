"""Where the work is done: in this process, in worker processes of this machine, or on a cluster.

Results come back in the order of the tasks, so that sums over them are the same to the last bit
wherever they were made, and only a few tasks are under way at a time, so that memory stays flat
however many there are. Workers are processes because the NetCDF library lets one thread in at a
time.
"""

from ensemble_horizon.night.engine.front import (
    Cluster,
    Engine,
    cluster_of,
    headers_mapper,
    usable_cores,
    workers_for,
)
from ensemble_horizon.night.engine.sharing import shared

__all__ = [
    "Cluster",
    "Engine",
    "cluster_of",
    "headers_mapper",
    "shared",
    "usable_cores",
    "workers_for",
]
