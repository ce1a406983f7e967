"""Two versions on the same starts.

In reading order: `named` (in both settings files), `common` (the ground of both), `comparing` (the
stage).
"""
