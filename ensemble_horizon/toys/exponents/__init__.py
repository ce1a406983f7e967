"""Lyapunov exponents of toy systems, each with its interval.

In reading order: `record` (what is found), `orbits` (independent runs to average over), `carrier`
(what is carried along them), `samples` (mean and interval of what was measured), `averaging` (the
run that measures), `tangents` (repeated QR) and `pairs` (two runs), the fronts.
"""
