"""``python -m driftwatch`` is the command ``driftwatch``."""

from driftwatch.cli import main

if __name__ == "__main__":
    main(prog_name="driftwatch")
