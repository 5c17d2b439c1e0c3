"""`python -m labkit` is the command line."""

import sys

from labkit.cli import main

sys.exit(main())
