"""Perturbed initial states, one module for a family of methods, and the registry of them.

In reading order: `method` (the record a method is), `random_fields`, `past` (the run up to the
start), `bred`, `lyapunov`, `singular`, `lagged`, `registry`, `members` (the front).
"""
