"""``python -m ensemble_horizon``: the command line."""

from ensemble_horizon.cli import main

if __name__ == "__main__":
    main()
