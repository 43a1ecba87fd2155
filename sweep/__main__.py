"""`python -m sweep` is the command `sweep`."""

import sys

from sweep.cli import main

sys.exit(main())
