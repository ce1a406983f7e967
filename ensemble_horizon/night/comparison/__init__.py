"""Two versions on the same starts.

In reading order: `named` (in both settings files), `common` (the ground of both), `scores` (against
what came), `comparing` (the stage).
"""
