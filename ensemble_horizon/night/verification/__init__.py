"""Many starts held against analyses and observations.

In reading order: `gaps`, `sources` (what they are held against), `climate`, `scratch`, `faults`,
`reading` (one block), `scores` (places), `maps`, `results`, `cells`, `starts` (all of a variable),
`verifying` (the stage), `calibrating`, `writing` (products). Night by night: `definition` (what
sums depend on), `past` (starts by the names of files), `shelf` (the archive of sums), `newly` (one
start verified), `pooling` (the sums of several), `rolling` (all of it strung together).
"""
