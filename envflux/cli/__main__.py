"""`python -m envflux.cli` does what the command `envflux` does."""

import sys

from envflux.cli import main

sys.exit(main())
