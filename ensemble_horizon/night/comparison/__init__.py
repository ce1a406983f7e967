"""Two versions on the same starts.

In reading order: `named` (in both settings files), `members` (which count in both), `gaps` (what
was missing or wrong), `common` (the ground of both), `factors` (noise of calibrations), `scores`
(against what came), `judging` (what is told apart), `comparing` (the stage).
"""
