"""Starts with a past, and options with which every method of perturbation works on them."""

import functools

import numpy as np

from ensemble_horizon import toys

RING = toys.system("lorenz-96")
CHANNEL = toys.system("two-layer-channel")
FLOATS = toys.system("double-gyre-floats")
SPAN = {"lorenz-96": 4.0, "two-layer-channel": 0.5, "double-gyre-floats": 5.0}
LENGTH = {"lorenz-96": 2.0, "two-layer-channel": 1.0e6, "double-gyre-floats": 1.0e4}
TIME = 40.0


@functools.cache
def past_and_now(name):
    """Two states of one run, ``SPAN`` apart; the later one is valid at ``TIME``."""
    system = toys.system(name)
    if name == "two-layer-channel":
        # It settles on a steady jet; the waves that it begins with tell more.
        past = toys.integrate(system, system.default_state(), 48).states[-1]
    else:
        past = toys.settled(system)
    steps = round(SPAN[name] / system.step)
    run = toys.integrate(system, past, steps, every=steps, time=TIME - SPAN[name])
    return past, run.states[-1]


def options(method, name):
    """Options of a method for the start of ``past_and_now``."""
    system, span = toys.system(name), SPAN[name]
    past, _ = past_and_now(name)
    if method == "lagged":
        error = 0.01 * np.abs(past).max()
        past = toys.perturb(system, past, 6, amplitude=error, seed=17)
        return {"past": past, "ages": np.full(6, span)}
    return {
        "gaussian": {},
        "correlated": {"length": LENGTH[name]},
        "bred-vectors": {"past": past, "cycle": span / 4, "cycles": 4},
        "backward-lyapunov-vectors": {"past": past, "span": span},
        "singular-vectors": {"window": span / 4},
    }[method]


def carried(system, state, moved, steps):
    """Infinitesimal displacements (K, N) about a state (N,), so many steps later."""
    state = state[None]
    for _ in range(steps):
        state, moved = toys.tangent_step(system, state, moved, system.step)
    return moved
