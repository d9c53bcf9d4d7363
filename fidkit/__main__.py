"""`python -m fidkit` is the command `fidkit`."""

import sys

from fidkit.cli import main

sys.exit(main())
