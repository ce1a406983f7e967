"""Many starts held against analyses and observations.

In reading order: `sources` (what they are held against), `climate`, `scratch`, `reading` (one
block), `faults`, `scores` (places), `maps`, `results`, `cells`, `verifying` (the stage),
`calibrating`, `writing` (products).
"""
