"""Speed of the toy systems, as ratios measured in one run.

    python tests/benchmarks/toy_speed.py [--all] [--calls N] [--repeat N]

Reports

    (a) 1000 members of Lorenz 1996 (40 sites) over 20 units of time, run together by
        ``toys.integrate``, against one call of scipy's ``solve_ivp`` for each member. scipy gets
        the tolerance whose error over a short time, against a tight reference, comes nearest to
        that of the fixed step; both errors are printed. Calls are timed on a sample of
        members and scaled, or made for all of them with --all;
    (b) the leading exponent of Lorenz 1963 with default settings: seconds, and the half-width of
        its 90 percent interval, with tangent vectors and with pairs of runs of the same length.

The smallest of several repetitions is kept. The numbers are for comparison with one another:
absolute seconds depend on the machine.
"""

from __future__ import annotations

import argparse
import os
import time

# The matrices are small, and threads on them cost more than they save.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.integrate import solve_ivp

from ensemble_horizon import toys

MEMBERS, LENGTH = 1000, 20.0
# Errors double in 0.4 units of time: over two units they are still those of the schemes.
SHORT = 2.0
TOLERANCES = 10.0 ** -np.arange(2.0, 6.01, 0.1)


def timed(function, *arguments, **options):
    """Seconds and result."""
    begun = time.perf_counter()
    result = function(*arguments, **options)
    return time.perf_counter() - begun, result


def scipy_run(system, state, length, tolerance, method="RK45"):
    """The call a practitioner would make; the state at its end."""
    options = {"method": method, "rtol": tolerance, "atol": tolerance}
    solution = solve_ivp(lambda _, x: system.tendency(x), (0.0, length), state, **options)
    return solution.y[:, -1]


def rms(difference):
    """Root mean square over members and variables."""
    return float(np.sqrt(np.mean(np.square(difference))))


def equally_accurate(system, states):
    """Tolerance for scipy, and the errors of the fixed step and of scipy over a short time."""
    reference = np.array([scipy_run(system, x, SHORT, 1e-12, "DOP853") for x in states])
    steps = round(SHORT / system.step)
    ours = rms(toys.integrate(system, states, steps, every=steps).states[-1] - reference)
    found = []
    for tolerance in TOLERANCES:
        theirs = rms(np.array([scipy_run(system, x, SHORT, tolerance) for x in states]) - reference)
        found.append((abs(np.log(theirs / ours)), tolerance, theirs))
    _, tolerance, theirs = min(found)
    return float(tolerance), ours, theirs


def runs(calls, repeat):
    """(a) the whole ensemble at once, against one call after another."""
    system = toys.system("lorenz-96")
    start = toys.settled(system)
    states = toys.perturb(system, start, MEMBERS, amplitude=1.0, seed=1)
    states = toys.settled(system, states)
    tolerance, error, scipy_error = equally_accurate(system, states[:30])
    steps = round(LENGTH / system.step)
    together, apart = [], []
    # By turns, so that whatever else the machine does falls on both.
    for chosen in np.array_split(states[:calls], repeat):
        together.append(timed(toys.integrate, system, states, steps, every=steps)[0])
        seconds = timed(
            lambda part: [scipy_run(system, x, LENGTH, tolerance) for x in part], chosen
        )
        apart.append(seconds[0] / len(chosen))
    ours, each = min(together), min(apart)
    how = "measured" if calls == MEMBERS else f"from {calls} calls"
    print(f"(a) {MEMBERS} members of lorenz-96 over {LENGTH:g} units of time; seconds")
    print(f"    integrate, dt = {system.step:g}               {ours:10.3f}  error {error:.1e}")
    print(
        f"    solve_ivp, rtol = atol = {tolerance:.1e}   {each * MEMBERS:10.1f}  "
        f"error {scipy_error:.1e}  ({how})"
    )
    print(f"    ratio {each * MEMBERS / ours:.0f}    (errors: over {SHORT:g} units, 30 members)")


def exponents(repeat):
    """(b) the leading exponent and its half-width."""
    system = toys.system("lorenz-63")
    print("(b) leading exponent of lorenz-63, 90 percent interval")
    tangents = best(repeat, toys.lyapunov_exponents, system, 1)
    pairs = best(repeat, toys.pair_growth, system, length=tangents[1].length)
    for name, (seconds, found) in (("tangent vectors", tangents), ("pairs of runs", pairs)):
        half = 0.5 * float(found.high[0] - found.low[0])
        print(
            f"    {name:16s} {seconds:6.2f} s   {found.exponents[0]:.5f} +- {half:.5f}   "
            f"{found.members} members, {found.length:.0f} units of time"
        )


def best(repeat, function, *arguments, **options):
    """Least seconds of several, and the result."""
    results = [timed(function, *arguments, **options) for _ in range(repeat)]
    return min(results, key=lambda pair: pair[0])


def main() -> None:
    """Measure, print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--all", action="store_true", help="call scipy for every member")
    parser.add_argument("--calls", type=int, default=30, help="members scipy is timed on")
    parser.add_argument("--repeat", type=int, default=3)
    options = parser.parse_args()
    print(f"{os.cpu_count()} cores, numpy {np.__version__}")
    runs(MEMBERS if options.all else options.calls, options.repeat)
    exponents(options.repeat)


if __name__ == "__main__":
    main()
