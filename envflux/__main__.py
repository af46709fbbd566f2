"""`python -m envflux` does what the command `envflux` does, also where the path of the environment has spaces."""

from __future__ import annotations

import sys

from envflux.cli import run_process

if __name__ == "__main__":
    sys.exit(run_process())
