"""Commands: parse, call the stages, print; no arithmetic.

Exit status: 0 done, 1 a fault of ours, 2 settings or usage, 3 the input cannot be used.
"""

from ensemble_horizon.cli.main import main

__all__ = ["main"]
